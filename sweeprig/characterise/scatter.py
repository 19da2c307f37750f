"""A threshold that is drawn anew for each hold: the law that follows, and its likelihood, hold by hold.

With scatter the hazard of a hold is constant only given its own threshold, so exposures at one duty no longer add.
No choice of how much scatter there is; that is `explained`.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, special

from sweeprig.characterise.thresholds import Likelihood
from sweeprig.laws import MANY, Floats, Law, Trial

_Z = np.linspace(-6.0, 6.0, 45)
_LOG_Z = np.asarray(-0.5 * _Z * _Z - special.logsumexp(-0.5 * _Z * _Z))
"""Nodes of the standard normal and the logarithms of their weights. Evenly spaced: for a smooth function under a normal
law the plain sum is exact to far more digits than are wanted, and the same nodes serve every fraction."""
_X = np.linspace(-12.0, 8.0, 161)
_STEP = float(_X[1] - _X[0])
_AT_ONCE = 32
_SMALLEST_CHANCE = 1e-300


@dataclass(frozen=True, slots=True)
class Scattered:
    """`base` with a normal scatter of the threshold that makes `fraction` of the variance of the whole.

    law    the law of a single trial, the scatter averaged over, again in its own standard coordinate:
           x = (D − D50) / spread, spread² = spread(base)² + scatter²
    """

    base: Law
    fraction: float
    law: Law

    def log_hazard_of(self, x: Floats) -> Floats:
        """ln H of the whole trial at each x and each node of the threshold; shape of x and one axis more."""
        return _log_hazard(self.base, self.fraction, _place(self.base, self.fraction), x)


def _log_hazard(base: Law, fraction: float, place: float, x: Floats) -> Floats:
    y = (x[..., None] - place - math.sqrt(fraction) * _Z) / math.sqrt(1.0 - fraction)
    return np.asarray(np.log(np.maximum(base.cumulative(y), _SMALLEST_CHANCE)))


def _log_survival(base: Law, fraction: float, place: float, x: Floats) -> Floats:
    return np.asarray(special.logsumexp(_LOG_Z - np.exp(_log_hazard(base, fraction, place, x)), axis=-1))


@lru_cache(maxsize=64)
def _place(base: Law, fraction: float) -> float:
    """Where the base law's own median lies when half of all trials, the scatter averaged over, succeed at x = 0."""

    def excess(place: float) -> float:
        return float(_log_survival(base, fraction, place, np.zeros(1))[0]) - math.log(0.5)

    return float(optimize.brentq(excess, -1.0, 1.0, xtol=1e-12))


@lru_cache(maxsize=64)
def scattered(base: Law, fraction: float) -> Scattered:
    """The law of `base` with scatter; 0 < fraction < 1."""
    place = _place(base, fraction)

    def cumulative(x: Floats) -> Floats:
        return np.asarray(-_log_survival(base, fraction, place, np.asarray(x, dtype=np.float64)))

    def offset(probability: float) -> float:
        def excess(x: float) -> float:
            return float(_log_survival(base, fraction, place, np.array([x]))[0]) - math.log(probability)

        return float(optimize.brentq(excess, -60.0, 60.0, xtol=1e-10))

    return Scattered(base, fraction, Law(base.name, cumulative, lru_cache(maxsize=64)(offset)))


def likelihood(of: Scattered, trials: Sequence[Trial]) -> Likelihood:
    """Log-likelihood of `trials` at (median, spread) of the whole law.

    A trial that survived to a and failed within w after it counts the mean over its threshold of
    exp(−H·a)·(1 − exp(−H·w)); one that did not fail, of exp(−H·a). Trials that showed the same share one table over x.
    """
    groups: dict[tuple[float, float | None], dict[float, int]] = defaultdict(lambda: defaultdict(int))
    many = len(trials) > MANY
    for trial in trials:
        groups[_shown(trial, many)][round(trial.duty_percent, 2 if many else 9)] += 1
    tables = np.array(_tables(of, list(groups)))
    rows = [(index, duty, count) for index, at in enumerate(groups.values()) for duty, count in at.items()]
    which = np.array([index for index, _, _ in rows])[:, None, None]
    duty = np.array([duty for _, duty, _ in rows])[:, None, None]
    count = np.array([count for _, _, count in rows], dtype=np.float64)

    def value(median: Floats, spread: Floats) -> Floats:
        total = np.zeros(np.broadcast_shapes(median.shape, spread.shape))
        for first in range(0, len(rows), _AT_ONCE):
            part = slice(first, first + _AT_ONCE)
            shown = _read_off(tables, which[part], (duty[part] - median) / spread)
            total += np.tensordot(count[part], shown, axes=1)
        return total

    return value


def _shown(trial: Trial, many: bool) -> tuple[float, float | None]:
    """What a trial showed, to two digits: the table is as good as the same to all of them."""
    digits = 2 if many else 3
    width = None if trial.failed is None else float(f"{trial.failed:.{digits}g}")
    return round(trial.survived, digits), width


def _tables(of: Scattered, shown: Sequence[tuple[float, float | None]]) -> list[Floats]:
    hazard = np.exp(of.log_hazard_of(_X))
    made: list[Floats] = []
    for first in range(0, len(shown), _AT_ONCE):
        part = shown[first : first + _AT_ONCE]
        survived = np.array([one[0] for one in part])[:, None, None]
        width = np.array([np.inf if one[1] is None else one[1] for one in part])[:, None, None]
        exponent = _LOG_Z - hazard * survived
        # a width without end: it had not failed, and so whatever comes after counts in full
        within = np.log(np.maximum(-np.expm1(-hazard * width), _SMALLEST_CHANCE))
        exponent += within
        top = exponent.max(axis=-1)
        made.extend(np.log(np.exp(exponent - top[..., None]).sum(axis=-1)) + top)
    return made


def _read_off(tables: Floats, which: NDArray[np.int_], x: Floats) -> Floats:
    """Table `which` at x, straight between its points; beyond its ends it goes on straight (far places stay in order),
    but never above certainty."""
    place = (x - _X[0]) / _STEP
    left = np.clip(place.astype(np.int64), 0, _X.size - 2)
    at = tables[which, left]
    return np.asarray(np.minimum(at + (place - left) * (tables[which, left + 1] - at), 0.0))
