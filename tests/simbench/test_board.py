"""The simulated board: quantisation, gates, heartbeat, checksum, byte time. After drivers/firmware/README.md."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import pytest

from sweeprig.simbench.bench import Happened
from sweeprig.simbench.board import crc8
from sweeprig.simbench.counter import quantise
from sweeprig.simbench.instrument import Instrument

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

BYTE_S = 10 / 115_200


def sealed(line: str) -> str:
    return f"{line}~{crc8(line.encode('ascii')):02X}"


def gate(bed: Bed, board: Instrument) -> list[int]:
    return [int(field) for field in bed.ask(board, "FETC:COUN?").split(",")]


def last_switching(bed: Bed) -> Happened:
    return bed.bench.record[-1]


@pytest.mark.parametrize(
    ("hz", "prescaler", "period"),
    [
        (25_000.0, 1, 640), (1_000.0, 1, 16_000), (250.0, 1, 64_000), (244.2, 8, 8_190), (100.0, 8, 20_000),
        (30.0, 64, 8_333),
    ],
)  # fmt: skip
def test_frequency_becomes_whole_ticks(hz: float, prescaler: int, period: int) -> None:
    """Ticks of a period: 25 kHz, 1 kHz, 250, 100 and 30 Hz as measured on a prototype of the firmware; 244.2 Hz own."""
    setting = quantise(hz, 50.0)
    assert (setting.prescaler, setting.period_ticks) == (prescaler, period)


@pytest.mark.parametrize("hz", [4.0, 30.5, 31.0, 244.2, 244.3, 1037.0, 100_000.0])
def test_quantised_values_are_the_nearest_and_fit_the_timer(hz: float) -> None:
    """Off by at most half a tick, at most 16 bits, and duty likewise."""
    setting = quantise(hz, 33.333)
    assert setting.period_ticks <= 65_536
    assert abs(setting.pwm_hz / hz - 1.0) <= 0.51 / setting.period_ticks
    assert abs(setting.duty_percent - 33.333) <= 50.0 / setting.period_ticks * 1.001


def test_settings_answer_what_is_really_produced(bed: Bed) -> None:
    """25 kHz and 10.1 % are answered as 25 kHz and 65/640 = 10.15625 %, which the plant has got as well."""
    board = bed.board()
    bed.tell(board, "SOUR:FREQ 25000;PULS:DCYC 10.1", "OUTP ON")
    assert [float(x) for x in bed.ask(board, "SOUR:FREQ?;PULS:DCYC?").split(";")] == [25_000.0, 10.15625]
    assert bed.plant.drive == pytest.approx((25_000.0, 10.15625, True))


def test_bytes_take_their_time_both_ways(bed: Bed) -> None:
    """At 115200 baud the answer to `OUTP?` (6 + 2 bytes) takes 8 byte times and the firmware's 0.3 ms."""
    board = bed.board()
    began = bed.bench.now
    assert bed.ask(board, "OUTP?") == "0"
    assert bed.bench.now - began == pytest.approx(8 * BYTE_S + 3e-4, abs=1e-9)


def test_lines_sent_back_to_back_are_all_obeyed_in_order(bed: Bed) -> None:
    """Four lines in one write: each arrives after its bytes, and answers follow one another on the line."""
    board = bed.board()
    board.port.write(b"SOUR:FREQ 500\nSOUR:FREQ?\nSOUR:FREQ 600\nSOUR:FREQ?\n")
    bed.bench.advance(1.0)
    assert [float(x) for x in board.port.read().split()] == pytest.approx([500.0, 600.0], rel=1e-4)


def test_a_gate_counts_whole_intervals_to_within_a_tick(bed: Bed) -> None:
    """edges / ticks × clock is the true pulse rate within one tick over the intervals, at awkward rates too."""
    board = bed.board()
    bed.plant.pulse_hz = 123.4567
    bed.tell(board, "SENS:FREQ:APER 0.25", "SOUR:PULS:DCYC 50", "OUTP ON")
    numbers = []
    for _ in range(8):
        bed.bench.advance(bed.bench.now + 0.25)
        number, edges, ticks, clock_hz, _ = gate(bed, board)
        numbers.append(number)
        assert edges in (30, 31)
        assert abs(ticks - edges / 123.4567 * clock_hz) <= 1.0
    assert numbers == list(range(numbers[0], numbers[0] + 8))


