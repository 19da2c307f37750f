"""The simulated generator, thermometer, sound-level meter, line tachometer, timer and the supply's trips."""

from __future__ import annotations

import itertools
import math
from typing import TYPE_CHECKING

import pytest

from sweeprig.errors import ConfigError
from sweeprig.quantities import Accuracy
from sweeprig.simbench.generator import Generator
from sweeprig.simbench.pwm_timer import DRIFTS, PwmTimer
from sweeprig.simbench.sound_meter import SoundMeter
from sweeprig.simbench.tachometer import LineTachometer
from sweeprig.simbench.thermometer import Thermometer

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

# Generator


@pytest.fixture
def generator(bed: Bed) -> Generator:
    """At the gate, told that it is on no load, 5 V and 0 V."""
    made = bed.add(Generator, "drive_signal")
    bed.bench.gate_from = made.name
    bed.tell(made, "OUTP:LOAD INF", "SOUR:VOLT:HIGH 5", "SOUR:VOLT:LOW 0")
    return made


def test_the_generator_drives_the_gate(bed: Bed, generator: Generator) -> None:
    """Frequency and duty reach the switch and the scope's signal; off is off, and both are on record."""
    bed.tell(generator, "SOUR:FREQ 25 KHZ", "SOUR:PULS:DCYC 33.3", "OUTP ON")
    assert bed.plant.drive[:2] == pytest.approx((25e3, 33.3))
    assert bed.bench.signal.pwm_hz == pytest.approx(25e3)
    assert (bed.plant.drive[2], bed.bench.signal.on) == (True, True)
    bed.tell(generator, "OUTP OFF")
    assert bed.plant.drive[2] is False
    assert [happened.what for happened in bed.bench.record] == ["drive_on", "drive_off"]


def test_it_goes_on_when_the_host_falls_silent(bed: Bed, generator: Generator) -> None:
    """An hour without a message: still on."""
    bed.tell(generator, "OUTP ON")
    bed.bench.advance(3600.0)
    assert bed.plant.drive[2] is True


@pytest.mark.parametrize(
    ("messages", "percent"),
    [
        (["SOUR:FUNC DC", "SOUR:VOLT:OFFS 5"], 100.0), (["SOUR:FUNC DC", "SOUR:VOLT:OFFS 0"], 0.0),
        (["SOUR:VOLT:HIGH 2"], 0.0), (["SOUR:VOLT:HIGH 2", "OUTP:LOAD 50"], 40.0), (["SOUR:VOLT:LOW 3"], 100.0),
    ],
)  # fmt: skip
def test_levels_decide_whether_the_switch_conducts(
    bed: Bed, generator: Generator, messages: list[str], percent: float
) -> None:
    """Constant levels are 0 and 100 %; 2 V is below the gate's 2.5 V, unless a 50 ohm setting doubles it."""
    bed.tell(generator, "SOUR:PULS:DCYC 40", *messages, "OUTP ON")
    assert bed.plant.drive[1] == pytest.approx(percent)


@pytest.mark.parametrize(
    ("message", "code"),
    [("SOUR:PULS:DCYC 0", -222), ("SOUR:PULS:DCYC 100", -222), ("SOUR:FREQ 2E6", -222), ("SOUR:FUNC SIN", -224),
     ("SOUR:VOLT:LOW 6", -221), ("SOUR:VOLT:HIGH -1", -221), ("OUTP:LOAD NONE", -104)],
)  # fmt: skip
def test_what_it_cannot_do_is_queued(bed: Bed, generator: Generator, message: str, code: int) -> None:
    """A rectangle has no 0 and 100 %, and the low level stays below the high one."""
    bed.tell(generator, message)
    assert bed.ask(generator, "SYST:ERR?").startswith(f"{code},")


def test_a_generator_that_is_not_wired_drives_nothing(bed: Bed) -> None:
    """Without `connected_to = "drive_signal"` its output is on nothing."""
    made = bed.add(Generator)
    bed.tell(made, "OUTP:LOAD INF", "SOUR:VOLT:HIGH 5", "OUTP ON")
    assert bed.plant.drive == (1000.0, 0.0, False)
    assert bed.bench.record == []
    assert bed.ask(made, "OUTP?") == "1"


def test_the_boards_pin_is_free_where_a_generator_is_wired(bed: Bed, generator: Generator) -> None:
    """The board's OUTP ON moves no gate then, and its tachometer still counts."""
    board = bed.board()
    bed.tell(generator, "OUTP ON")
    before = bed.plant.drive
    bed.tell(board, "SOUR:PULS:DCYC 90", "OUTP ON")
    assert bed.plant.drive == before
    bed.bench.advance(bed.bench.now + 0.6)
    assert int(bed.ask(board, "FETC:COUN?").split(",")[1]) > 0


