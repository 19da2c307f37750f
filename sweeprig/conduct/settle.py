"""Has the speed settled? A sequential decision on the readings of one hold so far. No clock, no link.

What the readings say about the final value comes from `settle_models`; here it is decided, and the means are taken.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np

from sweeprig.conduct.settle_models import Array, Posterior, learned, posterior, scatter_of, within

LEAST_READINGS = 6
"""No decision on fewer: a trend and a scatter cannot be told apart."""
WINDOWS = (1.0, 0.8, 0.65, 0.5, 0.36)
"""The last window is one of these parts of the readings, whichever is the surest, and no shorter than LEAST_MEAN."""
LEAST_MEAN = 4
MODEL_PART = 0.5
"""So much of the chance to be wrong is kept for what no model of the table says; the decision has the rest."""
STILL_MOVING = 2.5
"""Readings that move on by so many tolerances within a quarter of the time are not looked at any further."""
SURE, GIVE_UP = 1.645, 0.95
"""Normal quantile and chance with which a hold is given up as hopeless."""
DRIFT_SURE = 3.0
DRIFT_LEAST = 0.1
"""A drift is told when it is so many standard uncertainties, and so many percent a minute, away from none."""


@dataclass(frozen=True, slots=True)
class Wanted:
    """What a hold asks of the decision.

    limit_s    the longest wait: what cannot be reached by then is not waited for
    window_s   over which each reading averages
    before     the value just before the setting was applied, in the unit of the readings; None: not known
    """

    tolerance_percent: float
    confidence_percent: float = 99.0
    limit_s: float = math.inf
    window_s: float = 0.5
    before: float | None = None


@dataclass(frozen=True, slots=True)
class Settled:
    """What the readings so far support.

    decided          settled to the tolerance
    hopeless         the noise does not let the tolerance be reached within the limit
    reached_percent  the tolerance that the readings support; infinite where that was not asked for (`thorough`)
    first            index of the first reading that counts
    mean, u          over the readings that count; u: its root-mean-square distance from the final value as far as
                     known, so noise, what is left of the approach and a grid of the readings are in it
    drift_percent_per_minute   slow drift, with u_drift; no part of settling
    time_constant_s  as these readings show it (weighted mean of the logarithm)
    weights          what the next hold may begin with (`Settling`); None where nothing was learned
    """

    decided: bool
    hopeless: bool
    reached_percent: float
    first: int
    mean: float
    u: float
    drift_percent_per_minute: float = 0.0
    u_drift: float = 0.0
    time_constant_s: float = math.nan
    weights: Array | None = None

    @property
    def drifting(self) -> bool:
        return abs(self.drift_percent_per_minute) > max(DRIFT_SURE * self.u_drift, DRIFT_LEAST)


@dataclass(slots=True)
class Settling:
    """The decision for one hold after the other: what one teaches about the motor, the next begins with. Without it,
    after a resume, the decision only takes longer."""

    known: Array | None = None

    def look(
        self, speeds: Sequence[tuple[float, float]], u: float, wanted: Wanted, last: bool = False
    ) -> Settled | None:
        """`settled` on (seconds, value) pairs, with what earlier holds of the session have taught. last: there will be
        no other look."""
        times_s, values = [at for at, _ in speeds], [value for _, value in speeds]
        found = settled(times_s, values, u, wanted, self.known, last)
        if found is not None and found.weights is not None and (found.decided or found.hopeless or last):
            self.known = learned(found.weights)
        return found


def settled(
    times_s: Sequence[float], values: Sequence[float], u: float, wanted: Wanted, known: Array | None = None,
    thorough: bool = True,
) -> Settled | None:  # fmt: skip
    """Judge readings `values` that ended at `times_s` (s since the setting was applied); None on too few.

    Settled: the chance that the mean of the window and the final value differ by less than the tolerance is at least
    the confidence, given all readings of the hold. Such a chance stays what it is however often it is looked at, if the
    table of models is right on the average (a posterior has no memory of when it was looked at); for what it leaves out
    MODEL_PART of the chance to be wrong is kept back.

    u         standard uncertainty of one reading, below which no scatter is believed: identical readings prove nothing
    thorough  tell what was reached also where it was not enough, and where the speed plainly still moves
    """
    count = len(values)
    if count < LEAST_READINGS:
        return None
    times, series = np.asarray(times_s, dtype=np.float64), np.asarray(values, dtype=np.float64)
    level = float(series[count // 2 :].mean())
    if level == 0.0:
        return Settled(False, False, math.inf, count // 2, 0.0, math.inf)
    if not thorough and (moved := _moved(series, u)) > STILL_MOVING * wanted.tolerance_percent:
        return Settled(False, False, moved, count // 2, level, moved / 100.0 * abs(level))
    found = posterior(times, series, wanted.window_s, wanted.before, u, known)
    allowed = (1.0 - wanted.confidence_percent / 100.0) * (1.0 - MODEL_PART)
    tolerance = wanted.tolerance_percent / 100.0 * abs(level)
    grid = grid_error(values[count // 2 :], u)
    windows = [_Window(found, times, series, first, grid, tolerance) for first in _firsts(count)]
    # the closest of those that are sure enough, else the surest
    chosen = max(windows, key=lambda window: (min(window.sure, 1.0 - allowed), -window.rms))
    decided = chosen.sure >= 1.0 - allowed
    hopeless = not decided and _hopeless(found, chosen, times, tolerance, allowed, wanted)
    reached = tolerance if decided else math.inf
    if not decided and (thorough or hopeless):
        reached = chosen.reached(1.0 - allowed)
    return _told(found, chosen, 100.0 / abs(level), decided, hopeless, reached)


def _told(found: Posterior, chosen: _Window, percent: float, decided: bool, hopeless: bool, reached: float) -> Settled:
    """The result; percent: per unit of the readings."""
    drift = float(found.weight @ found.drift)
    spread = found.noise * found.drift_drift * found.dof / (found.dof - 2.0) + (found.drift - drift) ** 2
    return Settled(
        decided, hopeless, percent * reached, chosen.first, chosen.mean + found.level, chosen.rms, percent * drift,
        percent * math.sqrt(float(found.weight @ spread)),
        math.exp(float(found.weight @ np.log(found.time_constant_s))), found.all_weights,
    )  # fmt: skip


class _Window:
    """The mean over the readings from `first` on, against the final value at the same time."""

    def __init__(
        self, found: Posterior, times_s: Array, values: Array, first: int, grid: float, tolerance: float
    ) -> None:
        self.first, self._found = first, found
        self.mean = float(values[first:].mean()) - found.level
        minutes = (float(times_s[first:].mean()) - found.t0_s) / 60.0
        self.off = self.mean - found.value - minutes * found.drift
        variance = found.value_value + 2.0 * minutes * found.value_drift + minutes * minutes * found.drift_drift
        self.sd = np.sqrt(found.noise * variance + grid * grid)
        heavy = found.dof / (found.dof - 2.0)
        self.rms = math.sqrt(float(found.weight @ (self.off**2 + heavy * self.sd**2)))
        self.sure = float(found.weight @ within(tolerance, self.off, self.sd, found.dof))

    def reached(self, chance: float) -> float:
        """The half-width that has this chance, to 5 %; infinite beyond a thousand root-mean-squares."""
        widths = self.rms * 1.05 ** np.arange(0.0, 142.0)
        chances = self._found.weight @ within(widths[:, None], self.off[None, :], self.sd[None, :], self._found.dof).T
        enough = np.flatnonzero(chances >= chance)
        return float(widths[enough[0]]) if len(enough) else math.inf


def _firsts(count: int) -> list[int]:
    return sorted({count - max(math.ceil(part * count), min(LEAST_MEAN, count)) for part in WINDOWS})


def _moved(values: Array, u: float) -> float:
    """By how much the last quarter lies off the one before it, less three times what scatter does, percent."""
    quarter = max(3, len(values) // 4)
    late, early = float(values[-quarter:].mean()), float(values[-2 * quarter : -quarter].mean())
    scatter = 3.0 * scatter_of(values, u) * math.sqrt(2.0 / quarter)
    return 100.0 * max(abs(late - early) - scatter, 0.0) / abs(late) if late else math.inf


def _hopeless(
    found: Posterior, chosen: _Window, times_s: Array, tolerance: float, allowed: float, wanted: Wanted
) -> bool:
    """The approach is over, and even the least noise that the readings allow (95 %) will not be averaged below the
    tolerance with all the readings up to the limit, at the rate at which they come, as 95 % of the models' weight say.
    To give up wrongly costs less than to be wrong: the hold says what it reached."""
    count = len(times_s)
    if count < 2 * LEAST_READINGS or not math.isfinite(wanted.limit_s):
        return False
    off = float(found.weight @ chosen.off)
    if abs(off) > chosen.rms / 2.0:
        return False
    rate = (count - 1) / float(times_s[-1] - times_s[0])
    total = count + max(0.0, wanted.limit_s - float(times_s[-1])) * rate
    # variance of a variance from dof degrees of freedom: 2/dof of its square
    least_noise = found.noise * max(1.0 - SURE * math.sqrt(2.0 / found.dof), 0.1)
    inflation = (1.0 + found.correlation) / (1.0 - found.correlation)
    best = NormalDist().inv_cdf(1.0 - allowed / 2.0) * np.sqrt(least_noise * inflation / total)
    return float(found.weight @ (best > tolerance)) >= GIVE_UP


def grid_error(values: Sequence[float], u: float) -> float:
    """Standard uncertainty left in a mean of readings that lie on a grid of steps q, however many they are.

    q/√12 · exp(−2·(π·s/q)²), s the scatter: the first term of the mean error of a dithered quantiser (Widrow 1956, from
    memory). q is the least difference where at most half of the readings are different ones; u·√12 where all are the
    same, so that u of one reading is what is left. 0 where nothing shows a grid."""
    different = sorted(set(values))
    if len(different) > max(len(values) // 2, 1):
        return 0.0
    if len(different) == 1:
        return u
    q = min(after - before for before, after in itertools.pairwise(different))
    mean = sum(values) / len(values)
    # what the grid itself adds to the scatter is no dither
    variance = max(sum((value - mean) ** 2 for value in values) / (len(values) - 1) - q * q / 12.0, 0.0)
    return q / math.sqrt(12.0) * math.exp(-2.0 * math.pi**2 * variance / (q * q))


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
