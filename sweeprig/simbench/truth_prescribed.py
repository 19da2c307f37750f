"""The truth of a motor with a prescribed law, in closed form: no trial is run. Named and shaped as `truth` does it.

Drift is left out: this is the truth of the night's beginning. Scatter is averaged over its normal law.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import asdict
from typing import Any

import numpy as np
from scipy.optimize import brentq

from sweeprig.holds import Condition
from sweeprig.simbench.kinds.prescribed import PrescribedTruth
from sweeprig.simbench.trials import WHOLE_REVOLUTIONS, Procedure

SERVICE_S = 86_400.0
_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(61)
Finding = dict[str, Any]


def survival(motor: PrescribedTruth, duty: float, seconds: float) -> float:
    """The chance that a hold of `seconds` at `duty` (percent) is survived, over the scatter of the threshold."""
    return _over_scatter(motor, lambda shift: motor.survival(duty, seconds, shift))


def started(motor: PrescribedTruth, duty: float, seconds: float) -> float:
    """The chance of a start from rest: turning at once, ten whole revolutions in time, and still turning at the end.

    The speed rises as 1 − e^(−t/τ), so it is certain whether a rotor that turns has its ten revolutions in time.
    """
    tau = motor.time_constant_s
    turns = motor.rpm(duty) / 60.0 * (seconds + tau * math.expm1(-seconds / tau))
    if turns < WHOLE_REVOLUTIONS:
        return 0.0
    return _over_scatter(motor, lambda shift: motor.start_chance(duty, shift) * motor.survival(duty, seconds, shift))


def _over_scatter(motor: PrescribedTruth, chance: Callable[[float], float]) -> float:
    if motor.scatter_percent == 0.0:
        return chance(0.0)
    values = [chance(motor.scatter_percent * float(z)) for z in _NODES]
    return float(np.dot(_WEIGHTS, values)) / math.sqrt(2.0 * math.pi)


def prescribed_truth(motor: PrescribedTruth, condition: Condition, p: Procedure) -> dict[str, Any]:
    """The true findings of one condition. Errors of the values: zero (closed form, or a root to 1e-9 percent)."""

    def turning(seconds: float) -> Callable[[float], float]:
        return lambda duty: survival(motor, duty, seconds) if motor.rpm(duty) >= p.lowest_rpm else 0.0

    def starting(duty: float) -> float:
        return started(motor, duty, p.start_time_s)

    found: dict[str, Any] = {
        "condition": asdict(condition), "hold_time_s": p.hold_time_s, "start_time_s": p.start_time_s,
        "rest_time_s": p.rest_time_s, "trials": {},
    }  # fmt: skip
    stall, sustain = (_root(turning(p.hold_time_s), level, p, "stopped") for level in (0.5, 0.99))
    start, start_99 = (_root(starting, level, p, "started") for level in (0.5, 0.99))
    found |= {"stall_duty_percent": stall, "sustain_99_duty_percent": sustain}
    found |= {"start_duty_percent": start, "start_99_duty_percent": start_99}
    found["long_run_duty_percent"] = _root(turning(SERVICE_S), 0.99, p, "stopped")
    found["start_stall_hysteresis_percent"] = _of(lambda a, b: a - b, start, stall)
    found["stall_speed_rpm"] = _of(motor.rpm, stall)
    found["stall_voltage_volts"] = _of(lambda duty: duty / 100.0 * condition.supply_v, stall)
    slowest = found["lowest_reliable_speed_rpm"] = _of(motor.rpm, sustain)
    top = motor.rpm(p.duty_high_percent)
    wanted = top * (1.0 - p.saturation_percent / 100.0)
    high = brentq(lambda duty: motor.rpm(duty) - wanted, 0.0, p.duty_high_percent, xtol=1e-10)
    found["top_speed_rpm"] = _exact(top)
    found["usable_range"] = {
        "low_duty_percent": sustain, "low_duty_from_rest_percent": start_99, "high_duty_percent": _exact(high),
        "high_speed_rpm": _exact(wanted), "low_speed_rpm": slowest, "turndown": _of(lambda low: wanted / low, slowest),
    }  # fmt: skip
    low = p.duty_low_percent if sustain["value"] is None else sustain["value"]
    duties = [float(d) for d in np.linspace(low, p.duty_high_percent, 15)]
    speeds = [motor.rpm(duty) for duty in duties]
    found["speed_curve"] = {"duty_percent": duties, "speed_rpm": speeds, "u_rpm": [0.0] * len(duties)}
    return found


def _root(chance: Callable[[float], float], level: float, p: Procedure, event: str) -> Finding:
    """The lowest allowed duty at which the rising `chance` is `level`; without a value where there is none."""
    low, high = p.duty_low_percent, p.duty_high_percent
    if chance(high) < level:
        return {"value": None, "reason": "always_stopped" if event == "stopped" else "never_started"}
    if chance(low) >= level:
        return {"value": None, "reason": "never_stopped" if event == "stopped" else "always_started"}
    return _exact(float(brentq(lambda duty: chance(duty) - level, low, high, xtol=1e-10)))


def _exact(value: float) -> Finding:
    return {"value": float(value), "u": 0.0}


def _of(formula: Callable[..., float], *findings: Finding) -> Finding:
    """The formula of exact findings; the first missing one where there is any."""
    missing = next((one for one in findings if one["value"] is None), None)
    return missing or _exact(formula(*(one["value"] for one in findings)))