def test_reset_and_power_on_switch_it_off(bed: Bed, generator: Generator) -> None:
    """*RST and a power cycle: output off, a 50 ohm load as at first, and the power-on bit after the second."""
    bed.tell(generator, "*CLS", "OUTP ON", "*RST")
    assert (bed.ask(generator, "OUTP?"), float(bed.ask(generator, "OUTP:LOAD?"))) == ("0", 50.0)
    bed.tell(generator, "OUTP ON")
    generator.power_on()
    assert (bed.ask(generator, "OUTP?"), bed.ask(generator, "*ESR?")) == ("0", "128")


# Thermometer


def test_a_sensor_lags_behind_the_winding(bed: Bed) -> None:
    """A winding that jumps from 20 to 60 degC, seen each second with a lag of 5 s: 63 % of it after one lag.

    The step is spread over the first second, so the closed form is that of a ramp and then a constant (independent
    arithmetic); 0.01 K resolution.
    """
    thermometer = bed.add(Thermometer, options={"winding": 1}, errors={"temperature_noise": 0.0, "sensor_lag_s": 5.0})
    assert float(bed.ask(thermometer, "MEAS:TEMP? (@1)")) == pytest.approx(20.0)
    began = bed.bench.now - 1e-3
    bed.plant.winding_degc = 60.0
    bed.bench.advance(began + 1.0 - 0.1)
    after_ramp = 60.0 - 40.0 * 5.0 * (1.0 - math.exp(-0.2))
    assert float(bed.ask(thermometer, "MEAS:TEMP? (@1)")) == pytest.approx(after_ramp, abs=0.01)
    bed.bench.advance(began + 6.0 - 0.1)
    expected = 60.0 - (60.0 - after_ramp) * math.exp(-1.0)
    assert float(bed.ask(thermometer, "MEAS:TEMP? (@1)")) == pytest.approx(expected, abs=0.01)


def test_inputs_without_a_sensor_say_so_and_the_room_has_20_degc(bed: Bed) -> None:
    """A list answers a list: 9.91E37 for the open input; a plant that tells no ambient has a room of 20 degC."""
    thermometer = bed.add(Thermometer, options={"ambient": 2}, errors={"temperature_noise": 0.0})
    opened, room = bed.ask(thermometer, "MEAS:TEMP? (@1,2)").split(",")
    assert (opened, float(room)) == ("9.91E+37", 20.0)
    bed.tell(thermometer, "MEAS:TEMP? (@5)")
    assert bed.ask(thermometer, "SYST:ERR?").startswith("-222,")


def test_its_errors_come_from_the_accuracy_statement(bed: Bed) -> None:
    """± 0.5 K stated: off by a constant within it."""
    thermometer = bed.add(
        Thermometer, options={"winding": 1}, accuracy={"winding": Accuracy(0.0, 0.5)}, errors={"temperature_noise": 0.0}
    )
    first, second = (float(bed.ask(thermometer, "MEAS:TEMP? (@1)")) for _ in range(2))
    assert first == second
    assert 0.0 < abs(first - 20.0) <= 0.5


@pytest.mark.parametrize("options", [{"winding": 5}, {"winding": 1, "case": 1}, {"ambient": "two"}])
def test_impossible_inputs_are_refused(bed: Bed, options: dict[str, object]) -> None:
    """An input that is not there, and two sensors on one."""
    with pytest.raises(ConfigError, match="1 to 4"):
        bed.add(Thermometer, options=options)


# Sound-level meter


def test_ten_times_the_speed_is_fifty_decibels(bed: Bed) -> None:
    """The fifth power of the speed; with the background 60 dB below nothing of it is seen (independent arithmetic)."""
    meter = bed.add(SoundMeter, errors={"level_noise": 0.0, "background_db": 0.0, "level_at_reference_db": 90.0})
    assert float(bed.ask(meter, "MEAS:SLEV?")) == pytest.approx(90.0, abs=0.5)
    bed.plant.pulse_hz = 10.0
    bed.plant.stop_and_turn_again(bed.bench.now)
    assert float(bed.ask(meter, "MEAS:SLEV?")) == pytest.approx(40.0, abs=2.5)


def test_energies_add_up(bed: Bed) -> None:
    """A fan as loud as the background: 3.01 dB more than either; a rotor at rest: the background alone."""
    meter = bed.add(SoundMeter, errors={"background_db": 40.0, "level_at_reference_db": 40.0})
    assert meter.level_db(100.0) == pytest.approx(43.0103, abs=1e-4)
    assert meter.level_db(0.0) == pytest.approx(40.0)


