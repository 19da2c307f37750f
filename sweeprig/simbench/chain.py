"""Two wandering frictions and a speed as one Markov chain on a grid: rare events without random numbers.

The numerics alone: grids, their transitions, the flow of the speed, what is cut off. What the cuts mean for a motor is
`rare_chain`'s.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.special import ndtr

Numbers = NDArray[np.float64]

LOWEST, HIGHEST = -6.5, 9.0
"""Ends of the grids in the friction's own standard deviations; what lies beyond is 1e-10 below, 1e-19 above."""
FINEST = 160
"""Nodes of one friction at most: a friction that moves less in a cell than these can show is refused."""


@dataclass(frozen=True, slots=True)
class Axis:
    """One friction on a grid: nodes (its standard deviations), quadrature weights, transition[i, j] = from i to j.

    edges   of the part of the axis that each node stands for, one more than nodes; torque in N·m
    """

    nodes: Numbers
    weights: Numbers
    edges: Numbers
    transition: Numbers
    torque: Numbers
    carry: float
    fresh: float

    @property
    def resting(self) -> Numbers:
        """Masses of the undisturbed process."""
        masses = self.weights * np.exp(-0.5 * self.nodes**2)
        return np.asarray(masses / masses.sum())

    def below(self, limit: Any) -> Numbers:
        """Part of each node's share of the axis below `limit` (any shape; the nodes are the last dimension)."""
        wide = np.diff(self.edges)
        return np.asarray(np.clip((np.asarray(limit)[..., None] - self.edges[:-1]) / wide, 0.0, 1.0))

    def chance_above(self, limit: Any) -> Numbers:
        """The chance to be above `limit` a cell later, from each node: exact, and smooth in both."""
        return np.asarray(ndtr((self.carry * self.nodes - np.asarray(limit)[..., None]) / self.fresh))


def axis(law: tuple[float, float, float, float], step: float, split: float | None = None) -> Axis | None:
    """The grid of a friction of `law` (`WanderingFriction.law`); None where it would need more than FINEST nodes.

    step    spacing of the nodes over the standard deviation of one cell's move; smaller is finer
    split   a value at which something is cut off: the quadrature then has a panel on either side of it
    A friction that does not wander has one node. Else: Gauss and Legendre's quadrature by panels.
    """
    carry, fresh, sigma, scale = law
    if sigma == 0.0:
        one = np.ones(1)
        ends = np.array([-math.inf, math.inf])
        return Axis(np.zeros(1), one, ends, np.ones((1, 1)), np.array([scale]), carry, fresh)
    inside = [] if split is None or not LOWEST + 0.1 < split < HIGHEST - 0.1 else [split]
    ends_of = [LOWEST, *inside, HIGHEST]
    # within a panel the nodes lie up to π/2 apart of their mean distance
    counts = [max(6, math.ceil((b - a) / min(0.5, step * fresh))) for a, b in pairwise(ends_of)]
    if sum(counts) > FINEST:
        return None
    nodes, weights = [], []
    for count, a, b in zip(counts, ends_of[:-1], ends_of[1:], strict=True):
        x, w = np.polynomial.legendre.leggauss(count)
        nodes.append(0.5 * (b - a) * x + 0.5 * (b + a))
        weights.append(0.5 * (b - a) * w)
    at, weight = np.concatenate(nodes), np.concatenate(weights)
    edges = LOWEST + np.concatenate([[0.0], np.cumsum(weight)])
    density = np.exp(-0.5 * ((at[None, :] - carry * at[:, None]) / fresh) ** 2) / (fresh * math.sqrt(2.0 * math.pi))
    return Axis(at, weight, edges, density * weight[None, :], scale * np.exp(sigma * at), carry, fresh)


@dataclass(frozen=True, slots=True)
class Flow:
    """One cell of the speed: masses[speed × first friction] → the same a cell later; `lost` came to rest on the way.

    speeds   rad/s, evenly from zero
    """

    speeds: Numbers
    onward: Any
    lost: Numbers

    def apply(self, masses: Numbers) -> Numbers:
        """Masses (speed, first friction, second friction) a cell later, the frictions still the same."""
        shape = masses.shape
        return np.asarray(self.onward @ masses.reshape(shape[0] * shape[1], shape[2])).reshape(shape)


def flow(speeds: Numbers, later: Numbers) -> Flow:
    """The flow that takes speed i with friction j to `later[i, j]`; what is at zero or below is lost.

    Each mass is laid on the four nodes around, so that its first three moments stay as they are: laid on two, the
    speed would diffuse in every cell.
    """
    count, frictions = later.shape
    step = float(speeds[1] - speeds[0])
    place = np.clip(later / step, 0.0, count - 1.0)
    first = np.clip(np.floor(place).astype(int) - 1, 0, count - 4)
    t = place - first
    shares = [
        -(t - 1.0) * (t - 2.0) * (t - 3.0) / 6.0,
        t * (t - 2.0) * (t - 3.0) / 2.0,
        -t * (t - 1.0) * (t - 3.0) / 2.0,
        t * (t - 1.0) * (t - 2.0) / 6.0,
    ]
    lost = later <= 0.0
    which = np.arange(frictions)[None, :]
    came_from = np.arange(count * frictions)
    rows = np.concatenate([((first + i) * frictions + which).ravel() for i in range(4)])
    values = np.concatenate([np.where(lost, 0.0, share).ravel() for share in shares])
    size = count * frictions
    onward = sparse.csr_matrix((values, (rows, np.tile(came_from, 4))), shape=(size, size))
    return Flow(speeds, onward, lost.astype(float))


def moved(masses: Numbers, first: Axis, second: Axis) -> Numbers:
    """Masses (…, first friction, second friction) after both have moved on by a cell."""
    return np.asarray(np.swapaxes(np.swapaxes(masses @ second.transition, -1, -2) @ first.transition, -1, -2))
