"""True findings that plain trials cannot reach: the duty of long service, and chances far in the tails.

Of the plain averaged motor by the chain of its frictions (`rare_chain`, `rare_starts`); of every other kind by
splitting (`rare_trials`) within a fixed effort, starts by counting. What is out of reach says so, and how many trials
would do. No formula of the analysis.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sweeprig.errors import SweeprigError
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.rare import Rate
from sweeprig.simbench.rare_chain import chain_rate_in_hold, chain_rate_in_service
from sweeprig.simbench.rare_starts import Chance, start_failure
from sweeprig.simbench.rare_trials import stop_rate_in_hold, stop_rate_in_service
from sweeprig.simbench.trials import BLOCK_TRIALS, Finding, Map, Task, cold_plant, perform

BATCHES = 4
NEAR = 4.0
"""Points within so much of the wanted logarithm carry the line."""
FLOOR_U_LOG = 0.05
"""No point is believed better than this: the winding's warmth varies a little, and so does the rate."""
ROUNDS = 4
SPREAD_OUT = 6
"""Duties a round: three for each of two processes."""
MOST_STEPS = 3e6
"""Steps of the walks behind one rate by splitting: some minutes on the slowest plants."""
MOST_U_LOG = 1.0
"""A rate by splitting that is less sure than this counts as out of reach: few forks, so deep, are mostly much too low
(seen: 1e-10 for 1e-7 with a stated u of 1.6)."""
START_TRIALS = 1000
"""Counted at each duty of `start_tail` where the chain does not hold."""
WANTED_U_LOG = 0.5
"""What the stated number of trials would reach by counting."""
BEYOND_SPREADS = 4.0
"""`start_tail` reaches so many spreads of the starting law beyond the 99 % duty."""


def by_chain(task: Task) -> bool:
    """The motor has no more state than the chain knows."""
    return type(cold_plant(task)) is Plant


def trials_to_count(chance: float) -> float:
    """Plain trials that would give a chance with WANTED_U_LOG of its logarithm; infinite for one of zero."""
    return math.inf if chance <= 0.0 else math.ceil((1.0 - chance) / (chance * WANTED_U_LOG**2))


def long_run(task: Task, sustain_percent: float, spread_percent: float, spread: Map) -> tuple[Finding, Finding]:
    """(the duty of long service, the tail: chances of a stop in one hold at duties from `sustain_percent` up to there).

    sustain_percent, spread_percent   where a hold is survived with 99 %, and the stopping law's spread: where to begin
    `task.trials` forks a rung of splitting; more give a smaller u
    """
    service_s, service_percent = task.procedure.service_s, task.procedure.service_percent
    wanted = math.log(-math.log(service_percent / 100.0) / service_s)
    # beyond the tested range the hazard falls at least as fast as the law of that spread says
    fall = 1.283 / spread_percent
    begin = math.log(0.01 / task.procedure.hold_time_s)
    low, high = sustain_percent, sustain_percent + (begin - wanted) / fall
    points: list[tuple[float, float, float]] = []
    for attempt in range(ROUNDS):
        duties = [min(task.procedure.duty_high_percent, float(d)) for d in np.linspace(low, high, SPREAD_OUT)]
        points += _measured(task, duties, attempt, spread)
        near = [point for point in points if abs(point[1] - wanted) < NEAR]
        if len(near) >= SPREAD_OUT - 1 and attempt:
            duty, u = crossing(near, wanted)
            return {"value": duty, "u": u}, _tail(task, sustain_percent, duty, spread)
        if len(points) < 2:
            break
        low, high = _around(points, wanted, fall)
    services = trials_to_count(1.0 - service_percent / 100.0)
    missing: Finding = {"value": None, "reason": "not_affordable", "trials_needed": services, "trial_s": service_s}
    end = min(task.procedure.duty_high_percent, sustain_percent + 3.0 * spread_percent)
    return missing, _tail(task, sustain_percent, end, spread)


