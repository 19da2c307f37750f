"""A measured quantity against duty on one branch: levels, a smooth curve through them, and its uncertainty.

Formulas on arrays; which holds are points is decided in `evidence`.

The uncertainty has three parts, kept apart because they behave differently:
* common   the instrument's accuracy. It is the same for all readings of one instrument, so it is never averaged down:
           a level's common part is the mean of its readings' u, however many they are. `Reading.u` has the noise of
           that reading's mean in it as well; counting that as common too errs on the safe side.
* random   scatter between holds at one setting (drift of friction, settling, reading noise); falls with the number of
           holds. It grows towards the stall, so it is pooled over the replicates near a level; where there are none,
           over the differences between the two branches, hysteresis and all; where there is neither (flag
           `no_replicates`), the readings' own u stands for it.
* model    between levels the truth lies within ± the distance of the smooth curve from the straight chord, and below
           the lowest level within ± the whole extrapolated step; both as rectangles (JCGM 100:2008, 4.3.7).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import interpolate, optimize

from sweeprig.characterise.evidence import Point
from sweeprig.laws import Floats

SAME_DUTY_PERCENT = 0.05
"""Settings nearer than this are one level: between them a smooth curve would follow the noise."""
NEAR_PERCENT = 10.0
"""Replicates as near as this in duty show the scatter of a level."""
LEAST_FREEDOM = 2
_DENSE = 2001


@dataclass(frozen=True, slots=True)
class Level:
    """Holds at one duty: means weighted by exposure. scatter: sum of squares about the mean, with n − 1 of freedom."""

    duty_percent: float
    value: float
    u_common: float
    weight: float
    effective_n: float
    scatter: float
    holds: tuple[int, ...]


def levels(points: Sequence[Point]) -> tuple[Level, ...]:
    """Group `points` by duty and average each group. A stopped hold counts only by the time before it stopped, so a
    level near the stall is not its survivors' alone."""
    groups: list[list[Point]] = []
    for point in sorted(points, key=lambda p: p.duty_percent):
        if groups and point.duty_percent - groups[-1][0].duty_percent < SAME_DUTY_PERCENT:
            groups[-1].append(point)
        else:
            groups.append([point])
    return tuple(_level(group) for group in groups)


def _level(group: Sequence[Point]) -> Level:
    weight = np.array([p.weight for p in group])
    value = np.array([p.value for p in group])
    mean = float(np.average(value, weights=weight))
    return Level(
        duty_percent=float(np.average([p.duty_percent for p in group], weights=weight)),
        value=mean,
        u_common=float(np.average([p.u for p in group], weights=weight)),
        weight=float(weight.sum()),
        effective_n=float(weight.sum() ** 2 / (weight**2).sum()),
        scatter=float(((value - value.mean()) ** 2).sum()),
        holds=tuple(p.hold for p in group),
    )


@dataclass(frozen=True, slots=True)
class Curve:
    """Fitted values at `duty` (n,), n ≥ 2, rising strictly; between them a shape-preserving cubic.

    u_common, u_random: standard uncertainties of the levels; one_hold: standard deviation of a single hold there. (n,)
    """

    duty: Floats
    value: Floats
    u_common: Floats
    u_random: Floats
    one_hold: Floats
    holds: tuple[int, ...]
    flags: tuple[str, ...]

    def at(self, duty: Floats) -> Floats:
        """The curve; straight on with the end slope of the outermost pair beyond the levels."""
        inside = interpolate.PchipInterpolator(self.duty, self.value)(np.clip(duty, self.duty[0], self.duty[-1]))
        below, above = np.minimum(duty - self.duty[0], 0.0), np.maximum(duty - self.duty[-1], 0.0)
        first, last = np.diff(self.value[:2])[0], np.diff(self.value[-2:])[0]
        first, last = first / np.diff(self.duty[:2])[0], last / np.diff(self.duty[-2:])[0]
        return np.asarray(inside + first * below + last * above, dtype=np.float64)

    def u_common_at(self, duty: Floats) -> Floats:
        return np.asarray(np.interp(duty, self.duty, self.u_common), dtype=np.float64)

    def u_free_at(self, duty: Floats) -> Floats:
        """Random and model parts together: what differs from one place of the curve to another."""
        random = np.interp(duty, self.duty, self.u_random)
        chord = np.interp(duty, self.duty, self.value)
        return np.asarray(np.hypot(random, (self.at(duty) - chord) / math.sqrt(3.0)), dtype=np.float64)

    def u_at(self, duty: Floats) -> Floats:
        return np.asarray(np.hypot(self.u_common_at(duty), self.u_free_at(duty)), dtype=np.float64)

    def u_with_duty(self, u_duty: float) -> Floats:
        """Standard uncertainty at the levels against the true duty: the accuracy of duty comes in by the slope. (n,)"""
        slope = interpolate.PchipInterpolator(self.duty, self.value).derivative()(self.duty)
        return np.asarray(np.hypot(self.u_at(self.duty), slope * u_duty), dtype=np.float64)

    def one(self, duty: float) -> tuple[float, float]:
        """(value, standard uncertainty) at one duty."""
        place = np.array([duty])
        return float(self.at(place)[0]), float(self.u_at(place)[0])

    def dense(self, low: float, high: float) -> tuple[Floats, Floats]:
        """(duty, value), each (2001,), equally spaced from low to high."""
        duty = np.linspace(low, high, _DENSE)
        return duty, self.at(duty)


