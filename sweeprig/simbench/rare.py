"""Rare events by multilevel splitting: how often does a walk reach its end, when plain trials would never show it?

The method alone, for any walk that can be forked and says how near the event it is. No motor: `rare_trials` has that.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol, TypeVar

import numpy as np
from scipy import stats

from sweeprig.errors import SweeprigError

EVENT = math.inf
"""The score of the event itself."""
KEEP = 0.3
"""Part of the trials that should reach the next rung."""
MOST_RUNGS = 60
FIRST_RUNG_QUANTILE = 0.95
"""The first rung is what the undisturbed walk exceeds so rarely; an excursion ends below the walk's median."""
PILOT_SCORES = 3000
NORMAL_95 = 1.959964
"""Of a two-sided 95 % interval: `u_log` times this covers so often, whatever the number of batches."""

Self_ = TypeVar("Self_", bound="Walk")


class Walk(Protocol):
    """A random process that can be forked; forks go on independently, with random numbers of their own.

    score      nearness to the event, EVENT once it has happened. Any that rises towards the event gives the right
               answer; the better it foretells the event, the smaller the scatter
    over       it ended without the event
    exposure   how long the event could have happened so far, in the unit that the rate is wanted in
    """

    @property
    def score(self) -> float: ...
    @property
    def over(self) -> bool: ...
    @property
    def exposure(self) -> float: ...
    def step(self) -> None: ...
    def fork(self: Self_) -> Self_: ...


@dataclass(frozen=True, slots=True)
class Ladder:
    """base: an excursion has ended below it; rungs: rising scores, the last is EVENT."""

    base: float
    rungs: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Rate:
    """Events per unit of exposure; `u_log` is the standard error of its logarithm: ln(value) ± 1.96·u_log covers the
    truth in 95 of 100 cases, few batches or many.

    A rate of zero (no batch reached the event) has an infinite `u_log`.
    """

    value: float
    u_log: float

    def chance(self, exposure: float) -> float:
        """Of at least one event within `exposure`: the memory of the walk is short against it."""
        return -math.expm1(-self.value * exposure)