def test_the_average_takes_its_time_and_weightings_are_two(bed: Bed) -> None:
    """SENS:AVER:TIME 2 answers after 2 s; B is no weighting here."""
    meter = bed.add(SoundMeter)
    bed.tell(meter, "SENS:AVER:TIME 2", "SENS:WEIG C", "SENS:WEIG B")
    assert bed.ask(meter, "SYST:ERR?").startswith("-224,")
    assert bed.ask(meter, "SENS:WEIG?") == "C"
    began = bed.bench.now
    bed.ask(meter, "MEAS:SLEV?")
    assert bed.bench.now == pytest.approx(began + 2.001, abs=1e-6)


# Line tachometer


def heard(bed: Bed, tachometer: LineTachometer, seconds: float) -> list[float]:
    """The numbers of the lines that come in the next seconds, read each 20 ms."""
    raw, until = b"", bed.bench.now + seconds
    while bed.bench.now < until:
        bed.bench.advance(bed.bench.now + 0.02)
        raw += tachometer.port.read()
    return [float(line.split()[1]) for line in raw.decode("ascii").splitlines()]


def test_it_sends_a_line_after_each_gate(bed: Bed) -> None:
    """100 pulses a second, 2 a revolution: 3000 rpm, four times a second, timed to a microsecond."""
    tachometer = bed.add(LineTachometer)
    speeds = heard(bed, tachometer, 2.0)
    assert len(speeds) in (7, 8)
    assert speeds[1:] == [pytest.approx(3000.0, abs=0.5)] * (len(speeds) - 1)


def test_counting_is_good_to_one_count(bed: Bed) -> None:
    """Gates of 0.25 s at 103 pulses a second hold 25 or 26 of them: 3000 or 3120 rpm, one count is 120 rpm.

    1 / (pulses a revolution × gate) × 60 = 120 rpm; the mean over 10 s is the truth to one count in 1030.
    """
    bed.plant.pulse_hz = 103.0
    speeds = heard(bed, bed.add(LineTachometer, errors={"counted": 1.0}), 10.0)
    assert set(speeds) == {3000.0, 3120.0}
    assert sum(speeds) / len(speeds) == pytest.approx(3090.0, abs=6.0)


@pytest.mark.parametrize(("key", "factor"), [("missed_percent", 0.8), ("doubled_percent", 1.2)])
def test_missed_and_doubled_edges_shift_the_speed(bed: Bed, key: str, factor: float) -> None:
    """20 % missed reads 80 %, 20 % doubled 120 %: 1,000 pulses, so ± 5 % is four standard deviations; seeded."""
    speeds = heard(bed, bed.add(LineTachometer, errors={"counted": 1.0, key: 20.0}), 10.0)
    assert sum(speeds) / len(speeds) == pytest.approx(3000.0 * factor, rel=0.05)
    assert len(set(speeds)) > 3


def test_one_that_locks_on_to_the_pwm_shows_the_pwm(bed: Bed) -> None:
    """Below 500 Hz it counts the 300 Hz of the PWM in place of 100 pulses a second; above, the rotor."""
    tachometer = bed.add(LineTachometer, errors={"locks_below_hz": 500.0})
    bed.bench.signal.change(bed.bench.now, 300.0, 50.0, True)
    assert heard(bed, tachometer, 1.5)[-1] == pytest.approx(9000.0, rel=0.02)
    bed.bench.signal.change(bed.bench.now, 1000.0, 50.0, True)
    assert heard(bed, tachometer, 1.5)[-1] == pytest.approx(3000.0, abs=0.5)


def test_a_rotor_at_rest_is_a_zero(bed: Bed) -> None:
    """No pulse in the gate: `0.0`, not the last speed."""
    tachometer = bed.add(LineTachometer)
    bed.plant.turns_until = 1.0
    assert heard(bed, tachometer, 3.0)[-3:] == [0.0, 0.0, 0.0]


def test_what_nobody_reads_is_lost_after_two_seconds(bed: Bed) -> None:
    """A stream that nobody reads for a minute leaves 2 s of old lines, then the new ones: memory stays bounded."""
    tachometer = bed.add(LineTachometer)
    bed.bench.advance(60.0)
    stale = tachometer.port.read().count(b"\n")
    assert 7 <= stale <= 9
    assert heard(bed, tachometer, 1.0)