def fit_curve(points: Sequence[Point], *, monotone: bool, other: Sequence[Point] = ()) -> Curve | None:
    """The curve through the levels of `points`; None with fewer than two levels. other: points of the other branch.

    monotone: the values are first made non-decreasing (least squares with the levels' weights; pool adjacent
    violators); when a drop is larger than the scatter explains the flag `not_monotone` says so.
    """
    found = levels(points)
    if len(found) < 2:
        return None
    value = np.array([level.value for level in found])
    scatter = local_scatter(found, levels(other))
    u_common = np.array([level.u_common for level in found])
    one_hold = np.array([level.u_common if s is None else s for s, level in zip(scatter, found, strict=True)])
    u_random = one_hold / np.sqrt([level.effective_n for level in found])
    flags = ["no_replicates"] if None in scatter else []
    if monotone:
        weights = np.array([level.weight for level in found])
        raised = np.asarray(optimize.isotonic_regression(value, weights=weights).x, dtype=np.float64)
        flags += ["not_monotone"] if np.any(np.abs(raised - value) > 3.0 * u_random + 1e-9) else []
        value = raised
    return Curve(
        duty=np.array([level.duty_percent for level in found]),
        value=value,
        u_common=u_common,
        u_random=u_random,
        one_hold=one_hold,
        holds=tuple(sorted(p.hold for p in points)),
        flags=tuple(flags),
    )


def local_scatter(found: Sequence[Level], other: Sequence[Level]) -> list[float | None]:
    """Standard deviation between holds at each level of `found`; None where nothing shows it.

    From the replicates within NEAR_PERCENT of duty when they have LEAST_FREEDOM together, else from the differences of
    all levels without such replicates to the level of `other` at the same duty, divided by √2.
    """
    near = [
        pooled_scatter([one for one in found if abs(one.duty_percent - level.duty_percent) <= NEAR_PERCENT])
        for level in found
    ]
    bare = [level for level, (_, freedom) in zip(found, near, strict=True) if freedom < LEAST_FREEDOM]
    away = [
        level.value - pair.value
        for level in bare
        for pair in other
        if abs(level.duty_percent - pair.duty_percent) < SAME_DUTY_PERCENT
    ]
    between = math.sqrt(sum(a * a for a in away) / (2.0 * len(away))) if away else None
    return [scatter if freedom >= LEAST_FREEDOM else between for scatter, freedom in near]


def pooled_scatter(found: Sequence[Level]) -> tuple[float, int]:
    """(pooled standard deviation between holds at one setting, its degrees of freedom); (0, 0) without replicates."""
    freedom = sum(len(level.holds) - 1 for level in found)
    if freedom == 0:
        return 0.0, 0
    return math.sqrt(sum(level.scatter for level in found) / freedom), freedom


def lowest_sure_duty(curve_duties: Sequence[float], failed: Sequence[float]) -> float | None:
    """The lowest of `curve_duties` above every duty at which the rotor was seen to stop; None where there is none."""
    top = max(failed, default=-math.inf)
    return min((duty for duty in curve_duties if duty > top + 1e-9), default=None)
