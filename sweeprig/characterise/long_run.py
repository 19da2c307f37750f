"""The duty for a service of hours, extrapolated, and what stands beside it: never a best value, always a bound.

Takes the exposures that `evidence` chose, and the long holds. Which holds to make is `schedule`'s.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import special

from sweeprig.characterise.combine import K_ONE_SIDED, ONE_SIDED, quantile, widened
from sweeprig.characterise.evidence import Chosen, Duties
from sweeprig.characterise.findings import EXTRAPOLATED, NOT_ASKED, Bound, Finding, not_found
from sweeprig.characterise.thresholds import STALL_PRIOR, bound_without_contrast, posterior
from sweeprig.holds import Outcome, Purpose
from sweeprig.laws import EXPONENTIAL, LOGISTIC, Evidence, Law, Trial, summed
from sweeprig.plan import LongRunPlan, Plan

NEAR_SPREADS = 2.0
"""Holds within so many spreads of a duty are near it."""
_FALLS_ON = (
    "beyond the tested range the logarithm of the hazard falls with duty at least as fast as inside it; a floor, or a "
    "slope that flattens, breaks this"
)
_CURED = "no stop has a cause that duty does not cure, and the motor stays as it was this night: no drift, no wear"
_COUNT = "holds above the duty count as if they were at it; each hour is as likely to bring a stop as any other"


@dataclass(frozen=True, slots=True)
class LongRun:
    """The four findings that belong together."""

    duty: Finding
    factor: Finding
    model_free: Finding
    binary: Finding


@dataclass(frozen=True, slots=True)
class _Case:
    """What the four are worked out from. trials: of all exposures, in parts of `whole_s`, the stall hold time."""

    trials: tuple[Trial, ...]
    whole_s: float
    service: LongRunPlan
    known: Duties

    @property
    def chance(self) -> float:
        """That one part as long as a stall hold is survived, when the whole service is with its probability."""
        return math.exp(math.log(self.service.probability) * self.whole_s / self.service.service_s)

    @property
    def words(self) -> str:
        service_h = self.service.service_s / 3600.0
        return f"{100.0 * self.service.probability:g} % of services of {service_h:g} h"


def long_run(plan: Plan, known: Duties, exposures: Chosen, done: Sequence[Outcome]) -> LongRun:
    """The duty for the plan's service time, and beside it how far that reaches beyond what was held.

    exposures   trials of the stall law, long holds among them
    """
    if plan.long_run is None or plan.stall is None:
        return _none(f"{NOT_ASKED} long run")
    trials = exposures.trials
    if not trials:
        return _none("no exposure was done at this condition")
    case = _Case(trials, plan.stall.hold_time_s, plan.long_run, known)
    if all(trial.failed is not None for trial in trials):
        return _none("every hold stopped, so only a lower bound is known")
    value, spread = _bound(EXPONENTIAL, summed(trials), case)
    duty = _duty(plan, case, exposures, value)
    return LongRun(duty, _factor(case, value, spread), _model_free(case, value), _binary(case, done))


def _none(reason: str) -> LongRun:
    return LongRun(*(not_found(reason) for _ in range(4)))


def _bound(law: Law, evidence: Evidence, case: _Case) -> tuple[float, float]:
    """(one-sided 95 % upper bound of the duty at which one part has `case.chance`, the spread), percent duty.

    A straight line of the logarithm of the hazard, its posterior carried out to the service time."""
    if not evidence.failures:
        bound = bound_without_contrast((law,), evidence, STALL_PRIOR, case.chance)
        return bound + K_ONE_SIDED * case.known.u, STALL_PRIOR.median_percent
    found = posterior(law, evidence, STALL_PRIOR)
    spread = float(np.exp(np.sum(found.weight * np.log(found.spread)[:, None])))
    return quantile(widened(found.at(case.chance), case.known.u), ONE_SIDED), spread


def _duty(plan: Plan, case: _Case, exposures: Chosen, value: float) -> Finding:
    flags = [*exposures.flags]
    if not _supported(case, value):
        flags.append(EXTRAPOLATED)
    if all(trial.failed is None for trial in case.trials):
        flags.append("never_stopped")
    if value > plan.duty_high_percent:
        flags.append("beyond_the_duties_allowed")
    method = (
        f"{EXPONENTIAL.name}, posterior on a grid, its straight line of ln hazard carried on to {case.words}; "
        "one-sided 95 % upper bound"
    )
    return _bounded(value, "upper", case, method, (_FALLS_ON, _CURED, case.known.assumes), tuple(flags))


def _supported(case: _Case, value: float) -> bool:
    """Whether a hold of the service time was survived at a duty no higher, and none at the duty or above stopped."""
    least = case.service.service_s / case.whole_s * (1.0 - 1e-6)
    survived = any(t.survived >= least and t.duty_percent <= value + 1e-9 for t in case.trials)
    stopped = any(t.failed is not None and t.duty_percent >= value - 1e-9 for t in case.trials)
    return survived and not stopped


def _bounded(
    value: float, bound: Bound, case: _Case, method: str, assumes: tuple[str, ...], flags: tuple[str, ...],
    holds: tuple[int, ...] = (),
) -> Finding:  # fmt: skip
    upper = bound == "upper"
    return Finding(
        value=value,
        low=None if upper else value,
        high=value if upper else None,
        bound=bound,
        coverage_probability=ONE_SIDED,
        holds=tuple(sorted(holds or (trial.hold for trial in case.trials))),
        method=method,
        assumes=assumes,
        flags=tuple(sorted(set(flags))),
    )


def _turned_s(case: _Case, trials: Sequence[Trial]) -> float:
    return sum(trial.survived for trial in trials) * case.whole_s


def _factor(case: _Case, value: float, spread: float) -> Finding:
    """Service time over the time turned near the duty; near the tried duty that is nearest, where none is near."""
    duties = np.array([trial.duty_percent for trial in case.trials if trial.survived > 0.0])
    nearest = float(duties[np.argmin(np.abs(duties - value))])
    centre = value if abs(nearest - value) <= NEAR_SPREADS * spread else nearest
    near = [t for t in case.trials if t.survived > 0.0 and abs(t.duty_percent - centre) <= NEAR_SPREADS * spread]
    total = _turned_s(case, near)
    factor = case.service.service_s / total
    place = f"within {NEAR_SPREADS:g} spreads of {centre:.4g} % duty"
    return Finding(
        value=factor,
        u=0.0,
        low=factor,
        high=factor,
        coverage_probability=ONE_SIDED,
        holds=tuple(sorted(trial.hold for trial in near)),
        method=f"{case.service.service_s / 3600.0:g} h of service over {total / 3600.0:.3g} h turned {place}",
        flags=() if centre == value else ("no_hold_near",),
    )


def _model_free(case: _Case, value: float) -> Finding:
    """The chance of the service without any law of duty, %: from the time turned at or above the duty and its stops.

    Holds of the service time were each survived or not: Clopper and Pearson (1934), exact. Else stops in the total time
    as a Poisson count, exact (Garwood 1936): rate ≤ χ²(0.95, 2n + 2) / (2·T). One-sided 95 % lower bound.
    """
    above = [trial for trial in case.trials if trial.duty_percent >= value - 1e-9]
    service_s = case.service.service_s
    whole = [t for t in above if t.failed is not None or t.survived * case.whole_s >= service_s * (1.0 - 1e-6)]
    survived = [trial for trial in whole if trial.survived * case.whole_s >= service_s * (1.0 - 1e-6)]
    stops = sum(trial.failed is not None for trial in above)
    turned_s = _turned_s(case, above)
    if turned_s <= 0.0:
        return not_found("no hold was made at or above the long-run duty")
    if survived:
        n = len(whole)
        chance = float(special.betaincinv(len(survived), n - len(survived) + 1, 1.0 - ONE_SIDED))
        method = f"{len(survived)} of {n} holds of the service time survived (Clopper and Pearson)"
    else:
        rate = float(special.gammaincinv(stops + 1, ONE_SIDED)) / turned_s
        chance = math.exp(-service_s * rate)
        method = f"{turned_s / 3600.0:.3g} h at or above {value:.4g} % duty with {stops} stops (Poisson, exact)"
    holds = tuple(trial.hold for trial in above)
    return _bounded(100.0 * chance, "lower", case, method, (_COUNT,), (), holds)


def _binary(case: _Case, done: Sequence[Outcome]) -> Finding:
    """What a plain binary model would say: each whole stall hold survived or not, a logistic threshold, and a service
    as so many holds in a row. It stands beside, for comparison only."""
    trials = _whole_holds(case, done)
    stopped = sum(trial.failed is not None for trial in trials)
    if not stopped or stopped == len(trials):
        return not_found("needs stall holds of the whole hold time that stopped, and such that did not")
    value, _ = _bound(LOGISTIC, summed(trials), case)
    method = (
        f"{LOGISTIC.name} through {len(trials)} stall holds of {case.whole_s:g} s, survived or not, carried on to "
        f"{case.words}; one-sided 95 % upper bound"
    )
    holds = tuple(trial.hold for trial in trials)
    return _bounded(value, "upper", case, method, (_FALLS_ON, _CURED), (EXTRAPOLATED,), holds)


def _whole_holds(case: _Case, done: Sequence[Outcome]) -> list[Trial]:
    chosen = {trial.hold: trial for trial in case.trials}
    found = []
    for outcome in done:
        trial = chosen.get(outcome.number)
        whole = outcome.hold.purpose is Purpose.STALL and outcome.hold.most_s >= case.whole_s * (1.0 - 1e-6)
        if trial is not None and whole:
            failed = trial.failed is not None
            found.append(Trial(trial.hold, trial.duty_percent, 0.0 if failed else 1.0, 1.0 if failed else None))
    return found
