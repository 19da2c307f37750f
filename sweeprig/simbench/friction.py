"""Friction that wanders slowly and at random: an Ornstein-Uhlenbeck process on a fixed grid, as a lognormal torque.

The process and its random numbers live here; what friction does to the rotor does not.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable

import numpy as np

BLOCK = 512
"""Normals are drawn this many at a time: one call into numpy costs as much as a whole step of the rotor."""


def normal_source(rng: np.random.Generator | random.Random) -> Callable[[], float]:
    """A function that gives the next standard normal as a plain float; it draws ahead in blocks from `rng`."""
    pool: list[float] = []

    def draw() -> float:
        if not pool:
            if isinstance(rng, random.Random):
                pool.extend(rng.gauss(0.0, 1.0) for _ in range(BLOCK))
            else:
                pool.extend(rng.standard_normal(BLOCK).tolist())
        return pool.pop()

    return draw


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
