"""Distributions carried as equally likely values, and how they are summed, carried through a curve and summed up.

A *sample* here is no random draw: it is the inverse distribution function at equally spaced probabilities, so every
result is the same each time. Nothing here knows what the numbers mean.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import special

from sweeprig.laws import Floats

SAMPLE_SIZE = 256
TWO_SIDED = 0.95
ONE_SIDED = 0.95
K_TWO_SIDED = float(special.ndtri(0.5 + TWO_SIDED / 2.0))
K_ONE_SIDED = float(special.ndtri(ONE_SIDED))
_NORMAL_POINTS = 65
_HALVINGS = 12


def _midpoints(n: int) -> Floats:
    return np.asarray((np.arange(n) + 0.5) / n, dtype=np.float64)


_NORMAL = special.ndtri(_midpoints(_NORMAL_POINTS))
_NORMAL = np.asarray(_NORMAL / math.sqrt(float(np.mean(_NORMAL**2))), dtype=np.float64)
"""Equally likely values of a standard normal, scaled so that their standard deviation is 1 exactly."""


def equally_likely(values: Floats, weights: Floats | None = None, n: int = SAMPLE_SIZE) -> Floats:
    """`values` (any shape) with `weights` (same shape, any sum) as a sample of n equally likely values, sorted."""
    flat = np.ravel(values)
    order = np.argsort(flat)
    mass = np.full(flat.size, 1.0) if weights is None else np.ravel(weights)[order]
    cumulative = np.cumsum(mass)
    return np.asarray(np.interp(_midpoints(n), (cumulative - 0.5 * mass) / cumulative[-1], flat[order]))


def widened(sample: Floats, u: float) -> Floats:
    """The sample plus an independent normal error of standard uncertainty u."""
    return sample if u == 0.0 else equally_likely(sample[:, None] + u * _NORMAL[None, :])


def carried(sample: Floats, curve: Callable[[Floats], Floats], u: Callable[[Floats], Floats]) -> Floats:
    """The sample through `curve`, whose own standard uncertainty at a place is `u(place)`. Not first order."""
    return equally_likely(curve(sample)[:, None] + u(sample)[:, None] * _NORMAL[None, :])


def difference(first: Floats, second: Floats) -> Floats:
    """The sample of first − second, taken as independent."""
    return equally_likely(first[:, None] - second[None, :])


def quantile(sample: Floats, probability: float) -> float:
    return float(np.interp(probability, _midpoints(sample.size), sample))


@dataclass(frozen=True, slots=True)
class Summary:
    """value: the median of the first sample; low, high: the hull of the laws' intervals; u about the value.

    upper, lower: one-sided 95 % bounds, the hull's as well.
    """

    value: float
    u: float
    low: float
    high: float
    lower: float
    upper: float

    @property
    def coverage_factor(self) -> float | None:
        return None if self.u == 0.0 else (self.high - self.low) / (2.0 * self.u)


def summary(samples: Sequence[Floats], worse: Sequence[float] = ()) -> Summary:
    """Summed up over samples that are alternatives (one for each law that the data do not reject).

    u is the root of the mean square distance from the value over all of them, each taken as equally good: so the
    distance between the laws is in u as it is in the interval.
    worse: how many times better the best alternative explains the data than each; empty: all alike.
    """
    value = quantile(samples[0], 0.5)
    square = np.mean([np.mean((sample - value) ** 2) for sample in samples])
    low, high = _hull(samples, worse or [1.0] * len(samples))
    return Summary(
        value=value,
        u=math.sqrt(float(square)),
        low=low,
        high=high,
        lower=min(quantile(sample, 1.0 - ONE_SIDED) for sample in samples),
        upper=max(quantile(sample, ONE_SIDED) for sample in samples),
    )


def _hull(samples: Sequence[Floats], worse: Sequence[float]) -> tuple[float, float]:
    """The hull of the alternatives' central intervals that holds 95 % whichever of them is true.

    Hulls of 95 % intervals hold more than 95 % under each alternative (where they lie far apart, 97.5 %), so the tails
    cut off are made as large as the alternative that comes off worst allows: between 2.5 % and 5 % on each side. One
    that the data speak against may lose as many times more as it is worse, so that it does not count in full until the
    moment when it is rejected.
    """
    lost = [min((1.0 - TWO_SIDED) * times, 1.0) for times in worse]

    def ends(tail: float) -> tuple[float, float]:
        tails = [min(tail * times, 0.5) for times in worse]
        low = min(quantile(one, t) for one, t in zip(samples, tails, strict=True))
        return low, max(quantile(one, 1.0 - t) for one, t in zip(samples, tails, strict=True))

    narrow, wide = 1.0 - TWO_SIDED, (1.0 - TWO_SIDED) / 2.0
    for _ in range(_HALVINGS if len(samples) > 1 else 0):
        tail = (narrow + wide) / 2.0
        low, high = ends(tail)
        inside = [_mass_below(one, high) - _mass_below(one, low) for one in samples]
        enough = all(mass >= 1.0 - most for mass, most in zip(inside, lost, strict=True))
        narrow, wide = (narrow, tail) if enough else (tail, wide)
    return ends(wide)


def _mass_below(sample: Floats, value: float) -> float:
    return float(np.interp(value, sample, _midpoints(sample.size), left=0.0, right=1.0))
