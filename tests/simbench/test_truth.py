"""The counted truth: the smooth law through counts, the trials behind it, and the whole on a small fan."""

import json
import math
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from sweeprig.errors import SweeprigError
from sweeprig.holds import Condition
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.trials import (
    Counts,
    Procedure,
    Task,
    falling_trial,
    perform,
    start_trial,
    true_speed,
    warm_plant,
)
from sweeprig.simbench.truth import truth
from sweeprig.simbench.truth_law import fit_law

FAN = MotorTruth(
    resistance_ohm=11.6,
    inductance_henry=0.0105,
    torque_constant_nm_per_a=0.0255,
    inertia_kg_m2=5.6e-6,
    quadratic_load_nm_s2=6e-8,
    viscous_friction_nm_s=2e-6,
    running_friction_nm=1.2e-3,
    running_friction_spread_percent=26.0,
    breakaway_friction_nm=4.6e-3,
    breakaway_friction_spread_percent=5.0,
    friction_correlation_s=0.12,
    barrier_angle_rad=0.7,
    thermal_resistance_k_per_w=12.0,
    thermal_time_constant_s=240.0,
)
QUICK = Procedure(hold_time_s=5.0, start_time_s=2.0, rest_time_s=1.0, run_in=(60.0, 3.0))
FAST = Condition(25e3, 12.0)


def task_at(duty: float, seed: tuple[int, ...]) -> Task:
    """Stall trials of the fan, one at a duty."""
    return Task(FAN, FAST, QUICK, "stall", duty, 1, seed)


def counted(
    law: "list[float]", duties: "np.ndarray[tuple[int], np.dtype[np.float64]]", trials: int, seed: int
) -> list[Counts]:
    """Binomial counts of events with chance 1 − exp(−exp(η)), η the polynomial `law` in (duty − 12)."""
    rng = np.random.default_rng(seed)
    rate = np.exp(np.polyval(law[::-1], duties - 12.0))
    events = rng.binomial(trials, -np.expm1(-rate))
    return [Counts(float(d), trials, int(k)) for d, k in zip(duties, events, strict=True)]


@pytest.mark.parametrize("law", [[math.log(math.log(2.0)), -3.0], [-0.1, -2.0, -0.6], [0.4, 2.5, 0.5]])
def test_law_gives_back_the_levels_with_honest_errors(law: list[float]) -> None:
    """Over 60 sets of counts the scaled errors of the 50 % and the tail level have mean 0 and spread 1.

    The levels are the roots of the known law (independent method). With 60 sets, |mean| < 0.6 and the spread between
    0.7 and 1.35 are missed by chance less than once in 10⁴ runs; the seeds are fixed.
    """
    tail = 0.01 if law[1] < 0 else 0.99
    duties = np.linspace(10.7, 14.3, 13)
    errors: dict[float, list[float]] = {0.5: [], tail: []}
    for seed in range(60):
        fitted = fit_law(counted(law, duties, 400, seed))
        for level, scaled in errors.items():
            roots = np.roots([*law[:0:-1], law[0] - math.log(-math.log1p(-level))])
            true = 12.0 + min((r.real for r in roots if abs(r.imag) < 1e-9), key=abs)
            found, u = fitted.duty_at(level)
            scaled.append((found - true) / u)
    for scaled in errors.values():
        assert abs(np.mean(scaled)) < 0.6
        assert 0.7 < np.std(scaled) < 1.35


