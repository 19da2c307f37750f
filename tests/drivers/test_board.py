"""The board adapter on a scripted board. Counts are as drivers/firmware/README.md defines them."""

from __future__ import annotations

import math
from collections.abc import Callable
from contextlib import nullcontext
from dataclasses import replace

import pytest
from sweeprig_drivers.board import Board

from sweeprig.conformance import Scripted, perform
from sweeprig.errors import ConfigError, InstrumentRefused, LinkGarbled, OffNotProved
from sweeprig.roles import AdapterSetup, Drive, DriveSetting, Window

CLOCK_HZ = 16_000_000
GATE_TICKS = CLOCK_HZ // 4


@pytest.fixture
def adapter(setups: dict[str, AdapterSetup]) -> Board:
    """Gate 0.25 s, heartbeat 2 s, two pulses a revolution."""
    return Board(setups["board"])


def polls(board: Scripted, texts: list[str]) -> None:
    """The board's answers to FETC:COUN? one after another; the last again and again."""
    left = list(texts)
    board.answers["FETC:COUN?"] = lambda _: left.pop(0) if len(left) > 1 else left[0]


def counts(gate: int, edges: int, ticks: int, age: int = 1000) -> str:
    return f"{gate},{edges},{ticks},{CLOCK_HZ},{age}"


def test_speed_comes_from_edges_over_ticks(adapter: Board, board: Scripted) -> None:
    """Row C16: 100 pulses a second at two a revolution are 3000 rpm, to the tick."""
    readings = perform(adapter.measure(Window(1.0)), board)
    speed = readings["speed"]
    assert speed.value == pytest.approx(3000.0, rel=1e-12)
    assert (speed.unit, speed.channel, speed.flags, speed.at) == ("rpm", "board.speed", (), board.now)
    assert set(readings) == {"speed", "edge_age", "edge_gap"}


def test_only_gates_after_the_first_poll_count(adapter: Board, board: Scripted) -> None:
    """The gate seen at the first poll may be old; a repeated number is the same reading and counts once."""
    old, first, second = counts(7, 99, 99 * 1000), counts(8, 25, 4_000_000), counts(9, 50, 4_000_000)
    polls(board, [old, old, first, first, second])
    speed = perform(adapter.measure(Window(0.5)), board)["speed"]
    assert len(board.sent) == 5
    # 75 edges in 8 000 000 ticks of 16 MHz: 150 Hz, 4500 rpm at two a revolution (independent arithmetic)
    assert speed.value == pytest.approx(4500.0, rel=1e-12)
    assert speed.raw == f"{first} {second}"


def test_u_is_the_statement_and_one_tick(adapter: Board, setups: dict[str, AdapterSetup], board: Scripted) -> None:
    """0.01 % of the reading and 1/Σticks of it, both as half-widths, in quadrature."""
    polls(board, [counts(7, 0, 0), counts(8, 2, 4_000)])
    rpm = 2 / 4_000 * CLOCK_HZ * 30.0
    speed = perform(adapter.measure(Window(0.25)), board)["speed"]
    assert speed.value == pytest.approx(rpm)
    assert speed.u == pytest.approx(math.hypot(rpm * 1e-4, rpm / 4_000) / math.sqrt(3.0), rel=1e-12)
    polls(board, [counts(7, 0, 0), counts(8, 2, 4_000)])
    bare = perform(Board(replace(setups["board"], accuracy={})).measure(Window(0.25)), board)["speed"]
    assert bare.u == pytest.approx(rpm / 4_000 / math.sqrt(3.0), rel=1e-12)


def test_a_short_window_needs_at_most_three_polls(adapter: Board, board: Scripted) -> None:
    """A window of one gate is covered by the first gate that ends, whenever in a gate it begins."""
    for begin in range(50):
        board.now, board.sent = begin * 0.013, []
        perform(adapter.measure(Window(0.25)), board)
        assert 2 <= len(board.sent) <= 3


