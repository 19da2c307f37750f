"""True findings that plain trials cannot reach: the duty of long service, and the chance of a stop far in the tail.

Rates by splitting (`rare_trials`) at some duties, a smooth line through their logarithms; no formula of the analysis.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from sweeprig.simbench.plant import Plant
from sweeprig.simbench.rare import Rate
from sweeprig.simbench.rare_trials import stop_rate_in_hold, stop_rate_in_service
from sweeprig.simbench.trials import Finding, Map, Task, cold_plant

SERVICE_S = 86_400.0
SERVICE_PERCENT = 99.0
"""`long_run_duty_percent` is the duty that so many of the services survive (definitions: 24 h at 99 %)."""
BATCHES = 4
NEAR = 6.0
"""Points within so much of the wanted logarithm carry the line."""
FLOOR_U_LOG = 0.5
"""No point is believed better than this: the scatter of splitting has long tails that few batches do not show."""
ROUNDS = 4
SPREAD_OUT = 6
"""Duties a round: three for each of two processes."""


def long_run(task: Task, sustain_percent: float, spread_percent: float, spread: Map) -> tuple[Finding, Finding]:
    """(the duty of long service, the tail: chances of a stop in one hold at duties from `sustain_percent` up to there).

    sustain_percent, spread_percent   where a hold is survived with 99 %, and the stopping law's spread: where to begin
    `task.trials` forks a rung; more give a smaller u
    """
    if type(cold_plant(task)) is not Plant:
        missing: Finding = {"value": None, "reason": "no_rare_event_method_for_this_plant"}
        return missing, missing
    wanted = math.log(-math.log(SERVICE_PERCENT / 100.0) / SERVICE_S)
    # beyond the tested range the hazard falls at least as fast as the law of that spread says
    fall = 1.283 / spread_percent
    begin = math.log(0.01 / task.procedure.hold_time_s)
    low, high = sustain_percent, sustain_percent + (begin - wanted) / fall
    points: list[tuple[float, float, float]] = []
    for attempt in range(ROUNDS):
        duties = [min(task.procedure.duty_high_percent, float(d)) for d in np.linspace(low, high, SPREAD_OUT)]
        points += _measured(task, duties, attempt, spread)
        near = [point for point in points if abs(point[1] - wanted) < NEAR]
        if len(near) > SPREAD_OUT:
            break
        low, high = _around(points, wanted, fall)
    else:
        missing = {"value": None, "reason": "not_found_in_the_tail"}
        return missing, missing
    duty, u = crossing(near, wanted)
    return {"value": duty, "u": u}, _tail(task, sustain_percent, duty, spread)


def _measured(task: Task, duties: Sequence[float], stage: int, spread: Map) -> list[tuple[float, float, float]]:
    """(duty, ln of the stops per second in service, its standard error), where the splitting found any."""
    tasks = [replace(task, duty=d, seed=(*task.seed, 40 + stage, i)) for i, d in enumerate(duties)]
    rates = spread(service_rate, tasks)
    return [(d, math.log(r.value), r.u_log) for d, r in zip(duties, rates, strict=True) if r.value > 0.0]


def service_rate(task: Task) -> Rate:
    """Of a function of the module: it goes to other processes by its name."""
    return stop_rate_in_service(task, BATCHES)


def hold_rate(task: Task) -> Rate:
    return stop_rate_in_hold(task, BATCHES)


def _around(points: Sequence[tuple[float, float, float]], wanted: float, fall: float) -> tuple[float, float]:
    """The range of duties that holds the wanted logarithm and ±1.5 of it, by the nearest two points."""
    nearest = sorted(points, key=lambda point: abs(point[1] - wanted))[:3]
    slope = -fall
    if len(nearest) == 3:
        slope = min(-fall, float(np.polyfit([p[0] for p in nearest], [p[1] for p in nearest], 1)[0]))
    duty = nearest[0][0] + (wanted - nearest[0][1]) / slope
    return duty + 1.5 / slope, duty - 1.5 / slope


def crossing(points: Sequence[tuple[float, float, float]], wanted: float) -> tuple[float, float]:
    """(duty, standard error) where a weighted straight line through (duty, logarithm, its u) takes the wanted value.

    Each point has at least FLOOR_U_LOG; the standard error is enlarged by the Birge ratio where the points scatter more
    than that, never made smaller.
    """
    x, y, u = np.array(points).T
    u = np.hypot(u, FLOOR_U_LOG)
    centre = float(np.average(x, weights=u**-2))
    design = np.column_stack([np.ones_like(x), x - centre]) / u[:, None]
    covariance = np.linalg.inv(design.T @ design)
    level, slope = (float(c) for c in covariance @ design.T @ (y / u))
    misfit = float(np.sum(((y - level - slope * (x - centre)) / u) ** 2)) / max(1, len(x) - 2)
    away = (wanted - level) / slope
    gradient = np.array([1.0, away])
    variance = float(gradient @ covariance @ gradient) * max(1.0, misfit)
    return centre + away, math.sqrt(variance) / abs(slope)


def _tail(task: Task, low: float, high: float, spread: Map) -> Finding:
    """Chance of a stop in one hold on the falling branch, from `low` to `high`, each with the u of its logarithm."""
    duties = [float(d) for d in np.linspace(low, high, SPREAD_OUT)]
    tasks = [replace(task, duty=d, seed=(*task.seed, 50, i)) for i, d in enumerate(duties)]
    rates: list[Any] = list(spread(hold_rate, tasks))
    seconds = task.procedure.hold_time_s
    return {
        "duty_percent": duties,
        "chance": [rate.chance(seconds) for rate in rates],
        "u_log": [rate.u_log if math.isfinite(rate.u_log) else None for rate in rates],
    }
