"""The holds of stall and start trials at a duty, whoever chose it."""

from __future__ import annotations

from sweeprig.holds import Approach, EndsWhen, Hold, Purpose
from sweeprig.plan import Plan, StallPlan, StartPlan
from sweeprig.schedule.proposal import TRIAL_SENSORS, Here, offered


def stall_hold(plan: Plan, stall: StallPlan, here: Here, duty: float, time_s: float, chosen: str = "") -> Hold:
    """Turning well above, one step down, exposed for `time_s`. chosen: why this duty, a sentence for people."""
    lead = stall_lead(plan, stall, duty)
    why = (
        f"Stall trial: does it keep turning for {time_s:g} s at {duty:.4g} %, coming from {lead[-1][0]:.4g} %?{chosen}"
    )
    return Hold(
        here.number, Purpose.STALL, Approach.FALLING, here.condition, duty, 0.0, time_s, EndsWhen.STOPPED,
        offered(plan, TRIAL_SENSORS), why, lead,
    )  # fmt: skip


def stall_lead(plan: Plan, stall: StallPlan, duty: float) -> tuple[tuple[float, float], ...]:
    above = min(duty + stall.relaunch_above_percent, plan.duty_high_percent)
    relaunch_s = max(stall.relaunch_s, 5.0 * plan.time_constant_s)
    return (plan.duty_high_percent, min(1.0, relaunch_s)), (above, relaunch_s)


def start_hold(plan: Plan, start: StartPlan, here: Here, duty: float, chosen: str = "") -> Hold:
    """At rest for the rest time, a full step, watched for the start time."""
    time_s = start.start_time_s
    why = f"Start trial: does it start from rest at {duty:.4g} % and still turn after {time_s:g} s?{chosen}"
    return Hold(
        here.number, Purpose.START, Approach.FROM_REST, here.condition, duty, time_s, time_s, EndsWhen.TIME,
        offered(plan, TRIAL_SENSORS), why, ((0.0, start.rest_time_s),),
    )  # fmt: skip