@pytest.mark.parametrize(
    ("options", "pace"),
    [
        ({}, 0.2),
        ({"gate": "0.15 s"}, 0.12),
        ({"heartbeat": "0.36 s"}, 0.12),
        ({"heartbeat": "0 s"}, 0.2),
        ({"gate": "5 s"}, 0.2),
    ],
)
def test_polls_are_paced_by_gate_and_heartbeat(
    setups: dict[str, AdapterSetup], board: Scripted, options: dict[str, object], pace: float
) -> None:
    """The first poll goes out at once, the others 0.1 to 0.2 s apart: inside a gate and thrice in a heartbeat."""
    adapter = Board(replace(setups["board"], options=options))
    steps = adapter.measure(Window(1.0))
    first = next(steps)
    second = steps.send(board(first))
    steps.close()
    assert (first.message, first.after_s) == (b"FETC:COUN?", 0.0)
    assert second.message == b"FETC:COUN?"
    assert second.after_s == pytest.approx(pace)


def test_missed_gates_cover_nothing_and_are_flagged(adapter: Board, board: Scripted) -> None:
    """A gate that passed between polls was not read: the window waits for one more, and the reading says so."""
    polls(board, [counts(7, 0, 0), counts(10, 25, 4_000_000), counts(11, 25, 4_000_000)])
    speed = perform(adapter.measure(Window(0.5)), board)["speed"]
    assert len(board.sent) == 3
    assert speed.value == pytest.approx(3000.0)
    assert speed.flags == ("gates_missed",)


def test_no_edges_are_no_speed_and_never_zero(adapter: Board, board: Scripted) -> None:
    """The rotor stands: no data with the reason, while the age of the last edge says since when."""
    polls(board, [counts(7, 0, 0, 16_000_000), counts(8, 0, 0, 20_000_000), counts(9, 0, 0, 24_000_000)])
    readings = perform(adapter.measure(Window(0.5)), board)
    assert (readings["speed"].value, readings["speed"].flags) == (None, ("no_data:no_edges",))
    assert readings["edge_age"].value == pytest.approx(1.5)
    assert readings["edge_gap"].value == pytest.approx(1.5)


def test_the_largest_gap_survives_a_restart_of_the_rotor(adapter: Board, board: Scripted) -> None:
    """A rotor that stopped and turned again within the window shows the gap, not only the young last edge."""
    polls(board, [counts(7, 0, 0, 8_000_000), counts(8, 0, 0, 12_000_000), counts(9, 1, 16_000_000, 1_600_000)])
    readings = perform(adapter.measure(Window(0.5)), board)
    assert readings["edge_gap"].value == pytest.approx(0.75)
    assert readings["edge_age"].value == pytest.approx(0.1)
    assert readings["speed"].value == pytest.approx(30.0)


def test_a_first_edge_without_an_interval_gives_no_rate(adapter: Board, board: Scripted) -> None:
    """An edge with no ticks (the first one ever) is left out, so that it does not count without its interval."""
    polls(board, [counts(7, 0, 0), counts(8, 1, 0), counts(9, 25, 4_000_000)])
    assert perform(adapter.measure(Window(0.5)), board)["speed"].value == pytest.approx(3000.0)


def test_gates_that_stand_still_end_the_window(adapter: Board, board: Scripted) -> None:
    """Polling ends two gates and half a second after the window: no data, with the edge age still told."""
    polls(board, [counts(7, 25, 4_000_000, 32_000_000)])
    readings = perform(adapter.measure(Window(0.5)), board)
    assert board.now == pytest.approx(0.01 + 1.5, abs=0.25)
    assert (readings["speed"].value, readings["speed"].flags) == (None, ("no_data:no_gates",))
    assert readings["edge_age"].value == pytest.approx(2.0)


def test_a_window_cut_short_is_flagged(adapter: Board, board: Scripted) -> None:
    """Gates that stop in mid-window leave a speed over what there was, and it says so."""
    polls(board, [counts(7, 0, 0), counts(8, 25, 4_000_000)])
    speed = perform(adapter.measure(Window(2.0)), board)["speed"]
    assert speed.value == pytest.approx(3000.0)
    assert speed.flags == ("short_window",)


def test_a_slow_rotor_is_measured_over_its_intervals(adapter: Board, board: Scripted) -> None:
    """At 1.25 pulses a second most gates are empty; the interval that ends in one gives the exact speed."""
    board.answers["FETC:COUN?"] = slow_rotor(0.8)
    speed = perform(adapter.measure(Window(2.0)), board)["speed"]
    assert speed.value == pytest.approx(37.5, rel=1e-9)


