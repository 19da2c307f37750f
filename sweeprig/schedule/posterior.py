"""What the trials at one condition say of place and spread, as weighted cells: what the search reckons with. Pure.

Quick rather than exact: some 500 cells, laid anew where the weight is. What is reported is fitted by `characterise`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweeprig.laws import (
    EXPONENTIAL,
    GUMBEL_SD,
    LN2,
    LOGISTIC,
    LOGISTIC_SD,
    SPREAD_LOG_SD,
    Evidence,
    Floats,
    Law,
    log_likelihood,
)
from sweeprig.schedule.keys import Key, evidence_of

Likely = Callable[[Floats, Floats], Floats]
"""(median (rows, columns), spread (rows, 1)) → log-likelihood (rows, columns)."""
Neighbour = tuple[float, float]
"""Median and its standard error at another condition, percent duty."""

NARROW = 0.05
"""A stop timed better than this part of the trial, after the rotor came down, counts by the hazard at its middle."""
NO_TRIALS: Key = ((), ())
_ROWS, _REACH = 15, 3.0
_COARSE, _FINE = 23, 33
_ZOOMS = 3
_KEPT = 12.0
_KEPT_ROWS = 9.0
"""Cells less likely than exp(−9) of the best are dropped: where few trials leave the spread to its prior, its far tail
goes with them, and the standard error is up to a tenth less than the findings'."""
_BEYOND_PERCENT, _BEYOND_SPREADS = 2.0, 6.0
_FLAT = 0.1
_ALIKE = 0.15
_LARGEST = 600.0
_STRAIGHT = 40.0
_NONE = 1e-300


@dataclass(frozen=True, slots=True)
class Prior:
    """Before the trials: place flat from `low` to `high`, percent duty; spread log-normal about `spread_percent`.

    neighbours   what other conditions showed: the place is a little more likely near them, and nowhere ruled out
    """

    low: float
    high: float
    spread_percent: float
    log_sd: float = SPREAD_LOG_SD
    neighbours: tuple[Neighbour, ...] = ()

    def log_place(self, median: Floats) -> Floats | float:
        """Log density of the place, any constant: flat, and a Cauchy about each neighbour, as wide as conditions differ
        (a guess, common practice: 15 %) beside its own error."""
        if not self.neighbours:
            return 0.0
        total = np.full(median.shape, _FLAT)
        for place, u in self.neighbours:
            width = math.hypot(u, _ALIKE * place)
            total += 1.0 / (len(self.neighbours) * (1.0 + ((median - place) / width) ** 2))
        return np.asarray(np.log(total))


@dataclass(frozen=True, slots=True)
class Cells:
    """Weights, sum 1, of (median, spread), percent duty; each of shape (cells,)."""

    law: Law
    weight: Floats
    median: Floats
    spread: Floats

    def duty(self, probability: float) -> Floats:
        """The duty at which a trial succeeds with `probability`, at each cell."""
        return np.asarray(self.median + self.law.offset(probability) * self.spread)

    def hazard(self, duties: Floats) -> Floats:
        """H at each duty (duties, cells): minus the log of the chance to get through one whole trial."""
        return self.law.cumulative((duties[:, None] - self.median) / self.spread)

    def failing(self, duties: Floats) -> Floats:
        """The chance that a whole trial fails at each duty, all that is not known averaged over."""
        return np.asarray(-np.expm1(-self.hazard(duties)) @ self.weight)


def cells(law: Law, key: Key, unit: float, prior: Prior, soonest: float = 0.0) -> Cells:
    """The posterior of (place, spread) given the sums `key`; unit: what one whole trial is in their unit (`Sums`).
    soonest: the part of the trial before which no stop is timed, so that narrower events happened after it.

    Each spread has its own span of places, found by closing in on where the likelihood is; then spreads without weight
    are dropped and the rest divided anew. Any sums: none, one-sided and contradictory ones too.
    """
    evidence = evidence_of(key, unit)
    likely = _likely(law, evidence, min(soonest, NARROW))
    centre = math.log(prior.spread_percent)
    rows = centre + prior.log_sd * np.linspace(-_REACH, _REACH, _ROWS)
    low, high = _ends(evidence, prior, np.exp(rows))
    for _ in range(_ZOOMS):
        value, low, high = _closer(likely, prior, rows, low, high)
    value = value + (-0.5 * ((rows - centre) / prior.log_sd) ** 2 + np.log(high - low))[:, None]
    inside = np.flatnonzero(value.max(axis=1) >= value.max() - _KEPT_ROWS)
    first, last = max(int(inside[0]) - 1, 0), min(int(inside[-1]) + 1, _ROWS - 1)
    finer = np.linspace(rows[first], rows[last], _ROWS)
    low, high = np.interp(finer, rows, low), np.interp(finer, rows, high)
    _, low, high = _closer(likely, prior, finer, low, high)
    median = low[:, None] + (high - low)[:, None] * np.linspace(0.0, 1.0, _FINE)
    value = likely(median, np.exp(finer)[:, None]) + prior.log_place(median)
    value = value + (-0.5 * ((finer - centre) / prior.log_sd) ** 2 + np.log(high - low))[:, None]
    return _kept(law, value, median, np.exp(finer))


