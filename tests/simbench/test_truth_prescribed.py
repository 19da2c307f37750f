"""The closed-form truth of motors with a prescribed law."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from sweeprig.holds import Condition
from sweeprig.simbench.kinds.prescribed import PrescribedMotor, PrescribedTruth
from sweeprig.simbench.trials import Procedure
from sweeprig.simbench.truth_prescribed import prescribed_truth, started, survival

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