def test_lack_of_fit_is_seen() -> None:
    """Counts that no smooth law explains give a small p-value; counts of a law do not."""
    duties = np.linspace(11.0, 13.0, 12)
    smooth = counted([-0.4, -2.0], duties, 300, 1)
    assert fit_law(smooth).lack_of_fit_p > 0.01
    jagged = [replace(c, events=c.events // 2 if i % 2 else c.events) for i, c in enumerate(smooth)]
    assert fit_law(jagged).lack_of_fit_p < 1e-4


def test_a_level_that_was_not_reached_is_refused() -> None:
    """A chance outside the counted range is an error that names it, never an extrapolation."""
    fitted = fit_law(counted([-0.4, -2.0], np.linspace(11.0, 12.0, 8), 300, 2))
    with pytest.raises(SweeprigError, match=r"do not reach a chance of 0\.0001"):
        fitted.duty_at(1e-4)


def test_falling_trial_of_a_reliable_duty() -> None:
    """Far above the stall duty a hold survives, and its sums are speed and voltage over the settled time."""
    plant = warm_plant(task_at(0.0, (1,)))
    stopped, radians, volts, seconds = falling_trial(plant, 25e3, 40.0, QUICK)
    assert not stopped
    assert seconds == pytest.approx(5.0 - QUICK.settle_s, abs=0.01)
    assert radians / seconds == pytest.approx(plant.omega, rel=0.1)
    assert volts / seconds == pytest.approx(0.4 * 12.5 - 0.5, rel=0.01)


def test_falling_trial_far_too_low_stops() -> None:
    """Far below the stall duty the hold ends with a stop, and nothing is averaged."""
    plant = warm_plant(task_at(0.0, (1,)))
    assert falling_trial(plant, 25e3, 5.0, QUICK) == (True, 0.0, 0.0, 0.0)


def test_start_needs_ten_revolutions_in_time() -> None:
    """A rotor that turns but not ten revolutions within the start time has not started."""
    plant = warm_plant(task_at(0.0, (1,)))
    assert start_trial(plant, 25e3, 60.0, QUICK)
    assert not start_trial(plant, 25e3, 60.0, replace(QUICK, start_time_s=0.1))
    assert plant.turning
    assert not start_trial(plant, 25e3, 3.0, QUICK)


def test_speed_below_the_lowest_counts_as_stopped() -> None:
    """A mean speed that the rig could not measure is a stop."""
    plant = warm_plant(task_at(0.0, (1,)))
    assert falling_trial(plant, 25e3, 40.0, replace(QUICK, lowest_rpm=5000.0))[0]


def short_truth(motor: MotorTruth, runs: int, workers: int, low: float = 0.0) -> dict[str, Any]:
    procedure = replace(QUICK, duty_low_percent=low)
    return truth(motor, [FAST], procedure=procedure, seed=5, runs=runs, workers=workers)[0]


@pytest.fixture(scope="module")
def found() -> dict[str, Any]:
    """The truth of one condition with short holds and few trials."""
    return short_truth(FAN, runs=500, workers=1)


@pytest.mark.slow
def test_truth_is_what_fresh_trials_show(found: dict[str, Any]) -> None:
    """At the duties found, fresh trials with other seeds stop (start) as often as was said.

    200 stall and 200 start trials at the 50 % duties, 300 at the 99 % duty: within four binomial standard deviations,
    widened by what the duties' own standard errors amount to. Fixed seeds.
    """
    for name, kind in (("stall_duty_percent", "stall"), ("start_duty_percent", "start")):
        finding, spread = found[name], found[f"{kind}_spread_percent"]["value"]
        assert 0.0 < finding["u"] < 0.2
        got = perform(Task(FAN, FAST, QUICK, kind, finding["value"], 200, (77,)))
        assert got.events / 200 == pytest.approx(0.5, abs=4.0 * math.hypot(0.035, 0.44 * finding["u"] / spread))
    tail = perform(Task(FAN, FAST, QUICK, "stall", found["sustain_99_duty_percent"]["value"], 300, (78,)))
    assert tail.events <= 13  # a true 1 to 2 % gives more than this once in 10⁴ times at most
    names = ("stall", "sustain_99", "start", "start_99")
    stall, sustain_99, start, start_99 = (found[f"{name}_duty_percent"]["value"] for name in names)
    assert stall < sustain_99
    assert stall < start < start_99


@pytest.mark.slow
def test_truth_is_json_and_consistent(found: dict[str, Any]) -> None:
    """The result is plain JSON; speeds, range and hysteresis fit together and the speeds are the true ones."""
    again = json.loads(json.dumps(found))
    assert again == found
    usable = again["usable_range"]
    low, high = usable["low_speed_rpm"]["value"], usable["high_speed_rpm"]["value"]
    assert usable["turndown"]["value"] == pytest.approx(high / low)
    assert high == pytest.approx(0.98 * again["top_speed_rpm"]["value"])
    assert usable["low_duty_percent"] == again["sustain_99_duty_percent"]
    assert usable["low_duty_from_rest_percent"] == again["start_99_duty_percent"]
    gap = again["start_duty_percent"]["value"] - again["stall_duty_percent"]["value"]
    assert again["start_stall_hysteresis_percent"]["value"] == pytest.approx(gap)
    at_high = true_speed(task_at(usable["high_duty_percent"]["value"], (99,)))
    assert at_high[0] == pytest.approx(high, rel=3e-3)
    at_stall = true_speed(task_at(again["stall_duty_percent"]["value"], (98,)))
    speed = again["stall_speed_rpm"]
    assert at_stall[0] == pytest.approx(speed["value"], abs=4.5 * math.hypot(speed["u"], at_stall[1]))
    assert at_stall[2] == pytest.approx(again["stall_voltage_volts"]["value"], rel=0.03)


@pytest.mark.slow
def test_workers_do_not_change_the_result() -> None:
    """Two fresh processes give the same truth as none."""
    assert short_truth(FAN, runs=60, workers=1) == short_truth(FAN, runs=60, workers=2)


def test_a_motor_without_friction_never_stops() -> None:
    """Where nothing stops the rotor in the allowed range the finding is empty, with its reason."""
    motor = replace(FAN, running_friction_nm=0.0, breakaway_friction_nm=1e-6)
    got = short_truth(motor, runs=100, workers=1, low=10.0)
    for name in ("stall_duty_percent", "sustain_99_duty_percent", "stall_speed_rpm"):
        assert got[name] == {"value": None, "reason": "never_stopped"}
    assert got["usable_range"]["turndown"] == {"value": None, "reason": "never_stopped"}
    assert got["top_speed_rpm"]["value"] > 2000.0
