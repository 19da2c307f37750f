"""The ladder: which duty to try next, from the last trial alone. For those who must follow a house rule.

One step down while it goes well; after a failure well up again, so that the holds also support the tail above the
threshold. Analysed with the law of the manual's `findings` page, a ladder has no bias; read off naively it has one.
The ladders of all conditions advance in turn, so that drift over the night does not look like an effect of one of them.
"""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.holds import Approach, Purpose, Verdict
from sweeprig.plan import Plan, StallPlan, StartPlan
from sweeprig.schedule.proposal import Here, Proposal
from sweeprig.schedule.tally import Tally, Trials
from sweeprig.schedule.trials import stall_hold, start_hold

NAME = "ladder"
STEPS_UP = 3
"""After a failure the next pass begins so many steps higher."""
AT_THE_EDGE = 3
"""Trials that go well at the lowest allowed duty (or badly at the highest) before a search says "never"."""


def next_duty(last_percent: float, went_well: bool, step_percent: float, low: float, high: float) -> float:
    """The next trial's duty, percent, on the grid of `step_percent` and within [low, high]."""
    target = last_percent - step_percent if went_well else last_percent + STEPS_UP * step_percent
    return on_grid(target, step_percent, low, high)


def on_grid(duty_percent: float, step_percent: float, low: float, high: float) -> float:
    """`duty_percent` moved to the nearest multiple of the step, then into [low, high]; rounded to 1e-9 %."""
    return round(min(max(round(duty_percent / step_percent) * step_percent, low), high), 9)


def stall_ladder(plan: Plan, here: Here) -> Proposal | None:
    """The next stall trial; ranked by the part of the trials that is done."""
    stall = plan.stall
    tally = here.tally
    if stall is None or stall.search != NAME or tally.stall.count >= stall.holds:
        return None
    duty = _stall_duty(plan, stall, tally)
    if duty is None:
        return None
    hold = stall_hold(plan, stall, here, duty, stall.hold_time_s)
    return Proposal(hold, (tally.stall.count / stall.holds,))


def start_ladder(plan: Plan, here: Here) -> Proposal | None:
    """The next start trial, likewise."""
    start = plan.start
    tally = here.tally
    if start is None or start.search != NAME or tally.start.count >= start.trials:
        return None
    duty = _start_duty(plan, start, tally)
    if duty is None:
        return None
    return Proposal(start_hold(plan, start, here, duty), (tally.start.count / start.trials,))


def _stall_duty(plan: Plan, stall: StallPlan, tally: Tally) -> float | None:
    low, high, step = plan.duty_low_percent, plan.duty_high_percent, stall.step_percent
    last = tally.stall.last
    if last is not None:
        duty = next_duty(last.hold.duty_percent, last.verdict is Verdict.TURNING, step, low, high)
    else:
        duty = on_grid(lowest_that_turned(tally.falling, high), step, low, high)
    return _usable(tally, tally.stall, Purpose.STALL, Approach.FALLING, duty, step, low, high)


def _start_duty(plan: Plan, start: StartPlan, tally: Tally) -> float | None:
    low, high, step = plan.duty_low_percent, plan.duty_high_percent, start.step_percent
    last = tally.start.last
    if last is not None:
        duty = next_duty(last.hold.duty_percent, last.verdict is Verdict.STARTED, step, low, high)
    else:
        coarse = lowest_that_turned(tally.rising, lowest_that_turned(tally.falling, high))
        duty = on_grid(coarse, step, low, high)
    return _usable(tally, tally.start, Purpose.START, Approach.FROM_REST, duty, step, low, high)


def lowest_that_turned(branch: Mapping[float, bool], otherwise: float) -> float:
    return min((duty for duty, turned in branch.items() if turned), default=otherwise)


def _usable(
    tally: Tally, trials: Trials, purpose: Purpose, approach: Approach, duty: float, step: float, low: float,
    high: float,
) -> float | None:  # fmt: skip
    """Step past settings that were discarded three times; None when the search is stuck at an end of the range."""
    while tally.passed_over(purpose, approach, duty):
        duty = round(duty + step, 9)
        if duty > high:
            return None
    if (duty <= low or duty >= high) and trials.at.get(round(duty, 6), 0) >= AT_THE_EDGE:
        return None
    return duty