def slow_rotor(period_s: float) -> Callable[[float], str]:
    def answer(now: float) -> str:
        tick = round((now + 10.0) * CLOCK_HZ)
        period = round(period_s * CLOCK_HZ)
        gate = tick // GATE_TICKS
        edges = gate * GATE_TICKS // period - (gate - 1) * GATE_TICKS // period
        return counts(gate, edges, edges * period, tick % period)

    return answer


def test_a_gate_number_that_goes_back_is_a_restarted_board(adapter: Board, board: Scripted) -> None:
    """Its settings are lost, so no reading is made of the rest."""
    polls(board, [counts(700, 25, 4_000_000), counts(2, 25, 4_000_000)])
    with pytest.raises(InstrumentRefused, match=r"restarted during a reading.*gate 2 after gate 700"):
        perform(adapter.measure(Window(0.5)), board)


@pytest.mark.parametrize(
    "text",
    [
        "", "7", "7,25,4000000,16000000", "7,25,4000000,16000000,1,1", "7,25,4E6,16000000,1", "7,25,,16000000,1",
        "-7,25,4000000,16000000,1", "7,-25,4000000,16000000,1", "7,25,-4,16000000,1", "7,25,4000000,0,1",
        "7,25,4000000,16000000,-1", "7,0,4000000,16000000,1", "7,2_5,4000000,16000000,1", "7,25,4000000,16000000,x",
        "SIMULATED,board,1,1,0", "\xff,25,4000000,16000000,1",
    ],
)  # fmt: skip
def test_counts_that_are_none_are_garbled(adapter: Board, board: Scripted, text: str) -> None:
    """Five whole numbers that make sense together, or no reading; the bytes are kept."""
    polls(board, [counts(6, 25, 4_000_000), text])
    with pytest.raises(LinkGarbled, match="board: the reply is no set of five counts") as caught:
        perform(adapter.measure(Window(0.5)), board)
    assert caught.value.partial == text.encode("latin-1")


# Setting


def test_configure_reads_the_power_on_bit_before_clearing(adapter: Board, board: Scripted) -> None:
    """The bit tells of a restart once; a second configure finds it cleared."""
    assert adapter.power_on is None
    perform(adapter.configure(), board)
    assert board.sent == [
        b"*ESR?", b"*CLS", b"SYST:ERR?", b"SYST:COMM:TIM 2000", b"SYST:COMM:TIM?",
        b"SENS:FREQ:APER 0.25", b"SENS:FREQ:APER?", b"SYST:ERR?",
    ]  # fmt: skip
    assert adapter.power_on is True
    perform(adapter.configure(), board)
    assert adapter.power_on is False
    board.event_status = 128
    assert perform(adapter.settings(), board)["event_status"] == "128"


@pytest.mark.parametrize(
    ("query", "text"), [("SYST:COMM:TIM?", "1000"), ("SENS:FREQ:APER?", "1.0"), ("SYST:COMM:TIM?", "")]
)
def test_a_heartbeat_or_gate_that_is_not_taken_is_refused(
    adapter: Board, board: Scripted, query: str, text: str
) -> None:
    """The read-back decides: a drive with another heartbeat than the rig's would stop too late."""
    board.answers[query] = text
    with pytest.raises(InstrumentRefused, match="reads back differently"):
        perform(adapter.configure(), board)


def test_apply_returns_what_the_board_really_makes(adapter: Board, board: Scripted) -> None:
    """25 kHz is 640 ticks of 16 MHz: a duty of 30.3 % becomes 194 of 640 (independent arithmetic)."""
    board.answers["SOUR:PULS:DCYC?"] = "30.3125"
    readings = perform(adapter.apply(DriveSetting(25_000.0, 30.3)), board)
    assert board.sent == [b"SOUR:FREQ 25000", b"SOUR:FREQ?", b"SOUR:PULS:DCYC 30.3", b"SOUR:PULS:DCYC?"]
    assert (readings["pwm_hz"].value, readings["duty_set"].value) == (25_000.0, 30.3125)
    assert (readings["duty_set"].channel, readings["duty_set"].unit) == ("board.duty_set", "%")


