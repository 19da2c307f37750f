"""A quick posterior of the stall law from a condition's sums, for choosing holds; what is reported is fitted elsewhere.

Pure numbers: sums in, a duty out. No holds in here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from sweeprig.laws import SPREAD_LOG_SD, STALL_LAWS, STALL_SPREAD_PERCENT, Floats, Law, log_likelihood
from sweeprig.schedule.keys import Key, evidence_of

_ROWS, _COLUMNS, _REACH = 31, 61, 3.0
_BEYOND_PERCENT, _BEYOND_SPREADS = 2.0, 6.0
_KEPT = 12.0
_HALVINGS = 30


@dataclass(frozen=True, slots=True)
class Quick:
    """Weights (rows, columns), sum 1, at `median` (rows, columns) and `spread` (rows, 1), percent duty."""

    law: Law
    median: Floats
    spread: Floats
    weight: Floats

    def failing(self, duty_percent: float, parts: float) -> float:
        """The chance to stop within `parts` of the hold time at a duty, all that is not known averaged over."""
        hazard = self.law.cumulative((duty_percent - self.median) / self.spread)
        return float((-np.expm1(-hazard * parts) * self.weight).sum())

    def below(self, probability: float, confidence: float) -> float:
        """The duty that the one for `probability` lies below with `confidence`."""
        place = np.ravel(self.median + self.law.offset(probability) * self.spread)
        order = np.argsort(place)
        share = np.cumsum(np.ravel(self.weight)[order])
        return float(place[order][min(int(np.searchsorted(share, confidence)), place.size - 1)])


@lru_cache(maxsize=256)
def quick_fit(key: Key, hold_time_s: float, which: int = 0) -> Quick:
    """The posterior of STALL_LAWS[which]; `key` must hold a stop and a time turned, else it is improper.

    The grid is laid twice: around the lowest duty that turned and the highest that stopped, then where the weight is.
    """
    law, evidence, centre = STALL_LAWS[which], evidence_of(key, hold_time_s), math.log(STALL_SPREAD_PERCENT)
    rows = centre + SPREAD_LOG_SD * np.linspace(-_REACH, _REACH, _ROWS)
    turned = [float(duty) for duty, time in zip(evidence.duty, evidence.exposure, strict=True) if time > 0.0]
    ends = min(turned), float(evidence.event_duty.max())
    beyond = _BEYOND_PERCENT + _BEYOND_SPREADS * np.exp(rows)
    low, high = min(ends) - beyond, max(ends) + beyond
    steps, index = np.linspace(0.0, 1.0, _COLUMNS), np.arange(_COLUMNS)
    for last in (False, True):
        median = low[:, None] + (high - low)[:, None] * steps
        value = log_likelihood(law, evidence, median, np.exp(rows)[:, None])
        value = value - 0.5 * ((rows - centre) / SPREAD_LOG_SD)[:, None] ** 2
        if last:
            break
        inside = value >= value.max(axis=1, keepdims=True) - _KEPT
        first, end = np.where(inside, index, _COLUMNS).min(axis=1), np.where(inside, index, -1).max(axis=1)
        width = (high - low) / (_COLUMNS - 1)
        low, high = low + (first - 1) * width, low + (end + 1) * width
        kept = np.flatnonzero(value.max(axis=1) >= value.max() - _KEPT)
        finer = np.linspace(rows[max(int(kept[0]) - 1, 0)], rows[min(int(kept[-1]) + 1, _ROWS - 1)], _ROWS)
        low, high, rows = np.interp(finer, rows, low), np.interp(finer, rows, high), finer
    weight = np.exp(value - value.max()) * (high - low)[:, None]
    return Quick(law, median, np.exp(rows)[:, None], weight / weight.sum())


def duty_that_fails(fitted: Quick, chance: float, parts: float, low: float, high: float) -> float:
    """The duty in [low, high] where stopping within `parts` of the hold time has that chance; it falls with duty."""
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if fitted.failing(middle, parts) > chance else (low, middle)
    return 0.5 * (low + high)
