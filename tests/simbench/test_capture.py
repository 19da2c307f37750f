"""The captured waveform: trigger, edges, eight bits, noise, thresholds; and what a scope then reads at the node."""

from __future__ import annotations

import math
import random
import statistics
from typing import TYPE_CHECKING

import numpy as np
import pytest

from sweeprig.simbench.capture import (
    Capture,
    Screen,
    capture,
    crossings,
    find_trigger,
    frequency_and_duty,
    middle_level,
)
from sweeprig.simbench.chopper import chopper, wave
from sweeprig.simbench.probes import Running

if TYPE_CHECKING:
    from sweeprig.simbench.scope import Scope
    from tests.simbench.conftest import Bed

QUIET = {"frequency_noise_percent": 0.0, "duty_noise_percent": 0.0, "volts_noise": 0.0, "sample_noise": 0.0}


def rectangle(period: float = 1e-3, duty: float = 0.3, volts: float = 12.0, now: float = 0.0) -> Running:
    """0 V, then `volts` from phase 0 for `duty` of the period."""
    high = duty * period
    return Running(np.array([0.0, high, period]), volts * np.array([0.0, high, high]), now)


def shot(screen: Screen, noise: float = 0.0, edge_s: float = 2e-7, now: float = 0.4e-3) -> Capture:
    return capture(rectangle(now=now), 1e-3, screen, edge_s, noise, random.Random(3))


def test_the_screen_begins_before_the_trigger() -> None:
    """The rise stands a tenth of the screen from its left, whatever the phase at which it was asked for."""
    for now in (0.0, 0.2e-3, 0.7e-3):
        volts = shot(Screen(seconds=1e-3, points=1000), now=now).volts()
        rise = next(n for n in range(1, 1000) if volts[n - 1] < 6.0 <= volts[n])
        assert rise == pytest.approx(100, abs=2)


def test_a_falling_slope_triggers_on_the_fall() -> None:
    """With the other slope the fall stands there."""
    volts = shot(Screen(seconds=1e-3, points=1000, rising=False)).volts()
    assert next(n for n in range(1, 1000) if volts[n - 1] > 6.0 >= volts[n]) == pytest.approx(100, abs=2)


def test_a_level_that_is_never_passed_runs_free() -> None:
    """A trigger at 20 V on a wave of 12 V: the screen is there, and says that nothing triggered it."""
    found = shot(Screen(trigger_volts=20.0))
    assert not found.triggered
    assert max(found.volts()) == pytest.approx(12.0, abs=0.1)


def test_values_are_eight_bits() -> None:
    """40 V in 256 steps: whole steps of 0.15625 V, within half of one from the truth; beyond the screen it clips."""
    step = 40.0 / 256
    volts = shot(Screen()).volts()
    assert all(value / step == pytest.approx(round(value / step), abs=1e-9) for value in volts)
    assert max(volts) == pytest.approx(12.0, abs=step / 2)
    clipped = shot(Screen(full_volts=8.0))
    assert max(clipped.codes) == 255
    assert max(clipped.volts()) == pytest.approx(127 / 256 * 8.0)


def test_an_edge_takes_its_time() -> None:
    """With edges of 10 us and samples of 1 us the rise has nine or ten samples between 5 % and 95 %."""
    volts = shot(Screen(seconds=1e-3, points=1000), edge_s=1e-5).volts()
    assert 8 <= sum(0.6 < value < 11.4 for value in volts[:200]) <= 10


def test_noise_has_the_stated_spread() -> None:
    """0.5 V on a flat stretch; with 500 samples outside 0.43 to 0.57 V once in 1e5 (chi-square), seeded."""
    volts = shot(Screen(seconds=1e-3, points=5000, full_volts=40.0), noise=0.5).volts()
    assert statistics.stdev(volts[2500:3000]) == pytest.approx(math.hypot(0.5, 40.0 / 256 / math.sqrt(12.0)), abs=0.07)


def test_frequency_and_duty_come_from_whole_periods() -> None:
    """Ten periods on the screen, the duty within one sample a period of the truth."""
    screen = Screen(seconds=0.01, points=10_000)
    found = frequency_and_duty(crossings(shot(screen).volts(), screen.step_s, 6.0, 1.0))
    assert found is not None
    assert found[0] == pytest.approx(1000.0, rel=1e-3)
    assert found[1] == pytest.approx(30.0, abs=0.1)


