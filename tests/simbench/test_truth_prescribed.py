"""The closed-form truth of motors with a prescribed law."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from sweeprig.holds import Condition
from sweeprig.job import load, shipped
from sweeprig.simbench.kinds.choose import values
from sweeprig.simbench.kinds.prescribed import PrescribedMotor, PrescribedTruth
from sweeprig.simbench.trials import Procedure, Task, kick_trial
from sweeprig.simbench.truth_kick import kick_truth
from sweeprig.simbench.truth_prescribed import kicked, prescribed_truth, started, survival

MOTOR = PrescribedTruth(
    law="exponential",
    stall_duty_percent=14.0,
    stall_spread_percent=0.4,
    hold_time_s=20.0,
    start_duty_percent=22.0,
    start_spread_percent=0.6,
    floor_per_hour=0.0,
    scatter_percent=0.0,
    drift_percent_per_hour=0.0,
    top_rpm=5000.0,
    dead_percent=4.0,
    time_constant_s=0.2,
    full_amps=0.5,
)
P = Procedure(hold_time_s=20.0, start_time_s=3.0)
AT = Condition(1000.0, 12.0)


def duty(motor: PrescribedTruth, name: str) -> float:
    return float(prescribed_truth(motor, AT, P)[f"{name}_duty_percent"]["value"])


def test_exponential_law() -> None:
    """50 %, 99 % and the duty of 24 h at 99 % are the inverse of exp(−T·h), h = ln 2/20 s · exp(−1.283·(D − 14)/0.4).

    Worked by hand from the law of stalling (definitions): independent method.
    """
    per_percent = 1.283 / 0.4
    assert duty(MOTOR, "stall") == pytest.approx(14.0, abs=1e-8)
    loss = -math.log(0.99)
    assert duty(MOTOR, "sustain_99") == pytest.approx(14.0 + math.log(math.log(2.0) / loss) / per_percent, abs=1e-8)
    long = 14.0 + math.log(math.log(2.0) / loss * 86_400.0 / 20.0) / per_percent
    assert duty(MOTOR, "long_run") == pytest.approx(long, abs=1e-8)


def test_gaussian_law_with_scatter() -> None:
    """A normal threshold that scatters normally is normal with the variances added: 99 % at 2.3263 of that spread.

    2.3263 is the 99 % point of the normal law (certified: any table of it). Spread and scatter 0.3 and 0.4: 0.5.
    """
    motor = replace(MOTOR, law="gaussian", stall_spread_percent=0.3, scatter_percent=0.4)
    assert duty(motor, "stall") == pytest.approx(14.0, abs=1e-6)
    assert duty(motor, "sustain_99") == pytest.approx(14.0 + 2.3263 * 0.5, abs=1e-3)


def test_a_floor_has_no_duty_of_long_service() -> None:
    """A hazard that no duty cures leaves the long-run duty without a value, and says why."""
    found = prescribed_truth(replace(MOTOR, floor_per_hour=0.01), AT, P)
    assert found["long_run_duty_percent"] == {"value": None, "reason": "always_stopped"}


def test_the_motor_itself_agrees() -> None:
    """Of 400 holds and 400 starts of the simulated motor as many end well as the closed form says.

    Binomial: four standard deviations, missed by chance less than once in 10,000 runs each. Fixed seed.
    """
    holds = starts = 0
    for trial in range(400):
        motor = PrescribedMotor(MOTOR, 2.0, np.random.default_rng((3, trial)))
        motor.set_supply(12.0, math.inf, True)
        motor.set_drive(1000.0, 22.2, True)
        motor.advance(3.0)
        starts += motor.turning
        motor.set_drive(1000.0, 60.0, True)
        motor.advance(6.0)
        motor.set_drive(1000.0, 14.2, True)
        motor.advance(26.0)
        holds += motor.turning
    for count, chance in ((holds, survival(MOTOR, 14.2, 20.0)), (starts, started(MOTOR, 22.2, 3.0))):
        assert 0.3 < chance < 0.9
        assert abs(count - 400 * chance) < 4.0 * math.sqrt(400 * chance * (1.0 - chance))


def test_a_rotor_too_slow_for_ten_revolutions_has_not_started() -> None:
    """At a duty where ten revolutions take longer than the start time no start counts, however surely it turns."""
    slow = replace(MOTOR, top_rpm=700.0, start_duty_percent=5.0)
    assert started(slow, 20.0, 3.0) == 0.0
    assert started(slow, 60.0, 3.0) > 0.9


KICKED = replace(MOTOR, kick_s=0.12, kick_spread=0.35, kick_power=1.2)


@pytest.mark.parametrize("law", ["exponential", "gaussian"])
def test_kick(law: str) -> None:
    """The pulses for 99 % are the law's quantiles on ln(time) (scipy's Gumbel and normal: independent method) where the
    run duty neither starts the motor nor stops it; 2·10^-3: 1.283 stands for π/√6."""
    motor = replace(KICKED, law=law, start_duty_percent=40.0, stall_spread_percent=0.05)
    found = prescribed_truth(motor, AT, replace(P, kick_duties_percent=(60.0, 100.0), kick_margin_percent=2.0))
    frozen = stats.gumbel_l if law == "exponential" else stats.norm
    z = (float(frozen.ppf(0.99)) - float(frozen.ppf(0.5))) / float(frozen.std())
    for name, half in (("kick_99_s", 0.12), ("kick_99_second_s", 0.12 * (100.0 / 60.0) ** 1.2)):
        assert found[name]["value"] == pytest.approx(half * math.exp(0.35 * z), rel=2e-3)


def test_kick_says_why_there_is_none() -> None:
    """A step that starts the motor for good needs no pulse; one that cannot start it has none."""
    p = replace(P, kick_duties_percent=(30.0,))
    assert prescribed_truth(MOTOR, AT, p)["kick_99_s"] == {"value": None, "reason": "always_started"}
    weak = replace(KICKED, start_duty_percent=35.0)
    assert prescribed_truth(weak, AT, p)["kick_99_s"] == {"value": None, "reason": "never_started"}
    assert "kick_99_s" not in prescribed_truth(MOTOR, AT, P)


@pytest.mark.parametrize(("kick", "pulse_s"), [((100.0, 17.0), 0.12), ((60.0, 17.0), 0.24), ((60.0, 21.9), 0.2)])
def test_the_motor_itself_agrees_about_kicks(kick: tuple[float, float], pulse_s: float) -> None:
    """Of 400 kicks of the simulated motor as many end well as the closed form says.

    Binomial: four standard deviations, missed by chance less than once in 10,000 runs. Fixed seed.
    """
    motor = PrescribedMotor(KICKED, 2.0, np.random.default_rng(5))
    motor.set_supply(12.0, math.inf, True)
    lasted = sum(kick_trial(motor, 1000.0, kick, pulse_s, replace(P, kick_rest_s=1.0)) for _ in range(400))
    chance = kicked(KICKED, kick, pulse_s, P.kick_hold_s)
    assert 0.3 < chance < 0.9
    assert abs(lasted - 400 * chance) < 4.0 * math.sqrt(400 * chance * (1.0 - chance))


def test_without_a_kick_law_nothing_changes() -> None:
    """Where no `kick_s` is stated, a step down that follows a start at once is held out, as ever."""
    motor = PrescribedMotor(MOTOR, 2.0, np.random.default_rng(5))
    motor.set_supply(12.0, math.inf, True)
    motor.set_drive(1000.0, 100.0, True)
    motor.advance(0.001)
    motor.set_drive(1000.0, 20.0, True)
    motor.advance(5.0)
    assert motor.turning
    assert motor.stops == 0


def test_counting_finds_the_closed_form() -> None:
    """Counted kicks of the motor in its file give the closed form's pulse within four of the stated standard errors
    (independent method; false-alarm chance 1e-4), and the standard error is no more than 4 %."""
    job = load(shipped("prescribed"))
    assert job.motor.simulated is not None
    simulated = job.motor.simulated.model_copy(update={"kick_s": 0.12, "kick_spread": 0.35})
    motor = job.motor.model_copy(update={"simulated": simulated})
    p = replace(P, kick_duties_percent=(100.0,), kick_rest_s=1.0, run_in=(60.0, 1.0))
    truth = prescribed_truth(values(PrescribedTruth, simulated), AT, p)
    task = Task(motor, AT, p, "stall", 0.0, 1, (7,))
    counted = kick_truth(task, truth["sustain_99_duty_percent"]["value"], 3000, map)["kick_99_s"]
    assert counted["value"] == pytest.approx(truth["kick_99_s"]["value"], abs=4.0 * counted["u"])
    assert counted["u"] < 0.04 * counted["value"]
