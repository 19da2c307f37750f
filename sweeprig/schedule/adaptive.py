"""The adaptive search of stall and start at each condition: sources of holds, steered by `search`.

Conditions and kinds compete by gain per second; what has no answer yet goes first, so that a night that is cut short
leaves none without. With a deadline and time to spend the search goes on sharpening beyond what was asked.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from sweeprig.exposures import LEAST_TIME_CONSTANTS
from sweeprig.holds import Approach, Condition, Hold, Purpose
from sweeprig.laws import STALL_LAWS, STALL_SPREAD_PERCENT, START_LAWS, START_SPREAD_PERCENT, Law
from sweeprig.plan import HeatPlan, Plan, StallPlan, StartPlan
from sweeprig.schedule.budget import BETWEEN_S, COAST_S
from sweeprig.schedule.keys import Key, key_of
from sweeprig.schedule.posterior import Neighbour, Prior, cells
from sweeprig.schedule.proposal import Here, Proposal
from sweeprig.schedule.search import BINARY, SURVIVAL, Choice, Question, best
from sweeprig.schedule.tally import Tallies, Tally, Trials
from sweeprig.schedule.trials import stall_hold, stall_lead, start_hold

NAME = "adaptive"
PROBABILITY = {
    "stall_duty_percent": ("stall", 0.5),
    "sustain_99_duty_percent": ("stall", 0.99),
    "start_duty_percent": ("start", 0.5),
    "start_99_duty_percent": ("start", 0.99),
}
"""Finding → kind of trial, and the chance to succeed at the duty that it is."""
TAIL = 0.99
END_WITHIN = 1.0
"""%: so near to the lowest duty allowed a motor that has never stopped is tried at that duty itself."""
HINT = 0.25
"""A curve hold that turned on is as good a hint as so much of a whole trial that was survived."""


def stall_search(plan: Plan, here: Here) -> Proposal | None:
    """The stall trial that tells most per second at this condition, until all is known as asked."""
    return _proposal(plan, here, "stall", beyond=False)


def start_search(plan: Plan, here: Here) -> Proposal | None:
    """The start trial, likewise."""
    return _proposal(plan, here, "start", beyond=False)


def stall_beyond(plan: Plan, here: Here) -> Proposal | None:
    """One more stall trial although all is known as asked: there is time until the deadline, and it is to be spent."""
    return _proposal(plan, here, "stall", beyond=True)


def start_beyond(plan: Plan, here: Here) -> Proposal | None:
    return _proposal(plan, here, "start", beyond=True)


@dataclass(frozen=True, slots=True)
class Kind:
    """What differs between the two kinds of trial.

    most: trials at most; trials: those that were made; spread_percent: of the law before them; unit: what a whole
    trial counts in their sums
    """

    name: str
    stage: StallPlan | StartPlan
    most: int
    trials: Trials
    purpose: Purpose
    approach: Approach
    law: Law
    spread_percent: float
    unit: float


def kind_of(plan: Plan, name: str, tally: Tally) -> Kind | None:
    """None where the sweep makes no such trials. Who chooses them, a ladder or the search, is not asked here."""
    if name == "stall" and plan.stall is not None:
        return Kind(
            name, plan.stall, plan.stall.holds, tally.stall, Purpose.STALL, Approach.FALLING, STALL_LAWS[0],
            STALL_SPREAD_PERCENT, plan.stall.hold_time_s,
        )  # fmt: skip
    if name == "start" and plan.start is not None:
        return Kind(
            name, plan.start, plan.start.trials, tally.start, Purpose.START, Approach.FROM_REST, START_LAWS[0],
            START_SPREAD_PERCENT, 1.0,
        )  # fmt: skip
    return None


def _proposal(plan: Plan, here: Here, name: str, *, beyond: bool) -> Proposal | None:
    kind = kind_of(plan, name, here.tally)
    if kind is None or kind.stage.search != NAME or kind.trials.count >= kind.most:
        return None
    if beyond and (plan.deadline_utc is None or plan.spend != "all"):
        return None
    choice = choice_of(plan, here, kind)
    if choice.reached and not beyond:
        return None
    duty = _allowed(plan, here.tally, kind, choice.duty_percent)
    if duty is None:
        return None
    answered = kind.trials.sums.successes > 0 and kind.trials.sums.failures > 0
    return Proposal(_hold(plan, here, kind, duty, choice), (float(answered), -choice.gain_per_s), spare=answered)


def how_they_ended(plan: Plan, past: Tallies, now: float) -> str:
    """What the adaptive searches ended at, as the rest of a sentence: all as asked, or which of them fell short
    (trials or time used up), with what they reached and what was asked. Empty without such searches."""
    short, searched = [], 0
    for condition in plan.conditions:
        tally = past.conditions.get(condition) or Tally()
        here = Here(condition, tally, past, past.highest_number + 1, now)
        for name in ("stall", "start"):
            kind = kind_of(plan, name, tally)
            if kind is None or kind.stage.search != NAME:
                continue
            searched += 1
            choice = choice_of(plan, here, kind)
            if not choice.reached:
                asked, u = kind.stage.standard_error_percent, max(choice.u.values())
                short.append(f"{name} at {condition.label()} ({u:.2g} % instead of {asked:g} %)")
    if not short:
        return ", and all that was searched for is known as well as asked" if searched else ""
    return f"; known less well than asked: {'; '.join(short)}"


def choice_of(plan: Plan, here: Here, kind: Kind) -> Choice:
    """What the sums of this condition say should be done next, and how well its duties are known."""
    return best(_question(plan, here, kind), _key(here.tally, kind))


def _key(tally: Tally, kind: Kind) -> Key:
    """The sums of the trials; as long as they have not shown both results, with what the coarse pass of the curve hints
    at: at this duty it turned on (or started on the way up), at that it did not."""
    own = key_of(kind.trials.sums)
    if kind.trials.sums.successes and kind.trials.sums.failures:
        return own
    branch = tally.falling if kind.name == "stall" else tally.rising
    whole = kind.unit
    turned = sorted(duty for duty, turning in branch.items() if turning)
    stood = sorted(duty for duty, turning in branch.items() if not turning)
    exposures = tuple((duty, HINT * whole) for duty in turned[:1])
    events = tuple((duty, whole, 1) for duty in stood[-1:])
    return tuple(sorted((*own[0], *exposures))), tuple(sorted((*own[1], *events)))


def _hold(plan: Plan, here: Here, kind: Kind, duty: float, choice: Choice) -> Hold:
    chosen = f" It tells most per second now, and fails with a chance of {100.0 * choice.failing:.0f} %."
    if isinstance(kind.stage, StallPlan):
        return stall_hold(plan, kind.stage, here, duty, choice.part * kind.stage.hold_time_s, chosen)
    return start_hold(plan, kind.stage, here, duty, chosen)


def _allowed(plan: Plan, tally: Tally, kind: Kind, duty: float) -> float | None:
    """The duty, or the next higher one where it was discarded three times; None above the highest allowed."""
    while tally.passed_over(kind.purpose, kind.approach, duty):
        duty = round(duty + kind.stage.step_percent, 9)
        if duty > plan.duty_high_percent:
            return None
    return duty


def _question(plan: Plan, here: Here, kind: Kind) -> Question:
    stage = kind.stage
    named = [PROBABILITY[name][1] for name in plan.sharpen if PROBABILITY[name][0] == kind.name]
    wanted = tuple((probability, stage.standard_error_percent) for probability in named or [TAIL])
    own = kind.trials.sums
    neighbours = () if own.successes and own.failures else _neighbours(plan, here, kind)
    prior = Prior(plan.duty_low_percent, plan.duty_high_percent, kind.spread_percent, neighbours=neighbours)
    low, high, step = plan.duty_low_percent, plan.duty_high_percent, stage.step_percent
    if isinstance(stage, StallPlan):
        before_s = BETWEEN_S + sum(seconds for _, seconds in stall_lead(plan, stage, 0.5 * (low + high)))
        coming_down_s = LEAST_TIME_CONSTANTS * plan.time_constant_s
        parts = tuple(time_s / stage.hold_time_s for time_s in stage.times_s) or (1.0,)
        whole_s = stage.hold_time_s
    else:
        before_s = BETWEEN_S + stage.rest_time_s + COAST_S
        coming_down_s, parts = stage.start_time_s, (1.0,)
        whole_s = stage.start_time_s
    after_s = _cooling_s(plan.heat, before_s, whole_s, kind, here.condition)
    likelihood = SURVIVAL if kind.name == "stall" else BINARY
    return Question(
        kind.law, prior, low, high, step, parts, whole_s, before_s, after_s, coming_down_s, wanted, likelihood,
        kind.unit, end_within=END_WITHIN,
    )  # fmt: skip


def _cooling_s(heat: HeatPlan | None, before_s: float, whole_s: float, kind: Kind, condition: Condition) -> float:
    """Seconds that a failure costs beyond its trial: coasting, and the rest after it if one failed after the other.

    A failure leaves the heat of its exposure, duty times seconds; in a trial the winding loses what it would at rest.
    """
    coast_s = COAST_S if kind.purpose is Purpose.STALL else 0.0
    last = kind.trials.last
    if heat is None or last is None:
        return coast_s
    left_s = last.hold.duty_percent / 100.0 * (condition.supply_v / heat.highest_v) ** 2 * whole_s
    return round(coast_s + max(0.0, heat.cooling_s * left_s / heat.budget_s - before_s - whole_s), 1)


def _neighbours(plan: Plan, here: Here, kind: Kind) -> tuple[Neighbour, ...]:
    """What other conditions showed of the place: only as long as this one has not shown it itself."""
    found = []
    for condition, tally in here.past.conditions.items():
        other = kind_of(plan, kind.name, tally)
        if condition == here.condition or other is None:
            continue
        sums = other.trials.sums
        if sums.successes and sums.failures:
            prior = Prior(plan.duty_low_percent, plan.duty_high_percent, kind.spread_percent)
            found.append(_place(kind.law, key_of(sums), kind.unit, prior))
    return tuple(sorted(found))


@lru_cache(maxsize=256)
def _place(law: Law, key: Key, unit: float, prior: Prior) -> Neighbour:
    """Median and its standard error to 0.1 %: finer would not make a difference to a prior this wide."""
    believed = cells(law, key, unit, prior)
    mean = float(believed.weight @ believed.median)
    u = float(np.sqrt(believed.weight @ (believed.median - mean) ** 2))
    return round(mean, 1), round(u, 1)
