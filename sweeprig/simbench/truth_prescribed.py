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
from sweeprig.simbench.truth_kick import LONGEST_S, NAMES, SHORTEST_S

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


def kicked(motor: PrescribedTruth, kick: tuple[float, float], pulse_s: float, seconds: float) -> float:
    """The chance that a pulse at the first duty (percent) starts it and that it turns on for `seconds` at the second.

    It starts at the kick duty and holds out the step down, or starts at the run duty as from rest, then or never; the
    threshold scatters anew at each setting."""
    duty, run = kick
    holds_out = motor.kick_chance(duty, pulse_s)
    starts = _over_scatter(motor, lambda shift: motor.start_chance(duty, shift))

    def lasts(shift: float) -> float:
        from_rest = motor.start_chance(run, shift)
        turning = starts * (holds_out + (1.0 - holds_out) * from_rest) + (1.0 - starts) * from_rest
        return turning * motor.survival(run, seconds, shift)

    return _over_scatter(motor, lasts)


def _kicks(motor: PrescribedTruth, sustain: Finding, p: Procedure) -> dict[str, Finding]:
    """The true pulses, s, at the true sustaining duty plus the margin; a root on the logarithm of time."""
    found: dict[str, Finding] = {}
    for name, duty in zip(NAMES, sorted(p.kick_duties_percent, reverse=True), strict=False):
        if sustain["value"] is None:
            found[name] = sustain
            continue
        kick = duty, min(sustain["value"] + p.kick_margin_percent, p.duty_high_percent)
        ends = [kicked(motor, kick, seconds, p.kick_hold_s) for seconds in (SHORTEST_S, LONGEST_S)]
        if not ends[0] < 0.99 <= ends[1]:
            found[name] = {"value": None, "reason": "never_started" if ends[1] < 0.99 else "always_started"}
            continue
        low, high = math.log(SHORTEST_S), math.log(LONGEST_S)
        root = brentq(_short_of_99, low, high, args=(motor, kick, p.kick_hold_s), xtol=1e-12)
        found[name] = _exact(math.exp(float(root)))
    return found


def _short_of_99(place: float, motor: PrescribedTruth, kick: tuple[float, float], seconds: float) -> float:
    return kicked(motor, kick, math.exp(place), seconds) - 0.99


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
    found["long_run_duty_percent"] = _root(turning(p.service_s), p.service_percent / 100.0, p, "stopped")
    found |= _kicks(motor, sustain, p)
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