def test_ticks_join_up_without_gap(bed: Bed) -> None:
    """Gate after gate every edge is counted once: the sums over 20 gates are the whole time between two edges."""
    board = bed.board()
    bed.plant.pulse_hz = 57.3
    bed.tell(board, "SENS:FREQ:APER 0.1", "OUTP ON")
    edges = ticks = 0
    for _ in range(20):
        bed.bench.advance(bed.bench.now + 0.1)
        _, in_gate, of_gate, clock_hz, _ = gate(bed, board)
        edges, ticks = edges + in_gate, ticks + of_gate
    assert edges >= 100
    assert abs(ticks - edges / 57.3 * clock_hz) <= 1.0


def test_a_stopped_rotor_gives_empty_gates_and_a_growing_edge_age(bed: Bed) -> None:
    """After the last edge gates are 0,0 and the age of that edge is exact to the tick."""
    board = bed.board()
    bed.plant.turns_until = 1.0
    bed.tell(board, "OUTP ON")
    bed.bench.advance(2.0)
    *_, clock_hz, age = gate(bed, board)
    heard = 2.0 + 11 * BYTE_S
    assert age == pytest.approx((heard - bed.plant.last_edge_at) * clock_hz, abs=1.0)
    bed.tell(board, "*OPC")
    assert gate(bed, board)[1:3] == [0, 0]


def test_a_start_from_rest_begins_at_its_first_edge(bed: Bed) -> None:
    """Edges before OUTP ON are no start of an interval: the first gate with edges already has the true rate."""
    board = bed.board()
    bed.tell(board, "SENS:FREQ:APER 0.25")
    bed.plant.turns_from, bed.plant.pulse_hz = 5.0, 40.0
    bed.bench.advance(4.9)
    bed.tell(board, "OUTP ON")
    bed.bench.advance(5.3)
    number, edges, ticks, clock_hz, _ = gate(bed, board)
    assert number == 1
    # the gate ends at 5.1507 s; edges came at 5.025, 5.050 … 5.150 s: six, with five intervals between them
    assert edges == 5
    assert ticks == pytest.approx(5 / 40.0 * clock_hz, abs=1.0)


def test_edges_before_switching_on_do_not_begin_an_interval(bed: Bed) -> None:
    """Turned, stopped and started again 4 s later: the first gate with edges has the true rate, not a 4 s interval."""
    board = bed.board()
    bed.tell(board, "OUTP ON")
    bed.bench.advance(1.0)
    bed.tell(board, "OUTP OFF")
    bed.bench.plant_now()
    bed.plant.stop_and_turn_again(5.05)
    bed.bench.advance(5.0)
    bed.tell(board, "OUTP ON")
    bed.bench.advance(5.26)
    _, edges, ticks, clock_hz, _ = gate(bed, board)
    assert edges >= 18
    assert ticks == pytest.approx(edges / 100.0 * clock_hz, abs=1.0)


def test_coasting_down_with_the_output_off_is_still_counted(bed: Bed) -> None:
    """Gates go on after OUTP OFF, so that a coast-down can be watched."""
    board = bed.board()
    bed.tell(board, "OUTP ON")
    bed.bench.advance(1.0)
    bed.tell(board, "OUTP OFF")
    bed.bench.advance(2.9)
    number, edges, *_ = gate(bed, board)
    assert number == 11
    assert edges == 25


def test_asking_starts_the_gates_while_the_output_is_off(bed: Bed) -> None:
    """With the output never on, the first FETC:COUN? says gate 0 and begins one."""
    board = bed.board()
    assert gate(bed, board)[:3] == [0, 0, 0]
    bed.bench.advance(bed.bench.now + 0.6)
    assert gate(bed, board)[0] == 2


def test_the_prescaler_is_the_counters_clock_too(bed: Bed) -> None:
    """At 100 Hz the clock is 2 MHz; changing over begins new intervals, and the rate stays right."""
    board = bed.board()
    bed.tell(board, "OUTP ON")
    bed.bench.advance(1.1)
    bed.tell(board, "SOUR:FREQ 100")
    bed.bench.advance(2.0)
    _, edges, ticks, clock_hz, _ = gate(bed, board)
    assert clock_hz == 2_000_000
    assert abs(ticks - edges / 100.0 * clock_hz) <= 1.0


def test_the_crystals_error_is_in_frequency_and_count(bed: Bed) -> None:
    """A crystal 0.1 % fast makes 0.1 % more PWM hertz and counts 0.1 % more ticks."""
    board = bed.board(errors={"speed_gain_error_percent": 0.1})
    bed.tell(board, "SOUR:FREQ 1000", "OUTP ON")
    assert bed.plant.drive[0] == pytest.approx(1001.0)
    bed.bench.advance(1.0)
    _, edges, ticks, clock_hz, _ = gate(bed, board)
    assert ticks == pytest.approx(edges / 100.0 * clock_hz * 1.001, abs=1.0)


