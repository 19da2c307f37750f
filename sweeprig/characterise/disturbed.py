"""What is said of lapse, scatter and drift: the finding `lapse`, and the flags and words beside the duties found.

The numbers come from `explained`; here it is decided what they are worth saying.
"""

from __future__ import annotations

import math

import numpy as np

from sweeprig.characterise.combine import ONE_SIDED, TWO_SIDED, quantile
from sweeprig.characterise.explained import LAPSE, NONE, SCATTER, Explained, Fitted
from sweeprig.characterise.findings import Finding, not_found
from sweeprig.characterise.lapse import chance
from sweeprig.laws import Evidence, Floats

WORTH_SAYING = 0.01
"""Definitions: a lapse is flagged when its upper bound exceeds 1 %."""
ODDS = 3.0
"""Evidence that counts as "seen": three to one, the chances before the trials taken out (Jeffreys: substantial)."""


def expected_failures(lead: Explained, evidence: Evidence) -> Floats:
    """The chance that a whole trial fails at each duty tried, by the law alone at its most likely place and spread."""
    plain = lead.plain
    spread = float(np.exp(np.sum(plain.weight * np.log(plain.spread)[:, None])))
    x = (evidence.duty - quantile(plain.at(0.5), 0.5)) / spread
    return np.asarray(-np.expm1(-plain.law.cumulative(x)))


def lapse_seen(fitted: Fitted) -> bool:
    """Whether the trials ask for a lapse under every law that they do not reject."""
    return all(_odds(one, one.chance_of_lapse(), LAPSE) >= ODDS for one in fitted.kept)


def scatter_seen(fitted: Fitted) -> bool:
    """Whether they ask for scatter between holds, likewise."""
    return all(_odds(one, one.chance_of_scatter(), SCATTER) >= ODDS for one in fitted.kept)


def _odds(one: Explained, after: float, before: float) -> float:
    plain = one.parts[0].chance
    return math.inf if plain == 0.0 else after / plain * NONE / before


def lapse_upper(fitted: Fitted) -> float:
    """One-sided 95 % upper bound of the chance of a lapse in a whole trial, the worst over the laws; 0 where the laws
    were fitted alone."""
    return max((chance(one.lapse.upper) for one in fitted.kept if one.lapse is not None), default=0.0)


def could_tell(fitted: Fitted, evidence: Evidence) -> bool:
    """Whether trials without a single lapse would have shown that there is less than 1 %: enough of them were made
    where the law alone hardly ever fails. Else a bound above 1 % is lack of trials and says nothing of the motor."""
    calm = expected_failures(fitted.kept[0], evidence) < WORTH_SAYING
    return rule_of_three(float(evidence.exposure[calm].sum())) <= WORTH_SAYING


def rule_of_three(trials: float) -> float:
    """One-sided 95 % upper bound of a chance of which nothing was seen in so many whole trials: 1 − 0.05^(1/n)."""
    return chance(-math.log(1.0 - ONE_SIDED) / trials) if trials > 0.0 else 1.0


def lapse_possible(fitted: Fitted, evidence: Evidence) -> bool:
    """More than 1 % cannot be ruled out although the trials could have, or a lapse is seen."""
    return lapse_upper(fitted) > WORTH_SAYING and (lapse_seen(fitted) or could_tell(fitted, evidence))


def disturbed_flags(fitted: Fitted, evidence: Evidence) -> tuple[str, ...]:
    """Flags of a duty found from these trials."""
    flags = ["lapse_possible"] if lapse_possible(fitted, evidence) else []
    flags += ["threshold_scatters"] if scatter_seen(fitted) else []
    return (*flags, *(["threshold_drifts"] if fitted.kept[0].drift.percent else []))


def disturbed_words(fitted: Fitted) -> tuple[str, ...]:
    """What a duty found from these trials assumes of what may disturb them."""
    lead, drift = fitted.kept[0], fitted.kept[0].drift
    words = [f"{name} rejected by the data" for name in fitted.rejected]
    words.append(f"lapse allowed for (chance of one {100.0 * lead.chance_of_lapse():.0f} %)")
    if len(lead.parts) > 2:
        words.append(f"scatter between holds allowed for (chance of it {100.0 * lead.chance_of_scatter():.0f} %)")
    if drift.percent:
        words.append(
            f"drift of {drift.percent:+.2g} % duty over the trials taken out (u {drift.u:.2g} %); the duty is that at "
            "the middle of their times, or at the moment of the speeds where reference holds show their drift"
        )
    elif drift.u:
        words.append(f"no drift taken out (chance of one {100.0 * drift.probability:.0f} %, its size in u)")
    return tuple(words)


def lapse_finding(fitted: Fitted | None, evidence: Evidence) -> Finding:
    """The chance of a stop in one hold that duty does not cure: a value where one is seen, else an upper bound."""
    if not evidence.holds:
        return not_found("no stall trial was done at this condition")
    if fitted is None and evidence.failures:
        return not_found("every hold ended in a stop, so nothing is known of stops that duty does not cure")
    if fitted is None:
        return _bound(rule_of_three(float(evidence.exposure.sum())), evidence, "no stop in all exposures together", ())
    if not lapse_seen(fitted):
        upper = lapse_upper(fitted)
        told = upper <= WORTH_SAYING or could_tell(fitted, evidence)
        method = "posterior of a constant hazard beside the law, its prior flat; the worst over the laws"
        return _bound(upper, evidence, method, () if told else ("lapse_not_tried",))
    samples = [-np.expm1(-one.lapse.sample()) for one in fitted.kept if one.lapse is not None]
    tail = (1.0 - TWO_SIDED) / 2.0
    return Finding(
        value=quantile(samples[0], 0.5),
        u=float(np.std(np.concatenate(samples))),
        low=min(quantile(one, tail) for one in samples),
        high=max(quantile(one, 1.0 - tail) for one in samples),
        coverage_probability=TWO_SIDED,
        holds=evidence.holds,
        method="posterior of a constant hazard beside the law, its prior flat; hull over the laws",
        assumes=_LAPSE_ASSUMES,
    )


_LAPSE_ASSUMES = ("stops that duty does not cure come at the same rate at every duty tried",)


def _bound(value: float, evidence: Evidence, method: str, flags: tuple[str, ...]) -> Finding:
    return Finding(
        value=value,
        high=value,
        bound="upper",
        coverage_probability=ONE_SIDED,
        holds=evidence.holds,
        method=method,
        assumes=_LAPSE_ASSUMES,
        flags=flags,
    )
