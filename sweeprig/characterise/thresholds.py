"""From a likelihood to a threshold duty with its uncertainty: a posterior on a grid; or a bound where nothing was seen.

Pure numbers: which holds count as trials is decided in `evidence`, what else may disturb them (lapse, scatter, drift)
in `explained`, what is written about them in `duties_found`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from scipy import optimize, special

from sweeprig.characterise.combine import ONE_SIDED, equally_likely
from sweeprig.laws import (
    SPREAD_LOG_SD,
    STALL_SPREAD_PERCENT,
    START_SPREAD_PERCENT,
    Evidence,
    Floats,
    Law,
    log_chance_of_same,
    log_likelihood,
)

Likelihood = Callable[[Floats, Floats], Floats]
"""(median, spread), percent duty, shapes (rows, columns) and (rows, 1) → log-likelihood, shape (rows, columns)."""

REJECTED_BELOW = 1.0 / 20.0
"""A law is rejected when its evidence (mean likelihood over the prior) is less than this part of the best law's."""
_ZOOMS = 5
_REACH = 4.0
_KEPT = 14.0


@dataclass(frozen=True, slots=True)
class SpreadPrior:
    """Log-normal prior of the spread: median (percent duty) and standard deviation of its natural logarithm.

    The place has a flat prior. The spread needs one that is proper, since data that can be separated (every stop below
    every survival) allow any spread down to zero; this one is broad: at `log_sd` 1.2 the middle 95 % span a factor of
    110.
    """

    median_percent: float
    log_sd: float = SPREAD_LOG_SD

    def log_density(self, log_spread: Floats) -> Floats:
        return np.asarray(-0.5 * ((log_spread - math.log(self.median_percent)) / self.log_sd) ** 2)

    def rows(self, count: int) -> Floats:
        centre, reach = math.log(self.median_percent), _REACH * self.log_sd
        return np.linspace(centre - reach, centre + reach, count)


@dataclass(frozen=True, slots=True)
class Grid:
    """Spreads, medians for each spread while closing in, medians at last."""

    rows: int
    coarse: int
    fine: int


PRECISE = Grid(41, 25, 81)
ROUGH = Grid(21, 17, 33)
"""For what only stands beside the plain law."""

STALL_PRIOR = SpreadPrior(STALL_SPREAD_PERCENT, SPREAD_LOG_SD)
START_PRIOR = SpreadPrior(START_SPREAD_PERCENT, SPREAD_LOG_SD)


@dataclass(frozen=True, slots=True)
class Posterior:
    """Weights (rows, columns), sum 1, at `median` (rows, columns) and `spread` (rows,), percent duty.

    log_evidence   logarithm of the mean likelihood over the prior; what is common to all fits of one kind is left out
    """

    law: Law
    median: Floats
    spread: Floats
    weight: Floats
    log_evidence: float

    def duty(self, probability: float) -> Floats:
        """The duty at which a trial succeeds with `probability`, at each cell."""
        return np.asarray(self.median + self.law.offset(probability) * self.spread[:, None])

    def at(self, probability: float) -> Floats:
        """Sample of the duty at which a trial succeeds with `probability`."""
        return equally_likely(self.duty(probability), self.weight)

    def mean(self) -> tuple[float, float]:
        """Means of the median and of the spread, percent duty."""
        return float(np.sum(self.weight * self.median)), float(np.sum(self.weight * self.spread[:, None]))


def posterior(law: Law, evidence: Evidence, prior: SpreadPrior) -> Posterior:
    """Posterior of (median, spread) given `evidence`, which must hold a success and a failure; else it is improper."""
    return on_grid(law, partial(log_likelihood, law, evidence), span(evidence), prior)


def span(evidence: Evidence) -> tuple[float, float]:
    """Lowest and highest duty tried, percent."""
    return float(evidence.duty[0]), float(evidence.duty[-1])


