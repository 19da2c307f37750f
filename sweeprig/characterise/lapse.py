"""Failures that duty does not cure: a constant hazard beside the law's, as a short axis of the posterior.

What is known of the lapse, and the threshold with the lapse allowed for. The finding's words are in `duties_found`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import special

from sweeprig.characterise.combine import ONE_SIDED, equally_likely, quantile
from sweeprig.characterise.thresholds import ROUGH, Posterior, SpreadPrior, on_grid, span
from sweeprig.laws import Evidence, Floats, Law, log_likelihood_with_lapse

MEAN = 0.02
"""Prior of a lapse, where there is one: exponential with this mean, in stops per whole trial (common practice, no
source: a few percent of trials that go wrong for reasons of their own)."""
_NODES, _FOR_HILL = 11, 3
_BELOW, _ABOVE = 1.0, 3.0
_NEVER = -1e9


@dataclass(frozen=True, slots=True)
class Lapse:
    """What the trials say of the lapse under one law.

    posterior   of the threshold (of the law without lapse), a lapse allowed for
    rate        nodes, stops per whole trial
    mass        likelihood of each, the greatest 1: the density of the rate when its prior is flat, so that the bound is
                the data's own
    """

    posterior: Posterior
    rate: Floats
    mass: Floats

    def sample(self) -> Floats:
        """Equally likely rates."""
        fine = np.linspace(0.0, float(self.rate[-1]), 2001)
        log_density = np.interp(fine, self.rate, np.log(np.maximum(self.mass, 1e-300)))
        return equally_likely(fine, np.exp(log_density))

    @property
    def upper(self) -> float:
        """One-sided 95 % upper bound of the rate."""
        return quantile(self.sample(), ONE_SIDED)


def rates(evidence: Evidence) -> Floats:
    """Nodes from none to more than the trials could hide: even if every failure were a lapse."""
    failures = evidence.failures
    most = (failures + 4.0 * math.sqrt(failures) + 8.0) / float(evidence.exposure.sum() + failures)
    return np.asarray(most * (np.arange(_NODES) / (_NODES - 1)) ** 2.0)


def with_lapse(law: Law, evidence: Evidence, prior: SpreadPrior) -> Lapse:
    """Posterior with a lapse allowed for, and the likelihood of each rate, threshold and spread averaged over.

    With a lapse every failure could be one, and the threshold lie anywhere below. So the lowest duty at which a trial
    failed is taken to be within reach of the law: the threshold is looked for no lower than one spread below it.
    """
    rate = rates(evidence)
    width = np.gradient(rate)
    prior_mass = width * np.exp(-rate / MEAN)
    log_prior = np.log(prior_mass / prior_mass.sum())[:, None, None]
    lowest, highest = float(evidence.event_duty[0]), float(evidence.duty[evidence.exposure > 0.0].max())

    def by_rate(median: Floats, spread: Floats, at: Floats) -> Floats:
        far = (median < lowest - _BELOW * spread) | (median > highest + _ABOVE * spread)
        return np.where(far, _NEVER, log_likelihood_with_lapse(law, evidence, median, spread, at))

    def averaged(median: Floats, spread: Floats) -> Floats:
        return np.asarray(special.logsumexp(by_rate(median, spread, rate) + log_prior, axis=0))

    def hill(median: Floats, spread: Floats) -> Floats:
        return np.asarray(by_rate(median, spread, rate[:: _NODES // _FOR_HILL]).max(axis=0))

    found = on_grid(law, averaged, span(evidence), prior, ROUGH, hill)
    every = by_rate(found.median, found.spread[:, None], rate)
    cells = np.log(np.maximum(found.weight, 1e-300)) - special.logsumexp(every + log_prior, axis=0)
    likelihood = special.logsumexp(every + cells, axis=(1, 2))
    return Lapse(found, rate, np.exp(likelihood - likelihood.max()))


def chance(rate: float) -> float:
    """The chance that a whole trial ends in a lapse."""
    return -math.expm1(-rate)
