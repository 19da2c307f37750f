"""The kick: the pulse after which a motor nearly always starts and lasts, and the charge that it takes.

The start law on the logarithm of the pulse time, for each kick duty on its own. Which holds to make is `schedule`'s.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from sweeprig.characterise.combine import K_ONE_SIDED, K_TWO_SIDED, ONE_SIDED, TWO_SIDED, summary, widened
from sweeprig.characterise.findings import NOT_ASKED, Finding, not_found
from sweeprig.characterise.thresholds import REJECTED_BELOW, SpreadPrior, bound_without_contrast, posterior
from sweeprig.exposures import KICK_AMPS, kick_of
from sweeprig.holds import Approach, Outcome, Purpose, Verdict
from sweeprig.laws import START_LAWS, Evidence, Floats, Trial, summed
from sweeprig.plan import Plan

KICK_DUTIES = 3
"""Findings are kept for so many kick duties, the highest first."""
TAIL = 0.99
FEW = 4
PRIOR = SpreadPrior(0.3, 1.0)
"""Of the law's spread in ln(pulse time): 35 % in time, within a factor of 5 either way (90 %). Common practice, no
source: what one start needs depends on where the rotor stands and on its friction then."""
_NEAR = math.log(2.0)


@dataclass(frozen=True, slots=True)
class Kick:
    """The pulse at one kick duty, and its charge."""

    pulse: Finding
    charge: Finding


@dataclass(frozen=True, slots=True)
class _Kicked:
    """One trial: pulse s with its u, whether it started and lasted, mean current in the pulse A with its u."""

    hold: int
    pulse_s: float
    u_s: float
    started: bool
    amps: tuple[float, float] | None


def kicks(plan: Plan, done: Sequence[Outcome]) -> tuple[Kick, ...]:
    """KICK_DUTIES pairs of findings, the highest kick duty first; without holds they keep their names."""
    trials = [o for o in done if o.hold.purpose is Purpose.KICK and o.hold.approach is Approach.FROM_REST]
    kicked = [(one[0], o) for o in trials if (one := kick_of(o)) is not None]
    asked = () if plan.kick is None else plan.kick.duties_percent
    duties = sorted({round(duty, 6) for duty in asked} | {round(duty, 6) for duty, _ in kicked}, reverse=True)
    found = [_at(plan, duty, [o for one, o in kicked if round(one, 6) == duty]) for duty in duties[:KICK_DUTIES]]
    reason = f"{NOT_ASKED} kick" if not duties else f"{NOT_ASKED} further kick duty"
    missing = Kick(not_found(reason), not_found(reason))
    return (*found, *(missing for _ in range(KICK_DUTIES - len(found))))


def _at(plan: Plan, duty: float, outcomes: Sequence[Outcome]) -> Kick:
    """Both findings at one kick duty. Only trials at one run duty belong together: the one with the most, of equals the
    lowest."""
    decided = [o for o in outcomes if o.verdict in (Verdict.STARTED, Verdict.DID_NOT_START)]
    flags = {f"{o.verdict.value}_left_out" for o in outcomes if o not in decided}
    if not decided:
        reason = f"no kick at {duty:g} % duty was done at this condition"
        return Kick(not_found(reason, flags=tuple(sorted(flags))), not_found(reason))
    runs = Counter(round(o.hold.duty_percent, 6) for o in decided)
    run = min(runs, key=lambda one: (-runs[one], one))
    if len(runs) > 1:
        flags.add("other_run_duty_left_out")
    trials = [_kicked(o) for o in decided if round(o.hold.duty_percent, 6) == run]
    if not any(trial.started for trial in trials):
        reason = f"no pulse of those tried at {duty:g} % duty started it, so only a lower bound is known"
        return Kick(not_found(reason, flags=tuple(sorted({*flags, "never_started"}))), not_found(reason))
    words = f"pulse at {duty:g} % duty, then {run:g} %, still turning after {decided[0].hold.most_s:g} s"
    pulse = _pulse(trials, words, flags)
    return Kick(pulse, _charge(plan, pulse, trials, duty))


def _kicked(outcome: Outcome) -> _Kicked:
    found = kick_of(outcome)
    assert found is not None
    _, seconds, u = found
    reading = outcome.means.get(KICK_AMPS)
    amps = None if reading is None or reading.value is None else (reading.value, reading.u)
    return _Kicked(outcome.number, seconds, u, outcome.verdict is Verdict.STARTED, amps)


def _pulse(trials: Sequence[_Kicked], words: str, flags: set[str]) -> Finding:
    """One-sided 95 % upper bound of the pulse after which 99 % start and last, s; the worse of the laws."""
    evidence = summed([
        Trial(t.hold, math.log(t.pulse_s), 1.0 if t.started else 0.0, None if t.started else 1.0) for t in trials
    ])  # fmt: skip
    # one link times all pulses, so its error may be the same in all of them
    u_log = float(np.median([t.u_s / t.pulse_s for t in trials]))
    value, names = _bound(evidence, u_log)
    if not evidence.failures:
        flags = flags | {"always_started"}
    elif min(evidence.failures, evidence.successes) < FEW:
        flags = flags | {"few_failures" if evidence.failures < FEW else "few_successes"}
    if not evidence.duty[0] <= value <= evidence.duty[-1]:
        flags = flags | {"extrapolated_in_pulse_time"}
    return Finding(
        value=math.exp(value),
        high=math.exp(value),
        bound="upper",
        coverage_probability=ONE_SIDED,
        holds=evidence.holds,
        method=f"{words}; law on ln(pulse time): {names}; one-sided 95 % upper bound",
        assumes=(
            f"spread of ln(pulse time) {PRIOR.median_percent:g} within a factor of "
            f"{math.exp(K_ONE_SIDED * PRIOR.log_sd):.1f} (90 %) before the trials",
            "trials independent of each other",
            f"pulse time known to {100.0 * u_log:.2g} % (standard uncertainty, common to all pulses)",
        ),
        flags=tuple(sorted(flags)),
    )


def _bound(evidence: Evidence, u_log: float) -> tuple[float, str]:
    """(upper bound of ln(pulse time), the laws that carry it): hull over the laws that the data do not reject."""
    if not evidence.failures:
        bound = bound_without_contrast(START_LAWS, evidence, PRIOR, TAIL)
        return bound + K_ONE_SIDED * u_log, "beyond it, trials that all started would have had a chance below 5 %"
    fits = [posterior(law, evidence, PRIOR) for law in START_LAWS]
    best = max(one.log_evidence for one in fits)
    kept = [one for one in fits if one.log_evidence >= best + math.log(REJECTED_BELOW)]
    samples: list[Floats] = [widened(one.at(TAIL), u_log) for one in kept]
    return summary(samples).upper, " and ".join(one.law.name for one in kept)


def _charge(plan: Plan, pulse: Finding, trials: Sequence[_Kicked], duty: float) -> Finding:
    """What a pulse of that length takes, A·s: its length times the mean current of the trials' pulses near it."""
    read = [(abs(math.log(t.pulse_s / (pulse.value or t.pulse_s))), t) for t in trials if t.amps is not None]
    if pulse.value is None or not read:
        return not_found("no pulse was long enough for a reading of the current, or the rig reads none")
    near = [t for away, t in read if away <= _NEAR] or [min(read, key=lambda pair: pair[0])[1]]
    amps = np.array([t.amps for t in near if t.amps is not None])
    mean, accuracy = float(amps[:, 0].mean()), float(amps[:, 1].mean())
    scatter = float(amps[:, 0].std(ddof=1)) / math.sqrt(len(near)) if len(near) > 1 else 0.0
    value, u = mean * pulse.value, math.hypot(accuracy, scatter) * pulse.value
    return Finding(
        value=value,
        u=u,
        low=value - K_TWO_SIDED * u,
        high=value + K_TWO_SIDED * u,
        coverage_probability=TWO_SIDED,
        coverage_factor=K_TWO_SIDED,
        holds=tuple(t.hold for t in near),
        method=f"mean current of {len(near)} pulses at {duty:g} % duty × the bound of the pulse, {pulse.value:.3g} s",
        assumes=(f"current as read at {plan.current_at}", "the current keeps its mean over pulses of such lengths"),
        flags=() if len(near) > 1 else ("no_replicates",),
    )
