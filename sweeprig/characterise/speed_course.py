"""A smooth course of a speed's logarithm through the night, from reference holds: straight, or as slowly bent as they
support. Formulas on arrays; what is done with the course is `speed_drift`.

Model: y_i = a + b·x_i + g(x_i) + e_i, x the time in parts of the span of the references, g an integrated Wiener process
with variance λ·s² (its most probable course is the cubic smoothing spline; Wahba 1978, from memory), e_i of standard
deviation s. λ = 0 (a straight line) and a row of bent ones are weighed by their evidence (flat in a and b, 1/s in s).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sweeprig.laws import Floats

LEAST = 4
"""With fewer references nothing tells a drift from their scatter."""
_BENT = tuple(10.0**power for power in range(7))
_STRAIGHT = 0.5
_ROUNDS = 4
_HUBER = 2.5
_MAD_TO_SD = 1.4826


@dataclass(frozen=True, slots=True)
class _Fit:
    """One λ. inverse: of the scaled covariance C = W⁻¹ + λK (n, n); rest: C⁻¹(y − Hβ); gram: (HᵀC⁻¹H)⁻¹."""

    bend: float
    inverse: Floats
    beta: Floats
    rest: Floats
    gram: Floats
    variance: float
    log_evidence: float


@dataclass(frozen=True, slots=True)
class Course:
    """at_s (n,): times of the references. scatter: standard deviation of one reference about the course (relative).

    chances: of the fits, sum 1
    """

    at_s: Floats
    scatter: float
    freedom: int
    fits: tuple[_Fit, ...]
    chances: Floats

    @property
    def span_s(self) -> float:
        return float(self.at_s[-1] - self.at_s[0])

    def change(self, at_s: Floats, since_s: float) -> tuple[Floats, Floats]:
        """(change of the speed's logarithm from `since_s` to each of `at_s` (m,), its standard uncertainty).

        Beyond the references the course goes on as it must, ever less certain, up to one span away."""
        x, since = self._parts(np.asarray(at_s, dtype=np.float64)), self._parts(np.array([since_s]))
        rows = [self._contrast(fit, x, since) for fit in self.fits]
        means, variances = np.array([row[0] for row in rows]), np.array([row[1] for row in rows])
        mean = self.chances @ means
        variance = self.chances @ (variances + (means - mean) ** 2)
        return np.asarray(mean), np.asarray(np.sqrt(np.maximum(variance, 0.0)))

    def _parts(self, at_s: Floats) -> Floats:
        return np.asarray(1.0 + np.clip((at_s - self.at_s[0]) / self.span_s, -1.0, 2.0), dtype=np.float64)

    def _contrast(self, fit: _Fit, x: Floats, since: Floats) -> tuple[Floats, Floats]:
        own = self._parts(self.at_s)
        h = np.column_stack((np.ones_like(own), own))
        k = fit.bend * (_kernel(x, own) - _kernel(since, own))
        h_change = np.column_stack((np.zeros_like(x), x - since))
        mean = h_change @ fit.beta + k @ fit.rest
        prior = fit.bend * (_kernel_of(x) + _kernel_of(since) - 2.0 * _kernel(x, since)[:, 0])
        rest = h_change - k @ fit.inverse @ h
        variance = prior - np.einsum("ij,jk,ik->i", k, fit.inverse, k)
        variance += np.einsum("ij,jk,ik->i", rest, fit.gram, rest)
        return mean, fit.variance * variance


def course(at_s: Sequence[float], logs: Sequence[float], u: Sequence[float]) -> Course | None:
    """Fit the course to logarithms of speed at times `at_s` (s); None on fewer than LEAST, or all at one time.

    u: relative standard uncertainty of each speed's own mean; one reference scatters by no less. A reference far off
    counts less (Huber weights at 2.5 robust standard deviations; Huber 1964, from memory).
    """
    order = np.argsort(np.asarray(at_s))
    at, y = np.asarray(at_s, dtype=np.float64)[order], np.asarray(logs, dtype=np.float64)[order]
    if at.size < LEAST or at[-1] <= at[0]:
        return None
    own = max(float(np.sqrt(np.mean(np.square(u)))), 1e-9)
    weights = np.ones_like(y)
    for _ in range(_ROUNDS):
        made = _weighed(at, y, weights, own)
        away = y - y[0] - made.change(at, float(at[0]))[0]
        away = np.abs(away - np.median(away))
        scale = max(_MAD_TO_SD * float(np.median(away)) * math.sqrt(at.size / (at.size - 2.0)), own)
        weights = np.minimum(1.0, _HUBER * scale / np.maximum(away, 1e-12))
    return _weighed(at, y, weights, own)


def _weighed(at: Floats, y: Floats, weights: Floats, own: float) -> Course:
    x = 1.0 + (at - at[0]) / (at[-1] - at[0])
    fits = tuple(_fit(x, y, weights, bend, own) for bend in (0.0, *_BENT))
    before = np.array([_STRAIGHT, *(len(_BENT) * [(1.0 - _STRAIGHT) / len(_BENT)])])
    log_mass = np.log(before) + np.array([fit.log_evidence for fit in fits])
    mass = np.exp(log_mass - log_mass.max())
    chances = np.asarray(mass / mass.sum())
    straight_s = math.sqrt(float(chances @ np.array([fit.variance for fit in fits])))
    return Course(at, straight_s, at.size - 1, fits, chances)


def _fit(x: Floats, y: Floats, weights: Floats, bend: float, own: float) -> _Fit:
    """own: standard uncertainty of one point at the least; it counts as one more degree of freedom of s."""
    h = np.column_stack((np.ones_like(x), x))
    covariance = np.diag(1.0 / weights) + bend * _kernel(x, x)
    inverse: Floats = np.asarray(np.linalg.inv(covariance), dtype=np.float64)
    gram: Floats = np.asarray(np.linalg.inv(h.T @ inverse @ h), dtype=np.float64)
    beta = gram @ h.T @ inverse @ y
    rest = inverse @ (y - h @ beta)
    square, freedom = float((y - h @ beta) @ rest) + own**2, x.size - 1
    # a variance that is estimated widens the normal law to a Student's t; its variance is so much larger
    variance = max(square / freedom, own**2) * freedom / (freedom - 2.0)
    _, log_covariance = np.linalg.slogdet(covariance)
    _, log_gram = np.linalg.slogdet(gram)
    log_evidence = 0.5 * (float(log_gram) - float(log_covariance)) - 0.5 * freedom * math.log(square)
    return _Fit(bend, inverse, beta, rest, gram, variance, log_evidence)


def _kernel(first: Floats, second: Floats) -> Floats:
    """Covariance of an integrated Wiener process that begins at 0: m²(3M − m)/6, m and M the smaller and larger."""
    low, high = np.minimum(first[:, None], second[None, :]), np.maximum(first[:, None], second[None, :])
    return np.asarray(low**2 * (3.0 * high - low) / 6.0)


def _kernel_of(x: Floats) -> Floats:
    return np.asarray(x**3 / 3.0)