def test_it_answers_who_it_is_amid_its_lines(bed: Bed) -> None:
    """*IDN? is answered like any other instrument's; commands that it does not know are queued."""
    tachometer = bed.add(LineTachometer)
    tachometer.port.write(b"*IDN?\nSOUR:VOLT 5\nSYST:ERR?\n")
    bed.bench.advance(bed.bench.now + 0.02)
    answers = tachometer.port.read().decode("ascii").splitlines()
    assert answers[0].startswith("SIMULATED,tachometer,")
    assert answers[1].startswith("-113,")


@pytest.mark.parametrize("errors", [{"gate_s": 0.0}, {"missed_percent": 120.0}, {"pulses_per_revolution": -1.0}])
def test_a_tachometer_that_cannot_be_is_refused(bed: Bed, errors: dict[str, float]) -> None:
    """The table is shown, and what is allowed."""
    with pytest.raises(ConfigError, match=r"gate_s from 0\.01"):
        bed.add(LineTachometer, errors=errors)


# Timer with digital potentiometer


def test_the_duty_follows_the_tap_and_the_frequency_stays() -> None:
    """RA / (RA + RB): 1 kohm ends on 100 kohm give 0.98 % to 99.02 % in 255 equal steps, at one frequency."""
    timer = PwmTimer(100e3, 10e-9, 5.0)
    duties = [timer.duty_percent(tap) for tap in range(256)]
    assert duties[0] == pytest.approx(100.0 / 102.0)
    assert duties[255] == pytest.approx(100.0 * 101.0 / 102.0)
    steps = [high - low for low, high in itertools.pairwise(duties)]
    assert steps == [pytest.approx(100.0 / 102.0 * 100.0 / 255.0)] * 255
    assert {round(timer.pwm_hz(tap), 6) for tap in range(256)} == {round(timer.pwm_hz(0), 6)}


@pytest.mark.parametrize(("volts", "spice_hz"), [(5.0, 5623.1), (12.0, 6494.0)])
def test_the_frequency_against_a_circuit_simulator(volts: float, spice_hz: float) -> None:
    """10 kohm + 10 kohm and 10 nF with two diodes: 5623.1 Hz at 5 V, 6494.0 Hz at 12 V, and 50 % duty (checks 3.13:
    computed with ngspice and a small-signal diode; the formula's constant drop of 0.5 V agrees within 1.1 %)."""
    timer = PwmTimer(18e3, 10e-9, volts, end_ohm=1e3, timer_percent_per_volt=0.0)
    middle = [timer.duty_percent(127), timer.duty_percent(128)]
    assert timer.pwm_hz(127) == pytest.approx(spice_hz, rel=0.011)
    assert sum(middle) / 2.0 == pytest.approx(50.0)


@pytest.mark.parametrize(("volts", "ppm_per_k"), [(5.0, 1140.0), (12.0, 400.0)])
def test_the_diodes_rule_the_drift(volts: float, ppm_per_k: float) -> None:
    """−2 mV/K make +1140 ppm/K at 5 V and +400 at 12 V of period-free drift (checks 3.14, derived for the project; the
    sign is the frequency's)."""
    timer = PwmTimer(100e3, 10e-9, volts, timer_ppm_per_k=0.0, timer_percent_per_volt=0.0)
    drift = (timer.pwm_hz(0, 26.0) / timer.pwm_hz(0, 25.0) - 1.0) * 1e6
    assert drift == pytest.approx(ppm_per_k, rel=0.02)


def test_the_integrated_circuit_drifts_as_its_data_sheet_says() -> None:
    """Bipolar: typically 150 ppm/K and 0.3 %/V (checks 3.5, data sheet of 2000, verified); times grow, so f falls."""
    ppm, percent = DRIFTS["bipolar"]
    assert (ppm, percent) == (150.0, 0.3)
    ideal = PwmTimer(100e3, 10e-9, 10.0, diode_volts=0.0, diode_volts_per_k=0.0, timer_percent_per_volt=0.0)
    assert ideal.pwm_hz(0, 35.0) / ideal.pwm_hz(0, 25.0) == pytest.approx(1.0 - 1.5e-3, abs=3e-6)


def test_the_board_steps_the_timers_tap(bed: Bed) -> None:
    """With a timer at the gate the pin's own duty does nothing, the tap moves it, and OUTP gates it."""
    timer = PwmTimer(100e3, 10e-9, 5.0)
    board = bed.board(pwm_timer=timer, errors={"timer_degc": 40.0})
    bed.tell(board, "SOUR:PULS:DCYC 90", "SOUR:RES:TAP 77", "OUTP ON")
    assert bed.plant.drive[:2] == pytest.approx((timer.pwm_hz(77, 40.0), timer.duty_percent(77)))
    assert bed.plant.drive[2] is True
    bed.tell(board, "SOUR:RES:TAP 200")
    assert bed.plant.drive[1] == pytest.approx(timer.duty_percent(200))
    bed.tell(board, "OUTP OFF")
    assert bed.plant.drive[2] is False


