"""Has the speed settled? A pure decision on the readings so far. No clock, no link."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass

LEAST_READINGS = 6
"""No decision on fewer: a trend and a scatter cannot be told apart."""

LOOKS_ALLOWED = 20
"""The decision is taken again with every reading; its confidence is shared over so many looks (Bonferroni)."""


@dataclass(frozen=True, slots=True)
class Settled:
    """decided: settled to the tolerance; reached_percent: the tolerance that the readings support;
    first: index of the first reading that counts; mean and u (of the mean) in the unit of the readings."""

    decided: bool
    reached_percent: float
    first: int
    mean: float
    u: float


def settled(values: Sequence[float], tolerance_percent: float, z: float | None = None) -> Settled | None:
    """Judge evenly spaced `values` (a settled part is the last half of them); None on too few.

    The last half is split in two; it is settled when the difference of the two halves' means, plus z standard errors of
    that difference, is below the tolerance. The scatter counts with its lag-1 autocorrelation, so that slowly wandering
    readings do not look more certain than they are. z defaults to a 99 % one-sided normal quantile shared over
    LOOKS_ALLOWED looks.
    """
    count = len(values)
    if count < LEAST_READINGS:
        return None
    first = count // 2
    part = values[first:]
    mean, u = mean_and_u(part)
    half = len(part) // 2
    early, late = part[:half], part[-half:]
    change = abs(sum(late) / half - sum(early) / half)
    spread = u * 2.0
    reach = change + (_Z_DEFAULT if z is None else z) * spread
    reached_percent = math.inf if mean == 0 else 100.0 * reach / abs(mean)
    return Settled(reached_percent <= tolerance_percent, reached_percent, first, mean, u)


def mean_and_u(values: Sequence[float]) -> tuple[float, float]:
    """Mean and its standard uncertainty from evenly spaced, possibly correlated readings.

    u² = s²/n · (1 + r)/(1 − r), r the lag-1 autocorrelation kept in [0, 0.9] (first-order autoregressive process;
    Bartlett 1946, from memory). One value alone: u is 0, its instrument's own is added by the caller.
    """
    n = len(values)
    mean = sum(values) / n
    if n < 2:
        return mean, 0.0
    deviations = [value - mean for value in values]
    variance = sum(d * d for d in deviations) / (n - 1)
    if variance == 0.0:
        return mean, 0.0
    lagged = sum(a * b for a, b in itertools.pairwise(deviations)) / ((n - 1) * variance)
    # The estimate of r from a few readings is biased low by about 1/n
    r = min(max(lagged + 1.0 / n, 0.0), 0.9)
    return mean, math.sqrt(variance / n * (1.0 + r) / (1.0 - r))


_Z_DEFAULT = 3.2905
"""Normal quantile of 1 − 0.01/LOOKS_ALLOWED (0.9995)."""