def _kept(law: Law, value: Floats, median: Floats, spread: Floats) -> Cells:
    weight = np.exp(value - value.max()).ravel()
    kept = weight > math.exp(-_KEPT_ROWS)
    weight = weight[kept]
    spreads = np.repeat(spread, median.shape[1])[kept]
    return Cells(law, weight / weight.sum(), median.ravel()[kept], spreads)


def _ends(evidence: Evidence, prior: Prior, spread: Floats) -> tuple[Floats, Floats]:
    """Where to look for the place first, for each spread: about the trials where some failed and some did not, else
    all that the prior allows."""
    turned = evidence.duty[evidence.exposure > 0.0]
    low, high = np.full(spread.size, prior.low), np.full(spread.size, prior.high)
    if turned.size and evidence.event_duty.size:
        ends = float(turned[0]), float(evidence.event_duty[-1])
        beyond = _BEYOND_PERCENT + _BEYOND_SPREADS * spread
        low, high = np.maximum(low, min(ends) - beyond), np.minimum(high, max(ends) + beyond)
    return low, np.maximum(high, low + 1e-3)


def _closer(likely: Likely, prior: Prior, rows: Floats, low: Floats, high: Floats) -> tuple[Floats, Floats, Floats]:
    """(log weight of the places between low and high, the span of those within _KEPT of the row's best)."""
    median = low[:, None] + (high - low)[:, None] * np.linspace(0.0, 1.0, _COARSE)
    value = likely(median, np.exp(rows)[:, None]) + prior.log_place(median)
    inside = value >= value.max(axis=1, keepdims=True) - _KEPT
    first = np.maximum(inside.argmax(axis=1) - 1, 0)
    last = np.minimum(_COARSE - inside[:, ::-1].argmax(axis=1), _COARSE - 1)
    width = (high - low) / (_COARSE - 1)
    return value, low + first * width, low + last * width


def _likely(law: Law, evidence: Evidence, narrow: float) -> Likely:
    if law is LOGISTIC and bool(np.all(evidence.event_width == 1.0)):
        return _logistic_likely(evidence)
    if law is not EXPONENTIAL:
        return lambda median, spread: log_likelihood(law, evidence, median, spread)
    return _exponential_likely(evidence, evidence.event_width < narrow)


def _logistic_likely(evidence: Evidence) -> Likely:
    """Whole trials that succeed or not: with z = −g·(D − m)/s a success counts −ln(1 + e^z), a failure z less than
    that; so one logarithm a duty for both, and the z of the failures add up to a straight line in m."""
    duty = np.unique(np.concatenate([evidence.duty, evidence.event_duty]))
    tried = np.zeros(duty.size)
    np.add.at(tried, np.searchsorted(duty, evidence.duty), evidence.exposure)
    np.add.at(tried, np.searchsorted(duty, evidence.event_duty), evidence.events)
    failed, total = float(evidence.events.sum()), float(evidence.events @ evidence.event_duty)

    def likely(median: Floats, spread: Floats) -> Floats:
        steep = LOGISTIC_SD / spread
        value = steep * (failed * median - total)
        if duty.size:
            z = (median[..., None] - duty) * steep[..., None]
            value = value - np.where(z > _STRAIGHT, z, np.log1p(np.exp(np.minimum(z, _STRAIGHT)))) @ tried
        return np.asarray(value)

    return likely


def _exponential_likely(evidence: Evidence, narrow: NDArray[np.bool_]) -> Likely:
    """The law of stalling makes the sums collapse: sum e·H(D) = ln 2·exp(g·m/s)·sum e·exp(−g·D/s), one number a spread.

    A stop timed narrowly counts log(1 − exp(−H·w)) ≈ log(H·w) − H·w/2, exact to H²w²/24: far from the truth only where
    H·w is large, and there the time before it already rules the cell out. The others are taken exactly.
    """
    timed, count = evidence.event_duty[narrow], evidence.events[narrow]
    duty = np.concatenate([evidence.duty, timed])
    exposure = np.concatenate([evidence.exposure, 0.5 * count * evidence.event_width[narrow]])
    duty, log_exposure = duty[exposure > 0.0], np.log(exposure[exposure > 0.0])
    number, total = float(count.sum()), float(count @ timed)
    wide, width, wides = evidence.event_duty[~narrow], evidence.event_width[~narrow], evidence.events[~narrow]

    def likely(median: Floats, spread: Floats) -> Floats:
        steep = GUMBEL_SD / spread
        value = steep * (number * median - total)
        if duty.size:
            each = log_exposure - steep * duty
            most = each.max(axis=1, keepdims=True)
            most = most + np.log(np.exp(each - most).sum(axis=1, keepdims=True))
            value = value - LN2 * np.exp(np.minimum(most + steep * median, _LARGEST))
        if wide.size:
            exponent = np.minimum((median[..., None] - wide) * steep[..., None], _LARGEST)
            within = -np.expm1(-LN2 * np.exp(exponent) * width)
            value = value + np.log(np.maximum(within, _NONE)) @ wides
        return np.asarray(value)

    return likely
