"""The true kick of a simulated motor, by counting: the pulse after which 99 % of the starts last. Named as findings.

The trials are `trials`'; the law through the counts is `truth_law`'s, over the natural logarithm of the pulse time.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from sweeprig.errors import SweeprigError
from sweeprig.simbench.trials import BLOCK_TRIALS, Counts, Finding, Map, Task, perform
from sweeprig.simbench.truth_law import fit_law

NAMES = ("kick_99_s", "kick_99_second_s", "kick_99_third_s")
"""Of the highest kick duty, the second and the third."""
SHORTEST_S, LONGEST_S = 1e-3, 20.0
_LEVELS = (0.05, 0.15, 0.3, 0.5, 0.7, 0.85, 0.93, 0.97, 0.99, 0.995)
_ROUNDS = 4
_FEW = 16


def kick_truth(task: Task, sustain_percent: float | None, runs: int, spread: Map) -> dict[str, Finding]:
    """{finding: {"value", "u"}} for each kick duty of the procedure; the run duty is the true one that 99 % of holds
    sustain plus the margin. Empty where the procedure has no kick."""
    duties = sorted(task.procedure.kick_duties_percent, reverse=True)
    if not duties:
        return {}
    if sustain_percent is None:
        return {name: {"value": None, "reason": "never_stopped"} for name, _ in zip(NAMES, duties, strict=False)}
    run = min(sustain_percent + task.procedure.kick_margin_percent, task.procedure.duty_high_percent)
    found = {}
    for number, (name, duty) in enumerate(zip(NAMES, duties, strict=False)):
        one = replace(task, kind="kick", kick=(duty, run), seed=(*task.seed, number))
        found[name] = _pulse(one, runs, spread)
    return found


def _pulse(task: Task, runs: int, spread: Map) -> Finding:
    """The pulse, s: bisection for the half, trials around it, then where they count; u from the law through them."""
    middle = _half(task)
    if middle is None:
        return {"value": None, "reason": "no pulse of 1 ms to 20 s starts half of the time"}
    around = [float(x) for x in np.linspace(middle - 1.0, middle + 1.0, 10)]
    counts: list[Counts] = list(spread(perform, _spread_out(task, around, runs // 3, 10)))
    law = fit_law(counts, degrees=(2,))
    for stage in range(_ROUNDS):
        places = [law.duty_near(level) for level in _LEVELS]
        counts += spread(perform, _spread_out(task, places, runs - runs // 3, 11 + stage))
        law = fit_law(counts)
        if law.reaches(0.995):
            break
    try:
        place, u = law.duty_at(0.99)
    except SweeprigError:
        return {"value": None, "reason": "the trials did not reach a chance of 99 %"}
    return {"value": math.exp(place), "u": math.exp(place) * u}


def _half(task: Task) -> float | None:
    """ln of the pulse (s) that starts half of the time; None where neither end of the range is on its side."""
    low, high = math.log(SHORTEST_S), math.log(LONGEST_S)

    def share(place: float, count: int) -> float:
        got = perform(replace(task, duty=place, trials=_FEW, seed=(*task.seed, 1, count)))
        return got.events / got.trials

    if share(low, 0) > 0.5 or share(high, 1) < 0.5:
        return None
    for count in range(2, 10):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if share(middle, count) > 0.5 else (middle, high)
    return 0.5 * (low + high)


def _spread_out(task: Task, places: list[float], runs: int, stage: int) -> list[Task]:
    """`runs` trials shared evenly over the places, in blocks, each with a seed of its own."""
    blocks = max(1, round(runs / len(places) / BLOCK_TRIALS))
    size = max(1, round(runs / len(places) / blocks))
    return [
        replace(task, duty=place, trials=size, seed=(*task.seed, stage, number, block))
        for number, place in enumerate(places)
        for block in range(blocks)
    ]
