"""A few long holds where they pin how fast the hazard falls with duty. A source of holds.

At a duty where a hold of minutes stops sometimes, the hazard is known over decades below that of the stall trials; the
bound for a service of hours rests on the line between the two. What is concluded is `characterise`'s.
"""

from __future__ import annotations

from sweeprig.holds import Approach, EndsWhen, Hold, Purpose
from sweeprig.plan import LongRunPlan, Plan, StallPlan
from sweeprig.schedule.keys import contrast, key_of
from sweeprig.schedule.proposal import TRIAL_SENSORS, Here, Proposal, offered
from sweeprig.schedule.quick_fit import duty_that_fails, quick_fit
from sweeprig.schedule.trials import stall_lead

WANTED_FAILURE = 0.4
"""Chance to stop that is aimed at. A hazard is known by its stops: each tells its logarithm to ±1, whatever the duty; a
higher duty has the longer lever, but where hardly any hold stops it only says "rare" (0.2 to 0.5 do nearly as well)."""
STEP_PERCENT = 0.05
"""Duties are asked for on this grid; the drive takes its nearest step, and the outcome says what it was."""


def long_holds(plan: Plan, here: Here) -> Proposal | None:
    """The next long hold; ranked by the part of them that is done. None before any trial stopped: nothing to pin."""
    long, stall, tally = plan.long_run, plan.stall, here.tally
    if long is None or stall is None or not contrast(tally.stall.sums):
        return None
    done = len(tally.kept.get(Purpose.LONG, ()))
    if done >= long.holds:
        return None
    duty = _duty(plan, long, stall, here)
    if duty is None:
        return None
    hold = long_hold(plan, long, stall, here, duty)
    if plan.deadline_utc is not None and here.now + _longest_s(hold) > plan.deadline_utc:
        return None
    return Proposal(hold, (done / long.holds,), spare=done > 0)


def _duty(plan: Plan, long: LongRunPlan, stall: StallPlan, here: Here) -> float | None:
    """Where two in five of the long holds stop, on the grid; past settings that were discarded three times."""
    fitted = quick_fit(key_of(here.tally.stall.sums), stall.hold_time_s)
    low, high, parts = plan.duty_low_percent, plan.duty_high_percent, long.hold_time_s / stall.hold_time_s
    wanted = duty_that_fails(fitted, WANTED_FAILURE, parts, low, high)
    duty = round(min(max(round(wanted / STEP_PERCENT) * STEP_PERCENT, low), high), 9)
    while here.tally.passed_over(Purpose.LONG, Approach.FALLING, duty):
        duty = round(duty + STEP_PERCENT, 9)
        if duty > high:
            return None
    return duty


def long_hold(plan: Plan, long: LongRunPlan, stall: StallPlan, here: Here, duty: float) -> Hold:
    """Turning well above, one step down, exposed for the long hold time."""
    time_s, lead = long.hold_time_s, stall_lead(plan, stall, duty)
    why = (
        f"Long hold: does it turn for {time_s:g} s at {duty:.4g} %? A stop or none tells how fast stops get rare with "
        f"duty, for the bound of {long.service_s / 3600.0:g} h."
    )
    return Hold(
        here.number, Purpose.LONG, Approach.FALLING, here.condition, duty, 0.0, time_s, EndsWhen.STOPPED,
        offered(plan, TRIAL_SENSORS), why, lead,
    )  # fmt: skip


def _longest_s(hold: Hold) -> float:
    return hold.most_s + sum(seconds for _, seconds in hold.lead)