def _measured(task: Task, duties: Sequence[float], stage: int, spread: Map) -> list[tuple[float, float, float]]:
    """(duty, ln of the stops per second in service, its standard error), where any was found."""
    tasks = [replace(task, duty=d, seed=(*task.seed, 40 + stage, i)) for i, d in enumerate(duties)]
    rates = list(spread(service_rate, tasks))
    return [(d, math.log(r.value), r.u_log) for d, r in zip(duties, rates, strict=True) if math.isfinite(r.u_log)]


def service_rate(task: Task) -> Rate:
    """Of a function of the module: it goes to other processes by its name. Zero, with an infinite u: out of reach."""
    try:
        return chain_rate_in_service(task) if by_chain(task) else _sure(stop_rate_in_service(task, BATCHES, MOST_STEPS))
    except SweeprigError:
        return Rate(0.0, math.inf)


def _sure(rate: Rate) -> Rate:
    return rate if rate.u_log <= MOST_U_LOG else Rate(0.0, math.inf)


def hold_rate(task: Task) -> Rate:
    """As `service_rate`, for holds on the falling branch."""
    try:
        return chain_rate_in_hold(task) if by_chain(task) else _sure(stop_rate_in_hold(task, BATCHES, MOST_STEPS))
    except SweeprigError:
        return Rate(0.0, math.inf)


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
    """Chance of a stop in one hold on the falling branch, from `low` to `high` (`_listed`)."""
    duties = [float(d) for d in np.linspace(low, high, SPREAD_OUT)]
    rates: list[Rate] = list(spread(hold_rate, _at(task, duties, 50)))
    seconds = task.procedure.hold_time_s
    return _listed(duties, [Chance(rate.chance(seconds), rate.u_log) for rate in rates])


def _at(task: Task, duties: Sequence[float], stage: int) -> list[Task]:
    return [replace(task, duty=d, seed=(*task.seed, stage, i)) for i, d in enumerate(duties)]


def _listed(duties: Sequence[float], chances: Sequence[Chance]) -> Finding:
    """{"duty_percent", "chance", "u_log" (of its natural logarithm), "trials_needed"}: None where it is out of reach.

    trials_needed   what counting would take for a u_log of WANTED_U_LOG
    """
    reached = [math.isfinite(one.u_log) and one.value > 0.0 for one in chances]
    return {
        "duty_percent": list(duties),
        "chance": [one.value if is_so else None for one, is_so in zip(chances, reached, strict=True)],
        "u_log": [one.u_log if is_so else None for one, is_so in zip(chances, reached, strict=True)],
        "trials_needed": [
            trials_to_count(one.value) if is_so else None for one, is_so in zip(chances, reached, strict=True)
        ],
    }


def start_tail(task: Task, start_99_percent: float, spread_percent: float, spread: Map) -> Finding:
    """Chance that one start from rest fails, from `start_99_percent` on upwards (`_listed`)."""
    high = min(task.procedure.duty_high_percent, start_99_percent + BEYOND_SPREADS * spread_percent)
    duties = [float(d) for d in np.linspace(start_99_percent, high, SPREAD_OUT)]
    return _listed(duties, list(spread(failure_to_start, _at(task, duties, 60))))


def failure_to_start(task: Task) -> Chance:
    """By the chain where that holds, else counted in blocks; none in all trials: an infinite u."""
    if by_chain(task):
        try:
            return start_failure(task)
        except SweeprigError:
            pass  # its friction wanders too slowly for a grid: counted below
    blocks = START_TRIALS // BLOCK_TRIALS
    counts = [perform(replace(task, kind="start", trials=BLOCK_TRIALS, seed=(*task.seed, i))) for i in range(blocks)]
    return counted([one.trials - one.events for one in counts], BLOCK_TRIALS)


def counted(failures: Sequence[int], each: int) -> Chance:
    """The chance by counting; its u is the binomial one, or that of the scatter between the blocks if larger."""
    total, trials = sum(failures), len(failures) * each
    if total == 0:
        return Chance(0.0, math.inf)
    chance = total / trials
    scatter = float(np.std(failures, ddof=1)) / math.sqrt(len(failures)) / (chance * each)
    return Chance(chance, max(math.sqrt((1.0 - chance) / total), scatter))