def test_measured_frequency_is_for_a_person(bed: Bed) -> None:
    """MEAS:FREQ? gives the pulse rate of the last gate, and 9.91E37 when no pulse came in it."""
    board = bed.board()
    assert bed.ask(board, "MEAS:FREQ?") == "9.91E+37"
    bed.tell(board, "OUTP ON")
    bed.bench.advance(2.0)
    assert float(bed.ask(board, "MEAS:FREQ?")) == pytest.approx(100.0, rel=1e-6)


@pytest.mark.parametrize("milliseconds", [100, 250, 2000])
def test_silence_switches_off_at_the_stated_time(bed: Bed, milliseconds: int) -> None:
    """The output goes off exactly the heartbeat time after the LF of the last valid line, with an error queued."""
    board = bed.board()
    bed.tell(board, "*CLS", f"SYST:COMM:TIM {milliseconds}", "SOUR:PULS:DCYC 50", "OUTP ON")
    sent = bed.bench.now
    assert bed.ask(board, "FETC:COUN?")
    bed.bench.advance(sent + 5.0)
    at, what, why = last_switching(bed)
    assert (what, why) == ("drive_off", "heartbeat")
    assert at == pytest.approx(sent + 11 * BYTE_S + milliseconds / 1000.0, abs=1e-9)
    assert bed.plant.settings[-1] == (at, "drive", (1000.0, 50.0, False))
    assert bed.ask(board, "SYST:ERR?") == '-365,"Time out error;heartbeat"'
    assert bed.ask(board, "OUTP?") == "0"


def test_the_output_stays_off_after_a_lapse_until_it_is_asked_for(bed: Bed) -> None:
    """A new duty does not bring the drive back; OUTP ON does."""
    board = bed.board()
    bed.tell(board, "SOUR:PULS:DCYC 50", "OUTP ON")
    bed.bench.advance(3.0)
    bed.tell(board, "SOUR:PULS:DCYC 60")
    assert bed.plant.drive[2] is False
    bed.tell(board, "OUTP ON")
    assert bed.plant.drive == (1000.0, 60.0, True)


def test_asking_keeps_the_heart_beating(bed: Bed) -> None:
    """Asked every 0.9 s with a 1 s heartbeat the drive stays on for a minute."""
    board = bed.board()
    bed.tell(board, "OUTP ON")
    for _ in range(66):
        bed.bench.advance(bed.bench.now + 0.9)
        assert gate(bed, board)
    assert last_switching(bed)[1] == "drive_on"


@pytest.mark.parametrize("noise", [b"FOO\n", b"OUTP?~00\n", b"\n", b"\xff\xfe\n", b"OUTP?" * 40 + b"\n"])
def test_lines_that_are_not_valid_do_not_beat(bed: Bed, noise: bytes) -> None:
    """Row C14: Unknown header, bad checksum, empty, garbled or overlong lines do not keep the drive on."""
    board = bed.board()
    bed.tell(board, "OUTP ON")
    on_at = last_switching(bed)[0]
    for _ in range(4):
        bed.bench.advance(bed.bench.now + 0.3)
        board.port.write(noise)
    bed.bench.advance(on_at + 1.5)
    off = last_switching(bed)
    assert (off.what, off.why) == ("drive_off", "heartbeat")
    assert off.at == pytest.approx(on_at + 1.0, abs=1e-9)


def test_no_heartbeat_is_only_to_be_had_with_the_output_off(bed: Bed) -> None:
    """TIM 0 is -221 while the output is on; off it is taken, and then silence switches nothing off."""
    board = bed.board()
    bed.tell(board, "*CLS", "OUTP ON", "SYST:COMM:TIM 0")
    assert bed.ask(board, "SYST:ERR?").startswith("-221,")
    bed.tell(board, "OUTP OFF", "SYST:COMM:TIM 0", "OUTP ON")
    bed.bench.advance(bed.bench.now + 100.0)
    assert float(bed.ask(board, "SYST:COMM:TIM?")) == 0.0
    assert last_switching(bed)[1] == "drive_on"


def test_a_longer_heartbeat_counts_from_now(bed: Bed) -> None:
    """Changed while on, the new time counts from that line."""
    board = bed.board()
    bed.tell(board, "OUTP ON", "SYST:COMM:TIM 3000")
    changed = bed.bench.now
    bed.bench.advance(changed + 10.0)
    assert last_switching(bed)[0] == pytest.approx(changed + 3.0, abs=0.03)


