"""Friction that wanders slowly and at random: an Ornstein-Uhlenbeck process on a fixed grid, as a lognormal torque.

The process and its random numbers live here; what friction does to the rotor does not.
"""

from __future__ import annotations

import copy
import math
import random
from collections.abc import Callable, Sequence
from typing import Self, cast

import numpy as np

BLOCK = 512
"""Normals are drawn this many at a time: one call into numpy costs as much as a whole step of the rotor."""


def gaussian(rng: random.Random, count: int) -> list[float]:
    """An even number of normals: bit for bit those of so many calls of `rng.gauss(0.0, 1.0)`, in half the time."""
    if rng.gauss_next is not None:  # type: ignore[attr-defined]  # one was left over: its partner was drawn outside
        return [rng.gauss(0.0, 1.0) for _ in range(count)]
    uniform, cos, sin, log, sqrt = rng.random, math.cos, math.sin, math.log, math.sqrt
    block: list[float] = []
    for _ in range(count // 2):
        turn, radius = uniform() * math.tau, sqrt(-2.0 * log(1.0 - uniform()))
        block += (cos(turn) * radius, sin(turn) * radius)
    return block


class Normals:
    """Standard normals as plain floats, one a call, drawn ahead in blocks from `rng`; may be looked at before use."""

    __slots__ = ("_array", "_array_of", "_more", "_pool")

    def __init__(self, rng: np.random.Generator | random.Random) -> None:
        self._pool: list[float] = []
        self._array, self._array_of = np.empty(0), self._pool
        self._more: Callable[[], list[float]]
        if isinstance(rng, random.Random):
            self._more = lambda: gaussian(rng, BLOCK)
        else:
            normal = rng.standard_normal
            self._more = lambda: normal(BLOCK).tolist()

    def __call__(self) -> float:
        if not self._pool:
            self._pool = self._more()
        return self._pool.pop()

    def ahead(self, count: int) -> list[float]:
        """The next `count`, which stay to be drawn."""
        while len(self._pool) < count:
            self._pool = self._more() + self._pool
        return self._pool[: -count - 1 : -1]

    def stock(self, as_array: bool) -> tuple[Sequence[float], int]:
        """(numbers, how many of them are left): the next is the last of these, then the one before, to `pass_over`."""
        pool = self._pool
        if not as_array:
            return pool, len(pool)
        if self._array_of is not pool:
            self._array, self._array_of = np.array(pool), pool
        return cast(Sequence[float], self._array), len(pool)

    def pass_over(self, count: int) -> None:
        """As if `count` of those `ahead` had been drawn."""
        if count > 0:
            del self._pool[-count:]


def normal_source(rng: np.random.Generator | random.Random) -> Normals:
    """What gives the next standard normal at each call."""
    return Normals(rng)


class WanderingFriction:
    """mean · exp(s·x − s²/2), x an Ornstein-Uhlenbeck process of unit variance, constant within a cell of the grid.

    mean (N·m) and spread (standard deviation in percent of the mean) are those of the torque itself:
    s² = ln(1 + (spread/100)²), the lognormal law's; a torque thus never turns negative. The update over any number of
    cells is the process's exact transition (Gillespie 1996, "Exact numerical simulation of the Ornstein-Uhlenbeck
    process", from memory): x ← e^(−Δ/τ)·x + sqrt(1 − e^(−2Δ/τ))·n.
    """

    __slots__ = ("_carry", "_cell_s", "_draw", "_fresh", "_mean_scale", "_scale", "_sigma", "_tau", "_x", "torque")

    def __init__(
        self, mean_nm: float, spread_percent: float, correlation_s: float, cell_s: float, draw: Callable[[], float]
    ) -> None:
        variance = math.log1p((spread_percent / 100.0) ** 2)
        self._sigma = math.sqrt(variance)
        self._scale = self._mean_scale = mean_nm * math.exp(-0.5 * variance)
        self._tau = correlation_s
        self._cell_s = cell_s
        self._carry = math.exp(-cell_s / correlation_s)
        self._fresh = math.sqrt(-math.expm1(-2.0 * cell_s / correlation_s))
        self._draw = draw
        self._x = draw()
        self.torque = self._scale * math.exp(self._sigma * self._x)

    def next_cell(self) -> float:
        """The torque (N·m) in the next cell."""
        self._x = x = self._carry * self._x + self._fresh * self._draw()
        self.torque = torque = self._scale * math.exp(self._sigma * x)
        return torque

    @property
    def law(self) -> tuple[float, float, float, float]:
        """(carry, fresh, sigma, scale): x ← carry·x + fresh·n, torque = scale·exp(sigma·x)."""
        return self._carry, self._fresh, self._sigma, self._scale

    @property
    def x(self) -> float:
        """Where the process stands, in its own spread."""
        return self._x

    @property
    def normals(self) -> Callable[[], float]:
        """Where its numbers come from."""
        return self._draw

    def go_to(self, x: float, torque: float) -> None:
        """Where somebody who follows the same law with the same numbers has got to."""
        self._x, self.torque = x, torque

    def fork(self, draw: Callable[[], float]) -> Self:
        """The same from here on, with numbers of its own."""
        twin = copy.copy(self)
        twin._draw = draw
        return twin

    def skip(self, cells: int) -> float:
        """The torque (N·m) `cells` cells on, in one draw: same law as so many single cells. No cell, no draw."""
        if cells > 0:
            gap = cells * self._cell_s / self._tau
            self._x = math.exp(-gap) * self._x + math.sqrt(-math.expm1(-2.0 * gap)) * self._draw()
            self.torque = self._scale * math.exp(self._sigma * self._x)
        return self.torque

    def rescale(self, factor: float) -> None:
        """From now on the mean torque is `factor` times the one it began with; the wandering goes on as it was."""
        self._scale = self._mean_scale * factor
        self.torque = self._scale * math.exp(self._sigma * self._x)
