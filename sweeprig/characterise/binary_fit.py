"""Binomial regression on one covariate: logit, probit and complementary log-log, with standard errors.

For published cases and for comparing with the grid posterior; data that can be separated are a result of their own.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import special

from sweeprig.errors import SweeprigError
from sweeprig.laws import Floats

Link = Literal["logit", "probit", "cloglog"]
_ROUNDS = 100
_CLOSE = 1e-12
_EDGE = 1e-15


class FitFailed(SweeprigError):
    """The iteration did not settle, or the data allow no fit; the text says which."""


@dataclass(frozen=True, slots=True)
class Separated:
    """No finite fit exists: a value of the covariate divides all failures from all successes (or one kind is missing).

    between   the two covariate values nearest to the division, (low, high); infinite where one kind is missing
    rising    successes lie above
    """

    between: tuple[float, float]
    rising: bool
    reason: str


@dataclass(frozen=True, slots=True)
class BinaryFit:
    """P(success) = F(intercept + slope·x). covariance: (2, 2), from the expected information, as GLMs give it."""

    link: Link
    intercept: float
    slope: float
    covariance: Floats
    deviance: float
    log_likelihood: float
    rounds: int

    @property
    def intercept_u(self) -> float:
        return math.sqrt(self.covariance[0, 0])

    @property
    def slope_u(self) -> float:
        return math.sqrt(self.covariance[1, 1])

    def place(self, probability: float) -> tuple[float, float]:
        """x where P = probability, and its standard error (delta method, JCGM 100:2008 5.2.2)."""
        x = (_ETA[self.link](probability) - self.intercept) / self.slope
        gradient = np.array([1.0, x]) / -self.slope
        return x, math.sqrt(float(gradient @ self.covariance @ gradient))

    def fieller(self, probability: float, coverage: float = 0.95) -> tuple[float, float] | None:
        """Interval of x where P = probability by Fieller's theorem (1954); None where it is not finite (g ≥ 1)."""
        z = float(special.ndtri(0.5 + coverage / 2.0))
        (v00, v01), (_, v11) = self.covariance
        g = z * z * v11 / self.slope**2
        if g >= 1.0:
            return None
        x = self.place(probability)[0]
        middle = x + g / (1.0 - g) * (x + v01 / v11)
        inner = v00 + 2.0 * x * v01 + x * x * v11 - g * (v00 - v01**2 / v11)
        half = z / abs(self.slope) / (1.0 - g) * math.sqrt(inner)
        return float(middle - half), float(middle + half)


def _cloglog(eta: Floats) -> Floats:
    return np.asarray(-np.expm1(-np.exp(eta)))


def _normal_density(eta: Floats) -> Floats:
    return np.asarray(np.exp(-0.5 * eta * eta) / math.sqrt(2.0 * math.pi))


_MEAN: dict[Link, Callable[[Floats], Floats]] = {
    "logit": special.expit,
    "probit": special.ndtr,
    "cloglog": _cloglog,
}
_SLOPE: dict[Link, Callable[[Floats], Floats]] = {
    "logit": lambda eta: np.asarray(special.expit(eta) * special.expit(-eta)),
    "probit": _normal_density,
    "cloglog": lambda eta: np.asarray(np.exp(eta - np.exp(eta))),
}
_ETA: dict[Link, Callable[[float], float]] = {
    "logit": lambda p: math.log(p / (1.0 - p)),
    "probit": lambda p: float(special.ndtri(p)),
    "cloglog": lambda p: math.log(-math.log1p(-p)),
}