@pytest.mark.parametrize(
    ("asked_hz", "made_hz", "taken"),
    [
        # a whole number of ticks next to what was asked (independent arithmetic from the table's 16 MHz and prescalers)
        (24_000.0, 16e6 / 667, True),
        (90_000.0, 16e6 / 178, True),
        (300.0, 16e6 / 53_333, True),
        (50.0, 16e6 / 8 / 40_000, True),
        (1000.0, 1001.5, False),
        (1000.0, 500.0, False),
        (25_000.0, 16e6 / 638, False),
    ],
)
def test_a_frequency_is_confirmed_within_its_quantisation(
    adapter: Board, board: Scripted, asked_hz: float, made_hz: float, taken: bool
) -> None:
    """Half a timer tick and 0.1 % are allowed, more is a refusal, and then the duty is not sent."""
    board.answers["SOUR:FREQ?"] = f"{made_hz:.9E}"
    with nullcontext() if taken else pytest.raises(InstrumentRefused):
        perform(adapter.apply(DriveSetting(asked_hz, 50.0)), board)
    assert (b"SOUR:PULS:DCYC 50" in board.sent) is taken


def test_a_tap_replaces_the_duty(adapter: Board, board: Scripted) -> None:
    """With a potentiometer tap duty and frequency are not the board's: it says no data, not what its pin would do."""
    readings = perform(adapter.apply(DriveSetting(1000.0, 30.0, tap=77)), board)
    assert board.sent == [b"SOUR:FREQ 1000", b"SOUR:FREQ?", b"SOUR:RES:TAP 77", b"SOUR:RES:TAP?"]
    for quantity in ("duty_set", "pwm_hz"):
        assert (readings[quantity].value, readings[quantity].flags) == (None, ("no_data:set_by_tap",))
    board.answers["SOUR:RES:TAP?"] = "76"
    with pytest.raises(InstrumentRefused, match="tap"):
        perform(adapter.apply(DriveSetting(1000.0, 30.0, tap=77)), board)


@pytest.mark.parametrize(
    "setting",
    [
        DriveSetting(1000.0, 100.5),
        DriveSetting(1000.0, math.nan),
        DriveSetting(0.0, 10.0),
        DriveSetting(1e3, 0.0, tap=256),
    ],
)
def test_a_senseless_setting_is_never_sent(adapter: Board, board: Scripted, setting: DriveSetting) -> None:
    """A duty above 100 %, NaN, no frequency or a tap that is not there stop before the board."""
    with pytest.raises(ConfigError, match="cannot be set"):
        perform(adapter.apply(setting), board)
    assert board.sent == []


def test_on_and_off_are_shown(adapter: Board, board: Scripted) -> None:
    """A heartbeat lapse leaves the output off: switching on says so with the queued error."""
    perform(adapter.switch_on(), board)
    perform(adapter.switch_off(), board)
    assert board.settings["OUTP"] == "0"
    board.answers["OUTP?"] = "0"
    board.errors.append('-365,"Time out error;heartbeat"')
    with pytest.raises(InstrumentRefused, match=r"stayed off.*-365"):
        perform(adapter.switch_on(), board)
    board.answers["OUTP?"] = "1"
    with pytest.raises(OffNotProved):
        perform(adapter.switch_off(), board)


def test_it_is_a_drive_and_tells_its_heartbeat(setups: dict[str, AdapterSetup]) -> None:
    """`0 s` is no heartbeat."""
    assert isinstance(Board(setups["board"]), Drive)
    assert Board(setups["board"]).heartbeat_s == 2.0
    assert Board(replace(setups["board"], options={"heartbeat": "0 s"})).heartbeat_s is None


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"options": {"heartbeat": "0.2 s"}}, "'heartbeat' is shorter than three polls"),
        ({"options": {"heartbeat": "11 s"}}, "'heartbeat' is out of range"),
        ({"options": {"gate": "0.1 s"}}, "'gate' is out of range"),
        ({"options": {"baud": 9600}}, "'baud' is not known"),
        ({"dialect": {"kind": "board"}}, "takes no dialect"),
        ({"pulses_per_revolution": 0.0}, "pulses per revolution"),
    ],
)
def test_a_bad_board_entry_is_refused(setups: dict[str, AdapterSetup], change: dict[str, object], text: str) -> None:
    """Each refusal names the option and what to do."""
    with pytest.raises(ConfigError) as caught:
        Board(replace(setups["board"], **change))  # type: ignore[arg-type] # the cases change fields of several types
    assert text in str(caught.value)
    assert caught.value.remedy
