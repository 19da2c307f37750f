"""A law fitted together with what may disturb the trials: lapse, scatter between holds, drift over the night.

Whatever the trials do not ask for hardly enters: each possibility counts by its evidence (model averaging). What the
findings make of it is in `duties_found`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from sweeprig.characterise import drift as drifts
from sweeprig.characterise.combine import equally_likely, widened
from sweeprig.characterise.drift import NO_DRIFT, Drift
from sweeprig.characterise.lapse import Lapse, with_lapse
from sweeprig.characterise.scatter import likelihood as scattered_likelihood
from sweeprig.characterise.scatter import scattered
from sweeprig.characterise.thresholds import REJECTED_BELOW, ROUGH, Posterior, SpreadPrior, on_grid, posterior, span
from sweeprig.laws import Evidence, Floats, Law, Trial, log_likelihood, summed

FRACTIONS = (0.25, 0.5, 0.8)
"""Parts of the variance that scatter may make: a little, as much as the law's own spread, four times as much."""
NONE, SCATTER, LAPSE = 0.75, 0.15, 0.10
"""Chances before the trials: neither; scatter between holds (alike for each fraction); a lapse."""
_NEGLIGIBLE = 1e-3


@dataclass(frozen=True, slots=True)
class Part:
    """One explanation: its chance after the trials, and the posterior under it."""

    chance: float
    posterior: Posterior
    fraction: float = 0.0
    lapse: bool = False


@dataclass(frozen=True, slots=True)
class Explained:
    """One law, averaged over its explanations. `parts` begins with the plain law."""

    law: Law
    parts: tuple[Part, ...]
    log_evidence: float
    drift: Drift = NO_DRIFT
    lapse: Lapse | None = None

    @property
    def plain(self) -> Posterior:
        """The law alone, without scatter and lapse."""
        return self.parts[0].posterior

    def at(self, probability: float) -> Floats:
        """Sample of the duty at which a trial succeeds with `probability`, of the law without lapse, at the middle of
        the trials' times."""
        kept = [part for part in self.parts if part.chance > _NEGLIGIBLE]
        duty = np.concatenate([part.posterior.duty(probability).ravel() for part in kept])
        weight = np.concatenate([(part.chance * part.posterior.weight).ravel() for part in kept])
        return widened(equally_likely(duty, weight), self.drift.u_of(self.law.offset(probability)))

    def spread(self) -> Floats:
        """Sample of the standard deviation of the law of a single trial, scatter in it, percent duty."""
        kept = [part for part in self.parts if part.chance > _NEGLIGIBLE]
        value = np.concatenate([np.repeat(p.posterior.spread, p.posterior.weight.shape[1]) for p in kept])
        return equally_likely(value, np.concatenate([(p.chance * p.posterior.weight).ravel() for p in kept]))

    def chance_of_scatter(self) -> float:
        return sum(part.chance for part in self.parts if part.fraction)

    def chance_of_lapse(self) -> float:
        return sum(part.chance for part in self.parts if part.lapse)


@dataclass(frozen=True, slots=True)
class Fitted:
    """The laws that the data do not reject. The first is the law that findings are quoted by."""

    kept: tuple[Explained, ...]
    rejected: tuple[str, ...]

    def at(self, probability: float) -> tuple[Floats, ...]:
        """Samples of the duty for `probability`, one a law."""
        return tuple(one.at(probability) for one in self.kept)

    def worse(self) -> tuple[float, ...]:
        """How many times better the best law explains the trials than each."""
        best = max(one.log_evidence for one in self.kept)
        return tuple(math.exp(best - one.log_evidence) for one in self.kept)


def fit(laws: Sequence[Law], evidence: Evidence, prior: SpreadPrior) -> Fitted:
    """Fit every law alone: no lapse, no scatter, no drift. `evidence` must hold a success and a failure."""
    return _kept([_alone(posterior(law, evidence, prior)) for law in laws])


def _alone(one: Posterior) -> Explained:
    return Explained(one.law, (Part(1.0, one),), one.log_evidence)


def explain(
    laws: Sequence[Law],
    trials: Sequence[Trial],
    prior: SpreadPrior,
    *,
    timed: bool,
    drift_percent: float,
    moment_s: float | None = None,
    u_moment: float = 0.0,
) -> Fitted:
    """Fit every law with what may disturb the trials, which must hold a success and a failure.

    timed           the moment of each failure is known; only then can scatter be told from the law's own spread
    drift_percent   scale of the threshold's movement over the span of the trials before they are seen (Cauchy);
                    0: none is looked for. Drift is found by the first law, and is the same for all
    """
    drift = replace(_drift(laws[0], trials, prior, drift_percent, moment_s), u_moment=u_moment)
    still = drifts.without(trials, drift.percent, moment_s)
    return _kept([_explained(law, still, prior, drift, timed=timed) for law in laws])


def _kept(fits: Sequence[Explained]) -> Fitted:
    """Those whose evidence is at least REJECTED_BELOW of the best; the first leads while it is kept."""
    best = max(one.log_evidence for one in fits)
    kept = tuple(one for one in fits if one.log_evidence >= best + math.log(REJECTED_BELOW))
    names = {one.law.name for one in kept}
    return Fitted(kept, tuple(one.law.name for one in fits if one.law.name not in names))


def _drift(
    law: Law, trials: Sequence[Trial], prior: SpreadPrior, drift_percent: float, moment_s: float | None
) -> Drift:
    if drift_percent <= 0.0 or not np.any(drifts.spanned(trials)):
        return NO_DRIFT

    def at(percent: float) -> Posterior:
        evidence = summed(drifts.without(trials, percent, moment_s))
        return on_grid(law, partial(log_likelihood, law, evidence), span(evidence), prior, ROUGH)

    return drifts.found(at, drift_percent)


def _explained(law: Law, trials: Sequence[Trial], prior: SpreadPrior, drift: Drift, *, timed: bool) -> Explained:
    evidence = summed(trials)
    lapse = with_lapse(law, evidence, prior)
    made = [(NONE, Part(0.0, posterior(law, evidence, prior))), (LAPSE, Part(0.0, lapse.posterior, lapse=True))]
    for fraction in FRACTIONS if timed else ():
        of = scattered(law, fraction)
        one = on_grid(of.law, scattered_likelihood(of, trials), span(evidence), prior, ROUGH)
        made.append((SCATTER / len(FRACTIONS), Part(0.0, one, fraction)))
    whole = sum(before for before, _ in made)
    log_mass = np.array([math.log(before / whole) + part.posterior.log_evidence for before, part in made])
    top = float(log_mass.max())
    mass = np.exp(log_mass - top)
    chances = (mass / mass.sum()).tolist()
    parts = tuple(
        Part(chance, part.posterior, part.fraction, part.lapse) for chance, (_, part) in zip(chances, made, strict=True)
    )
    return Explained(law, parts, top + math.log(float(mass.sum())), drift, lapse)