@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("SYST:COMM:TIM 50", -222), ("SYST:COMM:TIM 20000", -222), ("SOUR:FREQ 1", -222), ("SOUR:FREQ 200000", -222),
        ("SOUR:PULS:DCYC 101", -222), ("SOUR:PULS:DCYC -1", -222), ("SOUR:RES:TAP 256", -222),
        ("SENS:FREQ:APER 0", -222),
        ("OUTP MAYBE", -224), ("SOUR:FREQ ABC", -104), ("SOUR:FREQ 1 V", -131), ("SOUR:FREQ", -109), ("OUTP 1,1", -108),
    ],
)  # fmt: skip
def test_wrong_settings_are_refused_by_number(bed: Bed, message: str, code: int) -> None:
    """Never a silent ignore: each has its standard error, and the drive is untouched."""
    board = bed.board()
    bed.tell(board, "*CLS", message)
    assert bed.ask(board, "SYST:ERR?").startswith(f"{code},")
    assert bed.plant.settings == []


def test_reset_and_power_cycle_switch_the_drive_off(bed: Bed) -> None:
    """*RST and a restart leave the output off, with the reason on record, and defaults everywhere."""
    board = bed.board()
    bed.tell(board, "SOUR:FREQ 300", "SOUR:RES:TAP 7", "OUTP ON", "*RST")
    assert last_switching(bed)[1:] == ("drive_off", "*RST")
    answers = bed.ask(board, "SOUR:FREQ?;RES:TAP?;:OUTP?;:SYST:COMM:TIM?").split(";")
    assert [float(x) for x in answers] == [1000.0, 0.0, 0.0, 1000.0]
    bed.tell(board, "OUTP ON")
    board.power_on()
    assert last_switching(bed)[1:] == ("drive_off", "power")
    assert bed.ask(board, "*ESR?;OUTP?") == "128;0"


def test_the_checksum_has_its_published_check_value() -> None:
    """CRC-8, polynomial 0x07, initial value 0x00, of "123456789" is 0xF4 (table of drivers/firmware/README.md)."""
    assert crc8(b"123456789") == 0xF4


def test_once_seen_the_checksum_is_required_until_reset(bed: Bed) -> None:
    """Unsealed lines are refused after a sealed one; a wrong one always is; *RST (sealed) lifts it."""
    board = bed.board()
    assert bed.ask(board, sealed("*CLS;*OPC?")) == "1"
    assert bed.ask(board, "*OPC?", within_s=1.0) == ""
    assert bed.ask(board, "*OPC?~00", within_s=1.0) == ""
    assert bed.ask(board, sealed("SYST:ERR?")).startswith("-361,")
    bed.tell(board, sealed("*RST"))
    assert bed.ask(board, "*OPC?") == "1"


def test_no_edge_at_all_has_an_age_since_power_on(bed: Bed) -> None:
    """Before the first edge the age counts from power-on."""
    bed.plant.turns_from = math.inf
    board = bed.board()
    bed.plant.turns_until = 0.0
    bed.plant.turns_from = 0.0
    bed.bench.advance(1.0)
    assert gate(bed, board)[4] == pytest.approx((1.0 + 11 * BYTE_S) * 16e6, abs=1.0)


@pytest.mark.parametrize(("says_so", "looks"), [(False, 210), (True, 52)])
def test_a_rotor_at_rest_is_looked_at_less_often(
    bed: Bed, monkeypatch: pytest.MonkeyPatch, says_so: bool, looks: int
) -> None:
    """A plant that says that its rotor rests is looked at every 20 ms instead of 5 until the first edge, 1.05 s after
    switching on; the counts are the same: the first gate after it has whole intervals, as has every other."""
    asked: list[float] = []
    at = bed.bench.at

    def noting(time: float, callback: Callable[[Any], None], argument: object) -> None:
        asked.extend([time] if "first_edge" in callback.__name__ else [])
        at(time, callback, argument)

    monkeypatch.setattr(bed.bench, "at", noting)
    if says_so:
        turning = property(lambda plant: plant.now >= plant.turns_from + 0.04)
        monkeypatch.setattr(type(bed.plant), "turning", turning, raising=False)
    board = bed.board()
    bed.plant.pulse_hz, bed.plant.turns_from = 20.0, 1.0
    board.port.write(b"OUTP ON\n")
    bed.bench.advance(1.3)
    # edges at 1.05, 1.10, … 1.25 s: four whole intervals of 0.05 s of a 16 MHz clock in the gate that ends at 1.25 s
    number, edges, ticks = gate(bed, board)[:3]
    assert (number, edges) == (5, 4)
    assert ticks == pytest.approx(4 * 0.05 * 16e6, abs=1.0)
    assert len(asked) == pytest.approx(looks, abs=3)
