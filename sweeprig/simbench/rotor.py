"""Averaged mechanics of the rotor: one step of the speed, and when a rough spot catches it or lets it go.

Pure functions of plain floats; who steps when, and with which friction, is `plant`'s business.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.stage import Setting


class Motion(NamedTuple):
    """The rotor at the beginning of a step, linearised: dω/dt = acceleration + rate·(ω − speed).

    speed          rad/s; acceleration rad/s²; rate 1/s, below zero (exactly zero only for a load-free coast)
    amps           mean motor current at the beginning; amps_slope its derivative by ω, A·s/rad
    """

    speed: float
    acceleration: float
    rate: float
    amps: float
    amps_slope: float


Numbers = tuple[float, float, float, float, float]
"""A `Motion`, or its fields in the same order: what the functions below take and give, so that they may be compiled."""


def mechanics_of(motor: MotorTruth) -> tuple[float, float, float, float]:
    """(K, c, q, J) of a motor: what `linearised` takes."""
    return (
        motor.torque_constant_nm_per_a, motor.viscous_friction_nm_s, motor.quadratic_load_nm_s2, motor.inertia_kg_m2
    )  # fmt: skip


def motion(motor: MotorTruth, electric: Setting, speed: float, friction_nm: float) -> Motion:
    """J·dω/dt = K·Ī(ω) − T_run − c·ω − q·ω², linearised at `speed`; Ī from the stage at back-EMF K·ω."""
    amps, per_volt = electric.mean_current(motor.torque_constant_nm_per_a * speed)
    return Motion._make(linearised(mechanics_of(motor), amps, per_volt, speed, friction_nm))


def linearised(
    mechanics: tuple[float, float, float, float], amps: float, per_volt: float, speed: float, friction_nm: float
) -> Numbers:
    """The same from the mean current (A) and its derivative by the back-EMF (A/V)."""
    k, c, q, j = mechanics
    slope = per_volt * k
    drag = q * speed
    return (
        speed,
        (k * amps - friction_nm - (c + drag) * speed) / j,
        (k * slope - c - 2.0 * drag) / j,
        amps,
        slope,
    )


def after(start: Numbers, seconds: float) -> tuple[float, float]:
    """(ω in rad/s, angle turned in rad) `seconds` later: the exponential Rosenbrock-Euler step.

    Exact where the equation is linear (continuous current, no quadratic load). Otherwise second order: the error of one
    step is ⅙·h³·f''·(dω/dt)²; at 20 ms and time constants from 50 ms run-ups deviate from the exact solution by less
    than 0.5 % of the final speed while they rise, and settled speeds not at all (tested).
    """
    began, acceleration, rate, _, _ = start
    x = rate * seconds
    change = acceleration * seconds
    if -1e-3 < x < 1e-3:  # the closed form loses digits here; the series does not, and covers a rate of zero
        first, second = 1.0 + x * (0.5 + x / 6.0), 0.5 + x * (1.0 / 6.0 + x / 24.0)
    else:
        first = math.expm1(x) / x
        second = (first - 1.0) / x
    return began + change * first, (began + change * second) * seconds


def time_to_stop(start: Motion) -> float:
    """Seconds until ω is zero in the linearised motion; infinity when it never is."""
    if start.acceleration >= 0.0:
        return 0.0 if start.speed <= 0.0 and start.acceleration == 0.0 else math.inf
    x = start.rate * start.speed / start.acceleration
    if start.rate == 0.0:
        return -start.speed / start.acceleration
    return math.log1p(-x) / start.rate if x < 1.0 else math.inf


def time_to_turn(start: Motion, angle: float, seconds: float) -> float:
    """When within `seconds` the rotor has turned by `angle` (rad): Newton from the even pace; angle(t) is monotone."""
    _, whole = after(start, seconds)
    t = seconds * angle / whole
    for _ in range(60):  # from standstill the angle begins quadratically: Newton then only halves its error at first
        speed, turned = after(start, t)
        if speed <= 0.0:
            break
        better = min(seconds, max(0.0, t - (turned - angle) / speed))
        if abs(better - t) < 1e-12:
            return better
        t = better
    return t


def caught(motor: MotorTruth, speed: float, breakaway_nm: float, peak_nm: float) -> bool:
    """A rough spot holds the rotor: ½·J·ω² < (breakaway − peak torque at standstill) · barrier angle.

    The peak of the pulsing torque helps over the spot; where it exceeds the breakaway torque there is no barrier.
    """
    return 0.5 * motor.inertia_kg_m2 * speed * speed < (breakaway_nm - peak_nm) * motor.barrier_angle_rad


def starts(breakaway_nm: float, peak_nm: float, mean_nm: float, running_nm: float) -> bool:
    """From rest: the peak torque overcomes the rough spot it rests in, and the mean torque the running friction."""
    return peak_nm > breakaway_nm and mean_nm > running_nm
