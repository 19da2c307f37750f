"""A motor on a low-side switch by scipy's integrators, restarted at each switching moment: what averaging must equal.

Written from the circuit and Newton's law for the figures of speed and error; no formula of the simulated bench is used.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

from scipy.integrate import solve_ivp

Method = Literal["RK45", "LSODA", "Radau", "DOP853"]
DROP_V = 0.5


@dataclass(frozen=True)
class Motor:
    """SI units; friction is constant, load linear and quadratic in the speed."""

    ohm: float
    henry: float
    k: float
    inertia: float
    friction: float
    viscous: float
    quadratic: float


@dataclass(frozen=True)
class Run:
    """What is asked: from rest to `seconds`; the answer is the mean speed over the last `settled` of them."""

    volts: float
    pwm_hz: float
    duty: float
    seconds: float
    settled: float


def mean_speed(motor: Motor, run: Run, method: Method, rtol: float) -> float:
    """rad/s, from the angle turned in the settled part."""
    period = 1.0 / run.pwm_hz
    state, angle_before = [0.0, 0.0, 0.0], 0.0
    periods = round(run.seconds * run.pwm_hz)
    first_settled = periods - round(run.settled * run.pwm_hz)
    for number in range(periods):
        if number == first_settled:
            angle_before = state[2]
        state = _phase(motor, run.volts, run.duty * period, state, method, rtol)
        state = _phase(motor, -DROP_V, (1.0 - run.duty) * period, state, method, rtol)
    return float(state[2] - angle_before) / run.settled


def _phase(motor: Motor, volts: float, seconds: float, state: Any, method: Method, rtol: float) -> list[float]:
    """One phase of the period; where the freewheeling current comes to zero, on without it."""
    settings: dict[str, Any] = {"method": method, "rtol": rtol, "atol": [rtol * 1e-2, rtol * 1.0, rtol * 1.0]}
    if volts > 0.0:
        return list(solve_ivp(_conducting(motor, volts), (0.0, seconds), state, **settings).y[:, -1])

    def current(_: float, y: Any) -> float:
        return float(y[0])

    current.terminal = True  # type: ignore[attr-defined]  # scipy reads attributes of the event function
    current.direction = -1.0  # type: ignore[attr-defined]  # likewise
    done = solve_ivp(_conducting(motor, volts), (0.0, seconds), state, events=current, **settings)
    state, left = done.y[:, -1], seconds - float(done.t[-1])
    if left > 0.0:
        state[0] = 0.0
        state = solve_ivp(_coasting(motor), (0.0, left), state, **settings).y[:, -1]
    return list(state)


def _conducting(motor: Motor, volts: float) -> Callable[[float, Any], list[float]]:
    m = motor

    def slopes(_: float, y: Any) -> list[float]:
        amps, speed, _angle = y
        torque = m.k * amps - (m.friction if speed > 0.0 or m.k * amps > m.friction else m.k * amps)
        pull = torque - m.viscous * speed - m.quadratic * speed * speed
        return [(volts - m.ohm * amps - m.k * speed) / m.henry, pull / m.inertia, speed]

    return slopes


def _coasting(motor: Motor) -> Callable[[float, Any], list[float]]:
    m = motor

    def slopes(_: float, y: Any) -> list[float]:
        speed = y[1]
        friction = m.friction if speed > 0.0 else 0.0
        return [0.0, -(friction + m.viscous * speed + m.quadratic * speed * speed) / m.inertia, speed]

    return slopes