def fit_binary(x: Floats, trials: Floats, successes: Floats, link: Link = "logit") -> BinaryFit | Separated:
    """Maximum likelihood by Newton steps with the expected information (Fisher scoring), halved while they overshoot.

    x, trials, successes: (n,), successes within 0 to trials. Raises FitFailed for counts that are none, for a
    covariate that never varies, and when 100 rounds do not settle. Source: McCullagh and Nelder 1989, 2.5.
    """
    x, trials, successes = (np.asarray(a, dtype=np.float64) for a in (x, trials, successes))
    _check(x, trials, successes)
    apart = separation(x, trials, successes)
    if apart is not None:
        return apart
    centre, scale = float(np.mean(x)), float(np.std(x))
    z = (x - centre) / scale
    beta, rounds = _newton(z, trials, successes, link)
    back = np.array([[1.0, -centre / scale], [0.0, 1.0 / scale]])
    covariance = back @ np.linalg.inv(_information(beta, z, trials, link)) @ back.T
    intercept, slope = back @ beta
    mean = _MEAN[link](beta[0] + beta[1] * z)
    value = _log_likelihood(mean, trials, successes)
    deviance = 2.0 * (_log_likelihood(successes / trials, trials, successes) - value)
    return BinaryFit(link, float(intercept), float(slope), covariance, deviance, value, rounds)


def _check(x: Floats, trials: Floats, successes: Floats) -> None:
    if not (x.shape == trials.shape == successes.shape and x.ndim == 1 and x.size):
        raise FitFailed("x, trials and successes must be one-dimensional and equally long", value=str(x.shape))
    if np.any(trials <= 0) or np.any(successes < 0) or np.any(successes > trials):
        raise FitFailed("counts of successes that cannot be", allowed="0 ≤ successes ≤ trials, trials > 0")
    if np.ptp(x) == 0.0:
        raise FitFailed("all trials are at one setting", value=str(x[0]), remedy="Add trials at another setting")


def separation(x: Floats, trials: Floats, successes: Floats) -> Separated | None:
    """Whether a division, complete or quasi-complete, leaves no finite fit (Albert and Anderson 1984)."""
    good, bad = x[successes > 0], x[successes < trials]
    if not good.size or not bad.size:
        missing = "success" if not good.size else "failure"
        return Separated((-math.inf, math.inf), bool(bad.size), f"no {missing} among the trials")
    if bad.max() <= good.min():
        return Separated((float(bad.max()), float(good.min())), True, "all failures lie below all successes")
    if good.max() <= bad.min():
        return Separated((float(good.max()), float(bad.min())), False, "all failures lie above all successes")
    return None


def _log_likelihood(mean: Floats, trials: Floats, successes: Floats) -> float:
    return float(np.sum(special.xlogy(successes, mean) + special.xlog1py(trials - successes, -mean)))


def _information(beta: Floats, z: Floats, trials: Floats, link: Link) -> Floats:
    eta = beta[0] + beta[1] * z
    mean = np.clip(_MEAN[link](eta), _EDGE, 1.0 - _EDGE)
    weight = trials * _SLOPE[link](eta) ** 2 / (mean * (1.0 - mean))
    design = np.stack([np.ones_like(z), z], axis=1)
    return np.asarray(design.T @ (weight[:, None] * design))


def _score(beta: Floats, z: Floats, trials: Floats, successes: Floats, link: Link) -> Floats:
    eta = beta[0] + beta[1] * z
    mean = np.clip(_MEAN[link](eta), _EDGE, 1.0 - _EDGE)
    part = (successes - trials * mean) * _SLOPE[link](eta) / (mean * (1.0 - mean))
    return np.array([part.sum(), (part * z).sum()])


def _newton(z: Floats, trials: Floats, successes: Floats, link: Link) -> tuple[Floats, int]:
    rate = float(successes.sum() / trials.sum())
    beta = np.array([_ETA[link](rate), 0.0])
    value = _log_likelihood(_MEAN[link](beta[0] + beta[1] * z), trials, successes)
    for rounds in range(1, _ROUNDS + 1):
        step = np.linalg.solve(_information(beta, z, trials, link), _score(beta, z, trials, successes, link))
        if float(np.max(np.abs(step))) < _CLOSE * (1.0 + float(np.max(np.abs(beta)))):
            return beta, rounds
        for _ in range(30):
            tried = _log_likelihood(_MEAN[link](beta[0] + step[0] + (beta[1] + step[1]) * z), trials, successes)
            if tried >= value - 1e-9:
                break
            step = step / 2.0
        beta, value = beta + step, tried
    raise FitFailed("the fit did not settle", value=f"{_ROUNDS} rounds", remedy="Look at the counts for an outlier")