def test_less_than_a_period_on_the_screen_is_no_measurement() -> None:
    """A time base of half a period shows one rise: nothing can be said."""
    screen = Screen(seconds=0.5e-3, points=1000)
    assert frequency_and_duty(crossings(shot(screen).volts(), screen.step_s, 6.0, 1.0)) is None


def test_too_slow_a_time_base_shows_another_wave() -> None:
    """1 kHz sampled every 1.05 ms looks like 1 / 1.05 ms − 1 kHz = 47.6 Hz (aliasing, independent arithmetic)."""
    screen = Screen(seconds=1.05, points=1000)
    found = frequency_and_duty(crossings(shot(screen).volts(), screen.step_s, 6.0, 1.0))
    assert found is not None
    assert found[0] == pytest.approx(1000.0 - 1.0 / 1.05e-3, abs=1.0)


def test_noise_at_the_level_makes_no_crossings() -> None:
    """Within the hysteresis nothing counts; beyond it once."""
    wobble = [0.0, 0.1, -0.1, 0.05, -0.2, 0.1, 1.0, 0.1, -0.1, 0.1, -1.0]
    assert [up for _, up in crossings([-1.0, *wobble], 1.0, 0.0, 0.6)] == [True, False]


def test_the_trigger_is_found_to_a_millionth_of_a_period() -> None:
    """A rise at 0.6 ms from now."""
    running = rectangle(now=0.4e-3)

    def volts(at: object) -> object:
        times = np.asarray(at, dtype=np.float64)
        return (running(times) - running(times - 1e-8)) / 1e-8

    at = find_trigger(volts, 1e-3, Screen())  # type: ignore[arg-type] # plain arrays in and out
    assert at == pytest.approx(0.6e-3, abs=2e-8)


def test_the_middle_level_is_half_way() -> None:
    """Whatever lies between: 0 and 12.5 V give 6.25 V."""
    assert middle_level([0.0, 5.0, 5.0, 12.5]) == 6.25


# A scope at the switch node: the worked cases of the trade


def node(bed: Bed, pwm_hz: float, duty_percent: float, emf: float, **errors: float) -> Scope:
    """12 V, 6 ohm, 3 mH, a diode of 0.5 V: the motor of the worked cases, on a low-side switch."""
    scope = bed.scope("switch_node", errors={**QUIET, **errors})
    bed.plant.present_wave = wave(chopper(12.0, 6.0, 3e-3, pwm_hz, duty_percent, 0.5), emf)
    bed.plant.phase_of = lambda now: now % (1.0 / pwm_hz)
    bed.bench.signal.change(bed.bench.now, pwm_hz, duty_percent, True)
    bed.tell(scope, f"SENS:SWE:TIME {8.0 / pwm_hz}", "SENS:SWE:POIN 8000")
    return scope


@pytest.mark.parametrize(
    ("pwm_hz", "true_percent", "emf", "seen_percent"), [(300.0, 30.0, 7.0, 93.0), (1000.0, 50.0, 8.0, 87.0)]
)
def test_an_automatic_mid_level_counts_the_gap_as_on(
    bed: Bed, pwm_hz: float, true_percent: float, emf: float, seen_percent: float
) -> None:
    """Above half the supply the back-EMF puts the gap below the middle: true 30 % reads 93 %, true 50 % reads 87 %.

    Worked cases of the trade's practice, computed there to whole percents (no outside source). The node is low while
    the switch conducts, so on-time is what is not high.
    """
    scope = node(bed, pwm_hz, true_percent, emf, automatic_level=1.0)
    assert 100.0 - float(bed.ask(scope, "MEAS:PDUT? (@1)")) == pytest.approx(seen_percent, abs=0.6)