def test_parts_as_they_are_fitted(bed: Bed) -> None:
    """A potentiometer 10 % too large lowers the frequency and the lowest duty, the ends run faster by what is stated,
    and from a broken place of the ladder on the wiper sits as many taps lower as stated (independent arithmetic)."""
    errors = {
        "potentiometer_error_percent": 10.0, "timer_ends_percent": 2.0, "wiper_skips_from": 100.0,
        "wiper_skips_taps": 40.0,
    }  # fmt: skip
    timer = PwmTimer(100e3, 10e-9, 5.0)
    board = bed.board(pwm_timer=timer, errors=errors)
    bed.tell(board, "SOUR:RES:TAP 0", "OUTP ON")
    assert bed.plant.drive[1] == pytest.approx(100.0 * 1.0 / 112.0)
    assert bed.plant.drive[0] == pytest.approx(timer.pwm_hz(0) * 102.0 / 112.0 * 1.02)
    for told, at in ((99, 99), (100, 60)):
        bed.tell(board, f"SOUR:RES:TAP {told}")
        assert bed.plant.drive[1] == pytest.approx(100.0 * (1.0 + 110.0 * at / 255.0) / 112.0)


# Trips of the supply


def test_over_current_trips_after_its_delay_and_stays_off(bed: Bed) -> None:
    """0.25 A drawn, 0.2 A protected, 0.1 s delay: off after 0.1 s, on record, and not on again before it is cleared."""
    supply, board = bed.bench_supply(), bed.board()
    bed.tell(supply, "SOUR:VOLT 12", "SOUR:CURR 1", "SOUR:CURR:PROT 0.2", "SOUR:CURR:PROT:DEL 0.1")
    bed.tell(supply, "SOUR:CURR:PROT:STAT ON", "OUTP ON")
    bed.tell(board, "SYST:COMM:TIM 10000", "SOUR:PULS:DCYC 100", "OUTP ON")
    bed.bench.advance(bed.bench.now + 0.5)
    tripped = [happened for happened in bed.bench.record if happened.what == "supply_off"]
    assert [happened.why for happened in tripped] == ["over-current trip"]
    on_at = next(happened.at for happened in bed.bench.record if happened.what == "drive_on")
    assert 0.1 <= tripped[0].at - on_at <= 0.1 + 2 * 0.011
    assert (bed.ask(supply, "OUTP?"), bed.ask(supply, "STAT:QUES:COND?")) == ("0", "2")
    bed.tell(supply, "OUTP ON")
    assert bed.ask(supply, "SYST:ERR?").startswith("-221,")
    bed.tell(supply, "OUTP:PROT:CLE", "SOUR:CURR:PROT:STAT OFF", "OUTP ON")
    bed.bench.advance(bed.bench.now + 0.5)
    assert (bed.ask(supply, "OUTP?"), bed.ask(supply, "OUTP:PROT:TRIP?")) == ("1", "0")


def test_a_short_peak_does_not_trip(bed: Bed) -> None:
    """0.05 s above the protection with a delay of 0.1 s: still on."""
    supply, board = bed.bench_supply(), bed.board()
    bed.tell(supply, "SOUR:VOLT 12", "SOUR:CURR:PROT 0.2;PROT:DEL 0.1;PROT:STAT ON", "OUTP ON")
    bed.tell(board, "SOUR:PULS:DCYC 100", "OUTP ON")
    bed.bench.advance(bed.bench.now + 0.03)
    bed.tell(board, "OUTP OFF")
    bed.bench.advance(bed.bench.now + 0.5)
    assert bed.ask(supply, "OUTP?") == "1"


def test_over_voltage_trips_at_once(bed: Bed) -> None:
    """A terminal voltage above the protection, as a braking motor pumps it up: off within two looks."""
    supply = bed.bench_supply()
    bed.tell(supply, "SOUR:VOLT 12", "SOUR:VOLT:PROT 13", "SOUR:VOLT:PROT:STAT ON", "OUTP ON")
    assert bed.ask(supply, "OUTP?") == "1"
    bed.bench.plant_now()
    bed.plant.supply = (14.0, 1.0, True)
    bed.bench.advance(bed.bench.now + 0.025)
    assert [happened.why for happened in bed.bench.record] == ["OUTP ON", "over-voltage trip"]