def event_rate(fresh: Callable[[], Self_], trials: int, batches: int, rng: np.random.Generator) -> Rate:
    """The rate of events of a walk in its undisturbed course: entries into the first rung, times what comes of them.

    fresh     the next piece of the undisturbed walk, at its beginning, far from the event; the pieces are one after
              the other in time, or independent of each other
    trials    forks run from each rung to the next, in each of `batches` independent repetitions

    Splitting in the steady state (Allen, Warren, ten Wolde 2005, "Sampling rare switching events in biochemical
    networks", Physical Review Letters 94, from memory). The rungs come from a pilot that counts for nothing else.
    """
    base, first = _ground(fresh)
    entries, _ = entries_of(fresh, base, first, max(50, trials // 4))
    ladder = find_ladder(entries, base, first, max(200, trials), rng)
    rates, shares = [], []
    for _ in range(batches):
        entries, exposure = entries_of(fresh, base, first, trials)
        chance, of_ancestors = lineage_of_event(entries, ladder, trials, rng)
        rates.append(len(entries) / exposure * chance)
        shares.append(of_ancestors)
    return rate_of_batches(rates, shares)


def rate_of_batches(rates: Sequence[float], shares: Sequence[float]) -> Rate:
    """The mean of the batches' rates with an honest `u_log`.

    shares   of each batch the sum of the squared shares that its ancestors have in what reached the event

    Two parts, added as squares: the scatter between the batches with Student's factor for so few; and that of the
    ancestors, 1/√(their effective number): where few excursions carry everything the batches may agree by chance, all
    of them too low, and the scatter does not show it (the idea of the estimator of Lee and Whiteley 2018, "Variance
    estimation in the particle filter", Biometrika 105, from memory). With either alone the intervals cover too seldom.
    """
    total, count = math.fsum(rates), len(rates)
    if total == 0.0:
        return Rate(0.0, math.inf)
    few = float(stats.t.ppf(0.975, count - 1)) / NORMAL_95 if count > 1 else math.inf
    scatter = few * float(np.std(rates, ddof=1)) / math.sqrt(count) * count / total if count > 1 else math.inf
    ancestors = math.sqrt(math.fsum((rate / total) ** 2 * share for rate, share in zip(rates, shares, strict=True)))
    return Rate(total / count, math.hypot(scatter, ancestors))


def _ground(fresh: Callable[[], Self_]) -> tuple[float, float]:
    """(base, first rung) from the scores of the undisturbed walk."""
    scores: list[float] = []
    while len(scores) < PILOT_SCORES:
        walk = fresh()
        while not walk.over and walk.score < EVENT:
            walk.step()
            scores.append(walk.score)
    base, first = (float(q) for q in np.quantile(scores, [0.5, FIRST_RUNG_QUANTILE], method="lower"))
    if not base < first < EVENT:
        raise SweeprigError(
            "the event is not rare here: splitting has nothing to split",
            value=f"score {base:g} at the median, {first:g} at {100.0 * FIRST_RUNG_QUANTILE:g} %",
            remedy="Count plain trials instead",
        )
    return base, first


def entries_of(fresh: Callable[[], Self_], base: float, first: float, wanted: int) -> tuple[list[Self_], float]:
    """At least `wanted` entries of the undisturbed walk into the first rung, and the exposure in which they came.

    An entry is the first reaching of `first` after the score was below `base`; a piece ends when over or at the event.
    """
    found: list[Self_] = []
    exposure, below = 0.0, True
    while len(found) < wanted:
        walk = fresh()
        while not walk.over:
            walk.step()
            score = walk.score
            if below and score >= first:
                found.append(walk.fork())
                below = False
            elif score < base:
                below = True
            if score == EVENT:
                below = True
                break
        exposure += walk.exposure
    return found, exposure


def climb(walk: Walk, to: float, base: float) -> float:
    """Run until the score reaches `to` or falls below `base` or the walk is over; the highest score on the way."""
    highest = score = walk.score
    while base <= score < to and not walk.over:
        walk.step()
        score = walk.score
        if score > highest:
            highest = score
    return highest


def stage(
    pool: Sequence[Self_], to: float, base: float, trials: int, rng: np.random.Generator
) -> list[tuple[int, Self_]]:
    """Of `trials` forks, taken from all members of the pool as evenly as goes, those that reach `to`, each with its
    parent's place in the pool."""
    whole, rest = divmod(trials, len(pool))
    chosen = [*range(len(pool))] * whole + [int(i) for i in rng.permutation(len(pool))[:rest]]
    return [(i, fork) for i, fork in ((i, pool[i].fork()) for i in chosen) if climb(fork, to, base) >= to]


def find_ladder(entries: Sequence[Walk], base: float, first: float, trials: int, rng: np.random.Generator) -> Ladder:
    """Rungs of which each is reached by about KEEP of the trials from the one before."""
    rungs, pool = [first], list(entries)
    while rungs[-1] < EVENT:
        if len(rungs) > MOST_RUNGS:
            raise SweeprigError(
                "the event is out of reach of the splitting",
                value=f"{len(rungs)} rungs, the last at a score of {rungs[-1]:g}",
                allowed=f"up to {MOST_RUNGS}",
                remedy="Ask nearer to where the event happens",
            )
        highest = sorted(climb(pool[i % len(pool)].fork(), EVENT, base) for i in range(trials))
        rung = highest[int((1.0 - KEEP) * trials)]
        if rung <= rungs[-1]:
            rung = next((score for score in highest if score > rungs[-1]), EVENT)
        rungs.append(rung)
        if rung < EVENT:
            # one of the trials was there, so another will be
            while not (reached := stage(pool, rung, base, trials, rng)):
                pass
            pool = [walk for _, walk in reached]
    return Ladder(base, tuple(rungs))


def chance_of_event(entries: Sequence[Walk], ladder: Ladder, trials: int, rng: np.random.Generator) -> float:
    """The chance that an excursion, begun as one of `entries` on the first rung, comes to EVENT before it ends.

    Fixed-effort splitting: the product of the parts that reach each rung, out of `trials` forks of those that reached
    the one before. Unbiased for any fixed rungs (Glasserman, Heidelberger, Shahabuddin, Zajic 1999, "Multilevel
    splitting for estimating rare event probabilities", Operations Research 47, from memory).
    """
    return lineage_of_event(entries, ladder, trials, rng)[0]


def lineage_of_event(
    entries: Sequence[Walk], ladder: Ladder, trials: int, rng: np.random.Generator
) -> tuple[float, float]:
    """(`chance_of_event`, the sum of the squares of each entry's share in the forks that came to the event)."""
    pool, ancestors, chance = list(entries), list(range(len(entries))), 1.0
    for rung in ladder.rungs[1:]:
        reached = stage(pool, rung, ladder.base, trials, rng)
        chance *= len(reached) / trials
        if not reached:
            return 0.0, 0.0
        pool, ancestors = [walk for _, walk in reached], [ancestors[i] for i, _ in reached]
    shares = np.unique(ancestors, return_counts=True)[1] / len(ancestors)
    return chance, float(np.sum(shares**2))
