"""One step of the rotor: against an adaptive integrator, its stop and edge times, and the rules of catch and start."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from sweeprig.simbench.chopper import Chopper, chopper, mean_current
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.rotor import Motion, after, caught, motion, starts, time_to_stop, time_to_turn


def fan(inertia: float = 6e-6) -> MotorTruth:
    return MotorTruth(
        resistance_ohm=11.6,
        inductance_henry=0.014,
        torque_constant_nm_per_a=0.028,
        inertia_kg_m2=inertia,
        quadratic_load_nm_s2=6e-8,
        viscous_friction_nm_s=2e-6,
        running_friction_nm=1e-3,
        running_friction_spread_percent=0.0,
        breakaway_friction_nm=6e-3,
        breakaway_friction_spread_percent=0.0,
        friction_correlation_s=0.1,
        barrier_angle_rad=1.0,
        thermal_resistance_k_per_w=12.0,
        thermal_time_constant_s=240.0,
    )


def electric(pwm_hz: float, duty: float) -> Chopper:
    return chopper(12.0, 11.6, 0.014, pwm_hz, duty)


@pytest.mark.parametrize(("pwm_hz", "duty"), [(300.0, 12.0), (1000.0, 30.0), (25e3, 100.0)])
@pytest.mark.parametrize("begin", [0.0, 300.0])
def test_run_up_and_run_down_in_20_ms_steps(pwm_hz: float, duty: float, begin: float) -> None:
    """From rest and from 300 rad/s the speed stays within 0.5 % of the span of an adaptive integrator's solution.

    Independent method: scipy's LSODA at 1e-10 on the unlinearised equation; the mechanical time constants of these
    settings are 60 ms (full duty, a light rotor) and more.
    """
    motor, setting, friction = fan(inertia=4.1e-6), electric(pwm_hz, duty), 1e-3
    k = motor.torque_constant_nm_per_a

    def slope(_: float, w: "np.ndarray[tuple[int], np.dtype[np.float64]]") -> list[float]:
        speed = float(w[0])
        torque = k * mean_current(setting, k * speed)[0] - friction - 2e-6 * speed - 6e-8 * speed * speed
        return [torque / motor.inertia_kg_m2]

    grid = np.arange(0.0, 0.5, 0.02)
    exact = solve_ivp(slope, (0.0, 0.5), [begin], method="LSODA", t_eval=grid, rtol=1e-10, atol=1e-10).y[0]
    speed, angle, speeds = begin, 0.0, []
    for _ in grid:
        speeds.append(speed)
        speed, turned = after(motion(motor, setting, speed, friction), 0.02)
        angle += turned
    span = max(abs(exact[-1] - begin), 0.2 * begin)
    assert np.max(np.abs(np.array(speeds) - exact)) < 5e-3 * span
    for _ in range(200):
        speed, _ = after(motion(motor, setting, speed, friction), 0.02)
    assert slope(0.0, np.array([speed]))[0] == pytest.approx(0.0, abs=1e-6)


def test_series_and_closed_form_meet() -> None:
    """Where the step changes from the closed form to its series, speed and angle do not jump."""
    x = 1e-3 / 0.02
    closed = after(Motion(10.0, -5.0, -x * (1 + 1e-9), 0.0, 0.0), 0.02)
    series = after(Motion(10.0, -5.0, -x * (1 - 1e-9), 0.0, 0.0), 0.02)
    assert closed == pytest.approx(series, rel=1e-11)
    assert after(Motion(10.0, -5.0, 0.0, 0.0, 0.0), 0.02) == pytest.approx((9.9, 0.199), rel=1e-14)


def test_angle_is_the_integral_of_speed() -> None:
    """The angle of a step equals a fine sum of its speeds (independent method)."""
    start = Motion(50.0, -300.0, -8.0, 0.0, 0.0)
    grid = (np.arange(20_000) + 0.5) * 0.02 / 20_000
    summed = sum(after(start, float(t))[0] for t in grid) * 0.02 / 20_000
    assert after(start, 0.02)[1] == pytest.approx(summed, rel=1e-9)


@pytest.mark.parametrize("rate", [-5.0, -1e-9, 0.0])
def test_time_to_stop(rate: float) -> None:
    """At the time to stop the speed is zero; a rotor that does not slow down, or not enough, never stops."""
    start = Motion(20.0, -400.0, rate, 0.0, 0.0)
    assert after(start, time_to_stop(start))[0] == pytest.approx(0.0, abs=1e-6)
    assert math.isinf(time_to_stop(Motion(20.0, 5.0, rate, 0.0, 0.0)))
    assert math.isinf(time_to_stop(Motion(20.0, -10.0, -5.0, 0.0, 0.0)))


@pytest.mark.parametrize(
    ("speed", "acceleration", "rate"), [(100.0, -900.0, -9.0), (0.0, 300.0, -5.0), (5.0, -200.0, -3.0)]
)
def test_time_to_turn(speed: float, acceleration: float, rate: float) -> None:
    """By the time given for an angle the rotor has turned by just that angle."""
    start = Motion(speed, acceleration, rate, 0.0, 0.0)
    seconds = min(0.02, time_to_stop(start))
    whole = after(start, seconds)[1]
    for part in (0.001, 0.3, 0.77, 0.999):
        at = time_to_turn(start, part * whole, seconds)
        assert after(start, at)[1] == pytest.approx(part * whole, rel=1e-7)


def test_caught_by_energy_against_barrier() -> None:
    """The rotor is caught below the speed whose kinetic energy is the barrier, and never when the peak exceeds it."""
    motor = fan()
    critical = math.sqrt(2.0 * (6e-3 - 4e-3) * 1.0 / 6e-6)
    assert caught(motor, 0.999 * critical, 6e-3, 4e-3)
    assert not caught(motor, 1.001 * critical, 6e-3, 4e-3)
    assert not caught(motor, 0.0, 6e-3, 6.001e-3)


def test_starts_by_peak_and_by_mean() -> None:
    """A start needs the peak above the breakaway torque and the mean above the running friction."""
    assert starts(6e-3, 6.1e-3, 1.1e-3, 1.0e-3)
    assert not starts(6e-3, 5.9e-3, 1.1e-3, 1.0e-3)
    assert not starts(6e-3, 6.1e-3, 0.9e-3, 1.0e-3)
