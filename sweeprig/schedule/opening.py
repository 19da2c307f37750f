"""The zero check and the run-in that begin every session, also after a resume: the motor has cooled."""

from __future__ import annotations

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, NeedsPerson, Purpose
from sweeprig.plan import Plan
from sweeprig.schedule.proposal import SENSORS, offered
from sweeprig.schedule.tally import STRIKES, Tallies
from sweeprig.steady import warm_up


def opening(plan: Plan, past: Tallies, number: int, first: Condition) -> Hold | NeedsPerson | None:
    """What this session still wants before anything counts; `first`: the condition that comes first.

    One that failed three times in the session is for a person: nothing that follows would mean anything."""
    return _zero(plan, past, number, first) or _run_in(plan, past, number, first)


def _zero(plan: Plan, past: Tallies, number: int, first: Condition) -> Hold | NeedsPerson | None:
    if plan.zero_time_s <= 0 or past.done(plan.session, Purpose.ZERO):
        return None
    if past.strikes(plan.session, Purpose.ZERO) >= STRIKES:
        return NeedsPerson(
            "see why the rig does not read zero with the drive off", f"the zero check failed {STRIKES} times"
        )
    why = "Zero check: with the drive off, voltage, current and speed must read zero."
    time_s, roles = plan.zero_time_s, offered(plan, SENSORS)
    return Hold(number, Purpose.ZERO, Approach.FROM_REST, first, 0.0, time_s, time_s, EndsWhen.TIME, roles, why)


def _run_in(plan: Plan, past: Tallies, number: int, first: Condition) -> Hold | NeedsPerson | None:
    """One piece of the run-in: the only one, or the next until the speed is steady enough."""
    if plan.run_in is None:
        return None
    pieces = past.done(plan.session, Purpose.RUN_IN)
    warm = warm_up(plan.run_in, pieces)
    if warm.done:
        return None
    duty, time_s = plan.run_in.duty_percent, plan.run_in.time_s
    if past.strikes(plan.session, Purpose.RUN_IN) >= STRIKES:
        return NeedsPerson(
            "see why the rotor does not turn: supply, wiring, switch, tachometer",
            f"the run-in at {duty:g} % failed {STRIKES} times",
        )
    why = f"Run-in: {time_s:g} s at {duty:g} % so that friction and winding are warm before anything counts."
    if plan.run_in.drift_percent_per_hour is not None and pieces:
        asked, most_s = plan.run_in.drift_percent_per_hour, plan.run_in.most_s
        why = f"Run-in, on for {time_s:g} s at {duty:g} % ({most_s:g} s at most in all): {warm.words(asked)}."
    roles = offered(plan, SENSORS)
    return Hold(number, Purpose.RUN_IN, Approach.FROM_REST, first, duty, time_s, time_s, EndsWhen.TIME, roles, why)
