"""A linear circuit of two states between two switching events, exactly: its course, integrals, extremes, crossings.

Pure functions of plain floats, whatever the damping. What the states are and who switches is not known here.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import NamedTuple

Pair = tuple[float, float]
"""Two states, or a row that weighs them."""

EXTREMES = 3
"""Extremes looked at for a crossing: they only get smaller, so what the first three do not reach none does."""
_ROUNDS = 100


class System(NamedTuple):
    """dx/dt = A·(x − end), A = ((a, b), (c, d)), both of its eigenvalues left of the imaginary axis.

    middle        half the trace; determinant; turning = middle² − determinant: below zero it rings
    """

    a: float
    b: float
    c: float
    d: float
    middle: float
    determinant: float
    turning: float

    def times(self, y: Pair) -> Pair:
        return self.a * y[0] + self.b * y[1], self.c * y[0] + self.d * y[1]

    def divided(self, y: Pair) -> Pair:
        """A⁻¹·y."""
        return (self.d * y[0] - self.b * y[1]) / self.determinant, (self.a * y[1] - self.c * y[0]) / self.determinant

    def factors(self, seconds: float) -> Pair:
        """(g, h) of e^(A·t) = g·1 + h·(A − middle·1): the matrix exponential of two states, for any damping."""
        if self.turning < 0.0:
            swing, fade = math.sqrt(-self.turning), math.exp(self.middle * seconds)
            return fade * math.cos(swing * seconds), fade * math.sin(swing * seconds) / swing
        root = math.sqrt(self.turning)
        fast = self.middle - root
        slow = math.exp(self.determinant / fast * seconds)  # the small root without the difference of two large ones
        apart = -math.expm1(-2.0 * root * seconds)
        return slow * (1.0 - 0.5 * apart), slow * (apart / (2.0 * root) if root > 0.0 else seconds)

    def fade(self, y: Pair, seconds: float) -> Pair:
        """e^(A·t)·y."""
        g, h = self.factors(seconds)
        along = self.times(y)
        g -= h * self.middle
        return g * y[0] + h * along[0], g * y[1] + h * along[1]

    def integral(self, y: Pair, faded: Pair) -> Pair:
        """∫ e^(A·t)·y dt over the time in which y has become `faded`."""
        return self.divided((faded[0] - y[0], faded[1] - y[1]))


def system(a: float, b: float, c: float, d: float) -> System:
    """The system of a matrix, from its rows."""
    middle = 0.5 * (a + d)
    # not middle² − determinant, which cancels where the damping is just critical
    return System(a, b, c, d, middle, a * d - b * c, 0.25 * (a - d) * (a - d) + b * c)


class Course(NamedTuple):
    """x(t) = end + e^(A·t)·start: where a stretch goes from its begin on."""

    system: System
    end: Pair
    start: Pair

    def at(self, seconds: float) -> Pair:
        """The two states, `seconds` after its begin."""
        y = self.system.fade(self.start, seconds)
        return self.end[0] + y[0], self.end[1] + y[1]

    def integral(self, seconds: float) -> Pair:
        """∫ x dt of both states over its first `seconds`."""
        whole = self.system.integral(self.start, self.system.fade(self.start, seconds))
        return self.end[0] * seconds + whole[0], self.end[1] * seconds + whole[1]

    def square(self, seconds: float) -> float:
        """∫ x₁² dt over its first `seconds`.

        S = ∫ y·yᵀ dt keeps A·S + S·Aᵀ = Q = y·yᵀ at the end less that at the begin. For two states
        S = (det A·Q + adj A·Q·adj Aᵀ) / (2·trace·det) (derived here; put in, it fulfils the equation).
        """
        s, (u, v) = self.system, self.start
        p, r = s.fade(self.start, seconds)
        q11, q12, q22 = p * p - u * u, p * r - u * v, r * r - v * v
        turned = s.d * s.d * q11 - 2.0 * s.d * s.b * q12 + s.b * s.b * q22
        of_y = (s.determinant * q11 + turned) / (4.0 * s.middle * s.determinant)
        whole = s.integral(self.start, (p, r))[0]
        return self.end[0] * self.end[0] * seconds + 2.0 * self.end[0] * whole + of_y

    def extremes(self, row: Pair, within: float, most: int = EXTREMES) -> Iterator[float]:
        """The times after the begin and before `within` at which row·x is greatest or least, at most so many."""
        s = self.system
        slope = s.times(self.start)
        bent = s.times(slope)
        p = row[0] * slope[0] + row[1] * slope[1]
        # the slope is g·p + h·q with (g, h) as in `factors`
        q = row[0] * bent[0] + row[1] * bent[1] - s.middle * p
        if s.turning < 0.0:
            swing = math.sqrt(-s.turning)
            first = math.atan2(-p * swing, q) % math.pi or math.pi
            for number in range(most):
                at = (first + number * math.pi) / swing
                if at >= within:
                    return
                yield at
            return
        root = math.sqrt(s.turning)
        if p * q >= 0.0 or abs(p) * root >= abs(q):
            return
        ratio = -p / q
        at = math.log1p(2.0 * root * ratio / (1.0 - root * ratio)) / (2.0 * root) if root * ratio > 1e-9 else ratio
        if 0.0 < at < within:
            yield at

    def falls_below(self, row: Pair, level: float, within: float, slack: float) -> float:
        """When row·x falls below the level for the first time, s; infinity: not before `within`.

        slack   so little below is not below: rounding at a level from which it just set out is no crossing
        """
        begin = 0.0
        for end in (*self.extremes(row, within), within):
            if self._of(row, end) < level - slack:
                return self._root(row, level, begin, end)
            begin = end
        return math.inf

    def _of(self, row: Pair, seconds: float) -> float:
        x = self.at(seconds)
        return row[0] * x[0] + row[1] * x[1]

    def _root(self, row: Pair, level: float, low: float, high: float) -> float:
        """Newton's method between a time above the level and one below it, halved where it leaves them."""
        if self._of(row, low) <= level:
            return low
        at = 0.5 * (low + high)
        for _ in range(_ROUNDS):
            y = self.system.fade(self.start, at)
            slope = self.system.times(y)
            over = row[0] * (self.end[0] + y[0]) + row[1] * (self.end[1] + y[1]) - level
            low, high = (at, high) if over > 0.0 else (low, at)
            fall = row[0] * slope[0] + row[1] * slope[1]
            better = at - over / fall if fall != 0.0 else low
            if abs(better - at) <= 1e-14 * high:
                return better
            if not low < better < high:
                better = 0.5 * (low + high)
            at = better
        return at
