"""Findings that are duties: stall, sustain, start, and the step between them. From trials by way of `thresholds`.

Which holds are trials is decided in `evidence`; the numbers come from `thresholds` and `combine`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sweeprig.characterise.combine import (
    K_ONE_SIDED,
    ONE_SIDED,
    TWO_SIDED,
    Summary,
    difference,
    equally_likely,
    quantile,
    summary,
    widened,
)
from sweeprig.characterise.disturbed import disturbed_flags, disturbed_words, expected_failures
from sweeprig.characterise.evidence import Chosen
from sweeprig.characterise.explained import Fitted, explain
from sweeprig.characterise.findings import Bound, Finding, not_found
from sweeprig.characterise.thresholds import STALL_PRIOR, START_PRIOR, SpreadPrior, bound_without_contrast
from sweeprig.laws import STALL_LAWS, START_LAWS, Evidence, Floats, Law, summed
from sweeprig.taps import TapMap

TAIL = 0.99
FEW = 4
"""With fewer failures (or successes) than this the spread is mostly what the prior says, and a motor with a spread far
outside it is not covered as stated: flag `few_failures` (`few_successes`)."""
_TAIL_FAILURE = (0.02, 0.20)


@dataclass(frozen=True, slots=True)
class Kind:
    """What differs between stalling and starting. flags: (all trials succeeded, all failed).

    timed: the moment of a failure is known (a stop), not only that there was one (a start that did not succeed)
    """

    trial: str
    laws: tuple[Law, ...]
    prior: SpreadPrior
    flags: tuple[str, str]
    timed: bool


STALL = Kind("stall", STALL_LAWS, STALL_PRIOR, ("never_stopped", "always_stopped"), timed=True)
START = Kind("start", START_LAWS, START_PRIOR, ("always_started", "never_started"), timed=False)


@dataclass(frozen=True, slots=True)
class Threshold:
    """Everything known of one kind of threshold. `fitted` is None where all trials ended alike, or none was made."""

    kind: Kind
    evidence: Evidence
    fitted: Fitted | None
    u_duty: float
    assumes: tuple[str, ...]
    flags: tuple[str, ...]
    taps: TapMap | None = None

    def u_at(self, duty_percent: float) -> float:
        """u of a duty found there besides the statistics: the accuracy of duty, and between two taps, where nothing can
        be set or tried, half their step to either side as a rectangle (JCGM 100:2008, 4.3.7)."""
        if self.taps is None:
            return self.u_duty
        return float(np.hypot(self.u_duty, self.taps.step_at(duty_percent) / 2.0 / np.sqrt(3.0)))

    @property
    def reason(self) -> str:
        return f"no {self.kind.trial} trial was done at this condition"

    def finding(self, probability: float) -> Finding:
        """The duty for `probability` with its 95 % interval, the hull over the laws; else a bound."""
        if not self.evidence.holds:
            return not_found(self.reason)
        if self.fitted is None:
            return self._one_sided(probability, "lower" if self.evidence.failures else "upper")
        shown = self._summary(probability, widen=True)
        return Finding(
            value=shown.value,
            u=shown.u,
            low=shown.low,
            high=shown.high,
            coverage_probability=TWO_SIDED,
            coverage_factor=shown.coverage_factor,
            holds=self.evidence.holds,
            method=self._method(),
            assumes=self.assumes,
            flags=self._flags(probability, shown.value),
        )

    def upper(self, probability: float) -> Finding:
        """The one-sided 95 % upper bound of the duty for `probability`: the lowest duty that can be relied on."""
        if not self.evidence.holds:
            return not_found(self.reason)
        if self.fitted is None and self.evidence.failures:
            return not_found("every trial failed, so only a lower bound is known", flags=(self.kind.flags[1],))
        return self._one_sided(probability, "upper")

    def bound(self, probability: float, *, widen: bool) -> float:
        """That bound as a number, or the lower one where all trials failed. widen: the accuracy of duty in it."""
        if self.fitted is not None:
            return self._summary(probability, widen=widen).upper
        value = bound_without_contrast(self.kind.laws, self.evidence, self.kind.prior, probability)
        sign = -1.0 if self.evidence.failures else 1.0
        return value + (sign * K_ONE_SIDED * self.u_at(value) if widen else 0.0)

    def sample(self, probability: float) -> Floats | None:
        """Equally likely duties, without the accuracy of duty: it shifts a curve over duty by the same amount. Each law
        that the data do not reject counts alike."""
        if self.fitted is None:
            return None
        samples = self.fitted.at(probability)
        return samples[0] if len(samples) == 1 else equally_likely(np.concatenate(samples))

    def _summary(self, probability: float, *, widen: bool) -> Summary:
        if self.fitted is None:
            raise AssertionError("asked only where a fit exists")
        samples = self.fitted.at(probability)
        u = self.u_at(quantile(samples[0], 0.5))
        return summary([widened(one, u) for one in samples] if widen else samples)

    def _one_sided(self, probability: float, bound: Bound) -> Finding:
        value = self.bound(probability, widen=True)
        return Finding(
            value=value,
            low=value if bound == "lower" else None,
            high=value if bound == "upper" else None,
            bound=bound,
            coverage_probability=ONE_SIDED,
            holds=self.evidence.holds,
            method=self._method(),
            assumes=self.assumes,
            flags=self._flags(probability, value),
        )

    def _method(self) -> str:
        if self.fitted is None:
            return "beyond it, trials that all ended alike would have had a chance below 5 %; spread by its prior"
        names = " and ".join(one.law.name for one in self.fitted.kept)
        hull = ", interval: hull that holds 95 % whichever is true" if len(self.fitted.kept) > 1 else ""
        low, middle, high = (quantile(self.fitted.kept[0].spread(), p) for p in (0.025, 0.5, 0.975))
        spread = f"spread of the law {middle:.2g} % duty ({low:.2g} to {high:.2g})"
        return f"posterior on a grid, place flat, spread log-normal; law: {names}{hull}; {spread}"

    def _flags(self, probability: float, value: float) -> tuple[str, ...]:
        flags = list(self.flags)
        if self.fitted is None:
            return (*flags, self.kind.flags[1 if self.evidence.failures else 0])
        if probability >= TAIL:
            flags += ["law_assumed"] if len(self.kind.laws) < 2 else []
            flags += [] if self._tail_was_tried() else ["tail_not_tried"]
        if min(self.evidence.failures, self.evidence.successes) < FEW:
            flags.append("few_failures" if self.evidence.failures < FEW else "few_successes")
        if not self.evidence.duty[0] <= value <= self.evidence.duty[-1]:
            flags.append("extrapolated")
        return (*flags, *disturbed_flags(self.fitted, self.evidence))

    def _tail_was_tried(self) -> bool:
        """Whether a trial was made where the leading law expects 2 to 20 % to fail (definitions, Law of stalling)."""
        if self.fitted is None:
            return False
        failing = expected_failures(self.fitted.kept[0], self.evidence)
        return bool(np.any((failing >= _TAIL_FAILURE[0]) & (failing <= _TAIL_FAILURE[1])))


def threshold(kind: Kind, chosen: Chosen, u_duty: float, taps: TapMap | None = None) -> Threshold:
    """Fit `kind`'s laws to the chosen trials, with the lapse, the scatter and the drift that they ask for."""
    evidence = summed(chosen.trials)
    contrast = evidence.failures > 0 and evidence.successes > 0
    drift = kind.prior.median_percent if chosen.drift_percent is None else chosen.drift_percent
    fitted = None
    if contrast:
        fitted = explain(
            kind.laws,
            chosen.trials,
            kind.prior,
            timed=kind.timed,
            drift_percent=drift,
            moment_s=chosen.moment_s,
            u_moment=chosen.u_moment,
        )
    assumes = (
        *chosen.assumes,
        f"spread {kind.prior.median_percent:g} % duty within a factor of "
        f"{np.exp(K_ONE_SIDED * kind.prior.log_sd):.1f} (90 %) before the trials",
        *(("no lapse, no scatter between trials, no drift",) if fitted is None else disturbed_words(fitted)),
        *(() if taps is None else ("within half a step between taps a duty may lie anywhere (rectangle)",)),
    )
    return Threshold(kind, evidence, fitted, u_duty, assumes, chosen.flags, taps)


def start_stall_hysteresis(start: Threshold, stall: Threshold) -> Finding:
    """Start duty minus stall duty; the accuracy of duty is common to both and cancels."""
    samples = start.sample(0.5), stall.sample(0.5)
    if samples[0] is None or samples[1] is None:
        return not_found("the start duty or the stall duty is only a bound, or was not found")
    shown = summary([difference(samples[0], samples[1])])
    return Finding(
        value=shown.value,
        u=shown.u,
        low=shown.low,
        high=shown.high,
        coverage_probability=TWO_SIDED,
        coverage_factor=shown.coverage_factor,
        holds=tuple(sorted({*start.evidence.holds, *stall.evidence.holds})),
        method="start duty minus stall duty, distributions subtracted",
        assumes=("start and stall trials independent", "accuracy of duty common to both"),
        flags=tuple(sorted({*start.flags, *stall.flags})),
    )