@pytest.mark.parametrize(("pwm_hz", "true_percent", "emf"), [(300.0, 30.0, 7.0), (1000.0, 50.0, 8.0)])
def test_a_threshold_near_the_conducting_level_reads_the_true_duty(
    bed: Bed, pwm_hz: float, true_percent: float, emf: float
) -> None:
    """The same cases at 15 % of the supply, 1.8 V: the duty to one sample in a thousand a period."""
    scope = node(bed, pwm_hz, true_percent, emf)
    bed.tell(scope, "SENS:LEV 1.8")
    assert 100.0 - float(bed.ask(scope, "MEAS:PDUT? (@1)")) == pytest.approx(true_percent, abs=0.15)
    assert float(bed.ask(scope, "MEAS:FREQ? (@1)")) == pytest.approx(pwm_hz, rel=1e-3)


def test_the_waveform_comes_as_a_definite_block(bed: Bed) -> None:
    """`#48000`, then 8000 bytes, which with the preamble are the node's 0 V, 12.5 V and 12 V less back-EMF."""
    scope = node(bed, 300.0, 30.0, 7.0)
    scope.port.write(b"READ:TRAC? (@1)\n")
    bed.bench.advance(bed.bench.now + 0.1)
    raw = scope.port.read()
    assert raw.startswith(b"#48000")
    assert (len(raw), raw[-1:]) == (6 + 8000 + 1, b"\n")
    points, seconds, step, bottom = map(float, bed.ask(scope, "TRAC:PRE? (@1)").split(","))
    volts = sorted({round(bottom + code * step, 6) for code in raw[6:-1]})
    assert points == 8000
    assert seconds == pytest.approx(8.0 / 300.0 / 8000)
    assert volts[0] == pytest.approx(0.0, abs=step)
    assert volts[-1] == pytest.approx(12.5, abs=step)
    assert min(abs(value - 5.0) for value in volts) <= step


def test_initiate_captures_and_the_trace_waits_for_it(bed: Bed) -> None:
    """No data before, -213 for a second INIT on the way, *OPC? at the end of the screen, the block then."""
    scope = node(bed, 300.0, 30.0, 7.0)
    assert bed.ask(scope, "TRAC? (@1)", within_s=0.1) == ""
    assert bed.ask(scope, "SYST:ERR?").startswith("-230,")
    began = bed.bench.now
    scope.port.write(b"INIT;INIT\n")
    assert bed.ask(scope, "*OPC?") == "1"
    assert bed.bench.now == pytest.approx(began + 8.0 / 300.0 + 1e-3, abs=1e-6)
    assert bed.ask(scope, "SYST:ERR?").startswith("-213,")
    bed.tell(scope, "TRAC:DATA? (@1)")
    assert scope.port.read().startswith(b"#4")


@pytest.mark.parametrize(
    ("message", "back", "value"),
    [("SENS:SWE:TIME 2 MS", "SENS:SWE:TIME?", 2e-3), ("SENS:VOLT:RANG 16", "SENS:VOLT:RANG?", 16.0),
     ("SENS:VOLT:RANG:OFFS 6", "SENS:VOLT:RANG:OFFS?", 6.0), ("TRIG:LEV 3.3", "TRIG:LEV?", 3.3),
     ("SENS:SWE:POIN 500", "SENS:SWE:POIN?", 500.0), ("SENS:LEV 1.8", "SENS:LEV?", 1.8),
     ("TRIG:SLOP:NEG ON", "TRIG:SLOP:NEG?", 1.0)],
)  # fmt: skip
def test_settings_read_back(bed: Bed, message: str, back: str, value: float) -> None:
    """Each setting is asked back as it was made, and *RST forgets it."""
    scope = bed.scope()
    before = bed.ask(scope, back)
    bed.tell(scope, message)
    assert float(bed.ask(scope, back)) == pytest.approx(value)
    bed.tell(scope, "*RST")
    assert bed.ask(scope, back) == before


@pytest.mark.parametrize("message", ["SENS:SWE:TIME 1E-9", "SENS:SWE:POIN 5", "TRIG:LEV 1E6", "TRIG:SLOP:NEG UP"])
def test_settings_out_of_range_are_refused(bed: Bed, message: str) -> None:
    """-222 or -224 in the queue."""
    scope = bed.scope()
    bed.tell(scope, message)
    assert bed.ask(scope, "SYST:ERR?").startswith(("-222,", "-224,"))
