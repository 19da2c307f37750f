"""A smooth law through counted trials: where the chance of an event has a wanted level. No trials are done here."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import stats
from scipy.optimize import brentq

from sweeprig.errors import SweeprigError
from sweeprig.simbench.trials import Counts


@dataclass(frozen=True, slots=True)
class Law:
    """Chance of an event at duty x: 1 − exp(−exp(η)), η a polynomial in (x − centre)/scale, lowest order first.

    A constant hazard over the trial gives just this form for stops and for starts; the polynomial is free.
    """

    centre: float
    scale: float
    coefficients: tuple[float, ...]
    covariance: tuple[tuple[float, ...], ...]
    span: tuple[float, float]
    lack_of_fit_p: float

    def eta(self, duty: float) -> float:
        z = (duty - self.centre) / self.scale
        return float(sum(c * z**i for i, c in enumerate(self.coefficients)))

    def slope(self, duty: float) -> float:
        z = (duty - self.centre) / self.scale
        return float(sum(i * c * z ** (i - 1) for i, c in enumerate(self.coefficients) if i)) / self.scale

    def reaches(self, chance: float) -> bool:
        """The counted range holds a duty with this chance."""
        wanted = math.log(-math.log1p(-chance))
        values = [self.eta(float(x)) for x in np.linspace(*self.span, 200)]
        return min(values) <= wanted <= max(values)

    def duty_near(self, chance: float) -> float:
        """A duty (percent) in or a little beyond the counted range where the chance of an event is about `chance`."""
        wanted = math.log(-math.log1p(-chance))
        reach = 0.5 * (self.span[1] - self.span[0])
        grid = np.linspace(self.span[0] - reach, self.span[1] + reach, 800)
        return float(min(grid, key=lambda x: abs(self.eta(float(x)) - wanted)))

    def duty_at(self, chance: float) -> tuple[float, float]:
        """(duty, standard error) where the chance of an event is `chance`; SweeprigError outside the counted range."""
        wanted = math.log(-math.log1p(-chance))
        grid = np.linspace(*self.span, 800)
        above = np.array([self.eta(x) for x in grid]) > wanted
        places = np.flatnonzero(above[1:] != above[:-1])
        if len(places) == 0:
            raise SweeprigError(f"the counted trials do not reach a chance of {chance:g}", value=f"{self.span} % duty")
        # a polynomial may turn back at its ends: the crossing nearest to where most was counted is the one
        place = min(places, key=lambda i: abs(grid[i] - self.centre))
        duty = float(brentq(lambda x: self.eta(x) - wanted, grid[place], grid[place + 1]))
        powers = ((duty - self.centre) / self.scale) ** np.arange(len(self.coefficients))
        variance = float(powers @ np.array(self.covariance) @ powers)
        return duty, math.sqrt(variance) / abs(self.slope(duty))


def fit_law(counts: Sequence[Counts], degrees: tuple[int, ...] = (2, 3, 4)) -> Law:
    """Maximum likelihood for each degree; the one with the least Akaike criterion."""
    x = np.array([c.duty for c in counts])
    n = np.array([float(c.trials) for c in counts])
    k = np.array([float(c.events) for c in counts])
    informative = n * np.clip(k / n, 0.02, 0.98) * (1.0 - np.clip(k / n, 0.02, 0.98))
    centre = float(np.average(x, weights=informative))
    scale = max(1e-3, float(np.sqrt(np.average((x - centre) ** 2, weights=informative))))
    fits = [_fit_degree((x - centre) / scale, n, k, degree) for degree in degrees]
    beta, covariance, deviance = min(fits, key=lambda fit: fit[2] + 2.0 * len(fit[0]))
    freedom = max(1, len(np.unique(x)) - len(beta))
    return Law(
        centre,
        scale,
        tuple(float(b) for b in beta),
        tuple(tuple(float(v) for v in row) for row in covariance),
        (float(x.min()), float(x.max())),
        float(stats.chi2.sf(deviance, freedom)),
    )


def _fit_degree(z: Any, n: Any, k: Any, degree: int) -> tuple[Any, Any, float]:
    """Fisher scoring with halved steps → (coefficients, covariance, deviance against each duty's own frequency)."""
    z, place = np.unique(z, return_inverse=True)
    n, k = np.bincount(place, n), np.bincount(place, k)
    design = z[:, None] ** np.arange(degree + 1)

    def deviance(beta: Any) -> float:
        rate = np.exp(np.clip(design @ beta, -30.0, 3.4))
        terms = stats.binom.logpmf(k, n, -np.expm1(-rate)) - stats.binom.logpmf(k, n, k / n)
        return float(-2.0 * np.sum(terms))

    empirical = (k + 0.5) / (n + 1.0)
    beta = np.zeros(degree + 1)
    beta[:2] = np.polyfit(z, np.log(-np.log1p(-empirical)), 1, w=np.sqrt(n))[::-1]
    best = deviance(beta)
    fisher = np.eye(degree + 1)
    for _ in range(200):
        rate = np.exp(np.clip(design @ beta, -30.0, 3.4))
        chance, per_eta = -np.expm1(-rate), rate * np.exp(-rate)
        weight = per_eta / (chance * (1.0 - chance))
        fisher = design.T @ (design * (n * weight * per_eta)[:, None])
        step = np.linalg.solve(fisher + 1e-9 * np.eye(degree + 1), design.T @ (weight * (k - n * chance)))
        while (new := deviance(beta + step)) > best + 1e-12 and np.max(np.abs(step)) > 1e-12:
            step = step / 2.0
        beta, gain, best = beta + step, best - new, new
        if gain < 1e-9:
            break
    return beta, np.linalg.inv(fisher), best
