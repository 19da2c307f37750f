"""`next_hold(plan, outcomes, now)`: the one decision that gives resume, preview, rerun and tests without hardware.

Total: a sensible answer to any history, also one it would not have produced. It never replays or checks old decisions.
Within a session: zero check, run-in; then for each condition the curve falling and rising, stall trials, start trials.
Before a hold in which the rotor may lock, a rest where the winding's heat asks for it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from sweeprig.holds import (
    Approach,
    Condition,
    Decision,
    EndsWhen,
    Finished,
    Hold,
    NeedsPerson,
    Outcome,
    Purpose,
    Status,
    Verdict,
)  # fmt: skip
from sweeprig.plan import CurvePlan, Plan, StallPlan, StartPlan
from sweeprig.schedule.heat import rest_before
from sweeprig.schedule.ladder import next_duty, on_grid
from sweeprig.schedule.tally import STRIKES, Tallies, Tally, tallies

AT_THE_EDGE = 3
"""Trials that go well at the lowest allowed duty (or badly at the highest) before a search says "never"."""

_SENSORS = ("speed", "current", "motor_voltage", "duty", "pwm_frequency")
_TRIAL_SENSORS = ("speed", "current", "motor_voltage", "duty")


def next_hold(plan: Plan, outcomes: Sequence[Outcome], now: float) -> Decision:
    """The next thing to do. `now`: UTC seconds. Holds are numbered one above the highest number in `outcomes`."""
    past = tallies(outcomes, plan.session)
    if plan.deadline_utc is not None and now >= plan.deadline_utc:
        return Finished("the deadline has come")
    number = past.highest_number + 1
    wanted = _wanted(plan, past, number)
    first = plan.conditions[0] if wanted is None else wanted.condition
    if wanted is not None and plan.by_hand and plan.set_by_hand(first) != plan.hands:
        return _hands(plan, first)
    hold = _opening(plan, past, number, first) or wanted
    if plan.heat is not None and isinstance(hold, Hold):
        return rest_before(hold, outcomes, plan.heat, now) or hold
    return hold or Finished("every hold that the sweep asks for is done")


def _wanted(plan: Plan, past: Tallies, number: int) -> Hold | None:
    """The next hold of the first condition that still wants one."""
    for condition in plan.conditions:
        tally = past.conditions.get(condition) or Tally()
        hold = (
            _curve(plan, condition, tally, past, number)
            or _stall(plan, condition, tally, number)
            or _start(plan, condition, tally, number)
        )
        if hold is not None:
            return hold
    return None


def _hands(plan: Plan, condition: Condition) -> NeedsPerson:
    """What nobody but a person can set is set with the drive off, and a session of its own begins: warm-up again."""
    wish = plan.set_by_hand(condition)
    if plan.hands is None:
        return NeedsPerson(f"see that the rig is set to: {wish}", "only a person can set or see this", wish)
    return NeedsPerson(f"change the rig by hand to: {wish}", f"done with: {plan.hands}", wish)


def _offered(plan: Plan, wanted: tuple[str, ...]) -> tuple[str, ...]:
    return tuple(role for role in wanted if role in plan.roles)


def _opening(plan: Plan, past: Tallies, number: int, first: Condition) -> Hold | NeedsPerson | None:
    """The zero check and the run-in that begin every session, also after a resume: the motor has cooled.

    One that failed three times in the session is for a person: nothing that follows would mean anything."""
    roles = _offered(plan, _SENSORS)
    if plan.zero_time_s > 0 and Purpose.ZERO not in past.done_this_session:
        if past.strikes_this_session.get(Purpose.ZERO, 0) >= STRIKES:
            return NeedsPerson(
                "see why the rig does not read zero with the drive off", f"the zero check failed {STRIKES} times"
            )
        why = "Zero check: with the drive off, voltage, current and speed must read zero."
        time_s = plan.zero_time_s
        return Hold(number, Purpose.ZERO, Approach.FROM_REST, first, 0.0, time_s, time_s, EndsWhen.TIME, roles, why)
    if plan.run_in is not None and Purpose.RUN_IN not in past.done_this_session:
        duty, time_s = plan.run_in.duty_percent, plan.run_in.time_s
        if past.strikes_this_session.get(Purpose.RUN_IN, 0) >= STRIKES:
            return NeedsPerson(
                "see why the rotor does not turn: supply, wiring, switch, tachometer",
                f"the run-in at {duty:g} % failed {STRIKES} times",
            )
        why = f"Run-in: {time_s:g} s at {duty:g} % so that friction and winding are warm before anything counts."
        return Hold(number, Purpose.RUN_IN, Approach.FROM_REST, first, duty, time_s, time_s, EndsWhen.TIME, roles, why)
    return None


def _curve(plan: Plan, condition: Condition, tally: Tally, past: Tallies, number: int) -> Hold | None:
    curve = plan.curve
    if curve is None:
        return None
    duty = _next_falling(curve, tally)
    if duty is not None:
        why = f"Speed curve, falling: the settled speed at {duty:.4g} % on the way down."
        lead = () if _flows_on(past.last, condition, plan.session) else _relaunch(plan, duty)
        return _curve_hold(plan, curve, condition, Approach.FALLING, duty, number, why, lead)
    duty = _next_rising(curve, tally)
    if duty is not None:
        why = f"Speed curve, rising: the settled speed at {duty:.4g} % on the way up, or that it stays at rest."
        return _curve_hold(plan, curve, condition, Approach.RISING, duty, number, why, ())
    return None


def _next_falling(curve: CurvePlan, tally: Tally) -> float | None:
    """The next lower duty; none below one where the rotor stopped."""
    for duty in sorted(curve.duties_percent, reverse=True):
        turned = tally.falling.get(round(duty, 6))
        if turned is False:
            return None
        if turned is None and not tally.passed_over(Purpose.CURVE, Approach.FALLING, duty):
            return duty
    return None


def _next_rising(curve: CurvePlan, tally: Tally) -> float | None:
    for duty in sorted(curve.duties_percent):
        if round(duty, 6) not in tally.rising and not tally.passed_over(Purpose.CURVE, Approach.RISING, duty):
            return duty
    return None


def _curve_hold(
    plan: Plan, curve: CurvePlan, condition: Condition, approach: Approach, duty: float, number: int, why: str,
    lead: tuple[tuple[float, float], ...],
) -> Hold:  # fmt: skip
    roles = _offered(plan, _SENSORS)
    return Hold(
        number,
        Purpose.CURVE,
        approach,
        condition,
        duty,
        curve.least_s,
        curve.most_s,
        EndsWhen.SETTLED,
        roles,
        why,
        lead,
    )


def _flows_on(last: Outcome | None, condition: Condition, session: int) -> bool:
    """The rotor still turns from the hold before, at a higher duty: the falling branch goes on without a relaunch."""
    return (
        last is not None
        and last.session == session
        and last.status is Status.DONE
        and last.verdict is Verdict.TURNING
        and last.hold.condition == condition
        and (last.hold.purpose, last.hold.approach) == (Purpose.CURVE, Approach.FALLING)
    )


def _relaunch(plan: Plan, duty: float) -> tuple[tuple[float, float], ...]:
    """Turning well above the target, for at least five time constants, before a falling approach."""
    above = plan.stall.relaunch_above_percent if plan.stall else 10.0
    seconds = plan.stall.relaunch_s if plan.stall else 0.0
    return ((plan.duty_high_percent if duty + above > 50.0 else max(50.0, duty + above),
             max(seconds, 5.0 * plan.time_constant_s)),)  # fmt: skip


def _stall(plan: Plan, condition: Condition, tally: Tally, number: int) -> Hold | None:
    stall = plan.stall
    if stall is None or tally.stall.count >= stall.holds:
        return None
    duty = _stall_duty(plan, stall, tally)
    if duty is None:
        return None
    return _stall_hold(plan, stall, condition, duty, number)


def _stall_duty(plan: Plan, stall: StallPlan, tally: Tally) -> float | None:
    low, high, step = plan.duty_low_percent, plan.duty_high_percent, stall.step_percent
    last = tally.stall.last
    if last is not None:
        duty = next_duty(last.hold.duty_percent, last.verdict is Verdict.TURNING, step, low, high)
    else:
        duty = on_grid(_lowest_that_turned(tally.falling, high), step, low, high)
    return _usable_trial(tally, Purpose.STALL, Approach.FALLING, duty, step, low, high)


def _lowest_that_turned(branch: Mapping[float, bool], otherwise: float) -> float:
    return min((duty for duty, turned in branch.items() if turned), default=otherwise)


def _usable_trial(
    tally: Tally, purpose: Purpose, approach: Approach, duty: float, step: float, low: float, high: float
) -> float | None:
    """Step past settings that were discarded three times; None when the search is stuck at an end of the range."""
    while tally.passed_over(purpose, approach, duty):
        duty = round(duty + step, 9)
        if duty > high:
            return None
    at_edge = duty <= low or duty >= high
    trials = tally.stall if purpose is Purpose.STALL else tally.start
    if at_edge and trials.at.get(round(duty, 6), 0) >= AT_THE_EDGE:
        return None
    return duty


def _stall_hold(plan: Plan, stall: StallPlan, condition: Condition, duty: float, number: int) -> Hold:
    above = min(duty + stall.relaunch_above_percent, plan.duty_high_percent)
    relaunch_s = max(stall.relaunch_s, 5.0 * plan.time_constant_s)
    lead = ((plan.duty_high_percent, min(1.0, relaunch_s)), (above, relaunch_s))
    why = f"Stall trial: does it keep turning for {stall.hold_time_s:g} s at {duty:.4g} %, coming from {above:.4g} %?"
    roles = _offered(plan, _TRIAL_SENSORS)
    time_s = stall.hold_time_s
    return Hold(
        number, Purpose.STALL, Approach.FALLING, condition, duty, 0.0, time_s, EndsWhen.STOPPED, roles, why, lead
    )


def _start(plan: Plan, condition: Condition, tally: Tally, number: int) -> Hold | None:
    start = plan.start
    if start is None or tally.start.count >= start.trials:
        return None
    duty = _start_duty(plan, start, tally)
    if duty is None:
        return None
    why = f"Start trial: does it start from rest at {duty:.4g} % and still turn after {start.start_time_s:g} s?"
    roles = _offered(plan, _TRIAL_SENSORS)
    time_s = start.start_time_s
    return Hold(
        number, Purpose.START, Approach.FROM_REST, condition, duty, time_s, time_s, EndsWhen.TIME, roles, why,
        ((0.0, start.rest_time_s),),
    )  # fmt: skip


def _start_duty(plan: Plan, start: StartPlan, tally: Tally) -> float | None:
    low, high, step = plan.duty_low_percent, plan.duty_high_percent, start.step_percent
    last = tally.start.last
    if last is not None:
        duty = next_duty(last.hold.duty_percent, last.verdict is Verdict.STARTED, step, low, high)
    else:
        coarse = _lowest_that_turned(tally.rising, _lowest_that_turned(tally.falling, high))
        duty = on_grid(coarse, step, low, high)
    return _usable_trial(tally, Purpose.START, Approach.FROM_REST, duty, step, low, high)