def on_grid(
    law: Law,
    likelihood: Likelihood,
    tried: tuple[float, float],
    prior: SpreadPrior,
    grid: Grid = PRECISE,
    hill: Likelihood | None = None,
) -> Posterior:
    """Posterior of (median, spread) for any likelihood that has one hill of medians for a given spread.

    Each spread has its own span of medians, found by closing in on where the likelihood is; then the spreads without
    weight are dropped and the rest divided anew. tried: lowest and highest duty of the trials. hill: a cheaper
    function to close in by, nowhere far below the likelihood.
    """
    rows = prior.rows(grid.rows)
    for points in (grid.coarse, grid.fine):
        span_low, span_high = _spans(hill or likelihood, tried, rows, grid.coarse)
        steps = np.linspace(0.0, 1.0, points)
        median = span_low[:, None] + (span_high - span_low)[:, None] * steps
        log_weight = likelihood(median, np.exp(rows)[:, None])
        log_weight = log_weight + (prior.log_density(rows) + np.log(span_high - span_low))[:, None]
        if points == grid.coarse:
            rows = _rows_with_weight(rows, log_weight)
    top = float(log_weight.max())
    weight = np.exp(log_weight - top)
    total = float(weight.sum())
    cell = float(rows[1] - rows[0]) / (grid.fine - 1)
    return Posterior(law, median, np.exp(rows), weight / total, top + math.log(total * cell))


def _spans(likelihood: Likelihood, tried: tuple[float, float], rows: Floats, points: int) -> tuple[Floats, Floats]:
    """For each log spread the lowest and highest median whose log-likelihood is within _KEPT of that row's best."""
    spread = np.exp(rows)
    reach = 12.0 * spread + 1.0
    low, high = tried[0] - reach, tried[1] + reach
    steps = np.linspace(0.0, 1.0, points)
    index = np.arange(points)
    for _ in range(_ZOOMS):
        median = low[:, None] + (high - low)[:, None] * steps
        value = likelihood(median, spread[:, None])
        inside = value >= value.max(axis=1, keepdims=True) - _KEPT
        first = np.where(inside, index, points).min(axis=1)
        last = np.where(inside, index, -1).max(axis=1)
        width = (high - low) / (points - 1)
        low, high = low + np.maximum(first - 1, 0) * width, low + np.minimum(last + 1, points - 1) * width
    return low, high


def _rows_with_weight(rows: Floats, log_weight: Floats) -> Floats:
    best = log_weight.max(axis=1)
    inside = np.flatnonzero(best >= best.max() - _KEPT)
    first, last = max(int(inside[0]) - 1, 0), min(int(inside[-1]) + 1, rows.size - 1)
    return np.linspace(rows[first], rows[last], rows.size)


def bound_without_contrast(laws: Sequence[Law], evidence: Evidence, prior: SpreadPrior, probability: float) -> float:
    """One-sided 95 % bound of the duty for `probability` when all trials succeeded (upper) or all failed (lower).

    It is the duty beyond which trials that all end alike would have had a chance below 5 %, the spread weighted by
    its prior; no prior for the place enters. The worst over `laws`. Percent duty.
    """
    found = [_bound(law, evidence, prior, probability) for law in laws]
    return min(found) if evidence.failures else max(found)


def _bound(law: Law, evidence: Evidence, prior: SpreadPrior, probability: float) -> float:
    rows = prior.rows(PRECISE.rows)
    spread = np.exp(rows)
    log_prior = prior.log_density(rows)
    log_prior = log_prior - special.logsumexp(log_prior)

    def excess(duty: float) -> float:
        median = np.asarray(duty - law.offset(probability) * spread)
        chance = special.logsumexp(log_chance_of_same(law, evidence, median, spread) + log_prior)
        return float(chance) - math.log(1.0 - ONE_SIDED)

    duties = evidence.event_duty if evidence.failures else evidence.duty
    low, high = _bracket(excess, float(duties[0]) - 1.0, float(duties[-1]) + 1.0)
    return float(optimize.brentq(excess, low, high, xtol=1e-6))


def _bracket(excess: Callable[[float], float], low: float, high: float) -> tuple[float, float]:
    """Move the ends apart until the sign of `excess` differs; it is monotone and passes 0 for any real trial."""
    step = 1.0
    while excess(low) * excess(high) > 0.0:
        low, high, step = low - step, high + step, 2.0 * step
    return low, high
