"""The speed curve: settled speeds at the sweep's duties, downwards, then upwards again. A source of holds."""

from __future__ import annotations

from sweeprig.holds import Approach, EndsWhen, Hold, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, Plan
from sweeprig.schedule.proposal import SENSORS, Here, Proposal, offered
from sweeprig.schedule.tally import Tally


def coarse_curve(plan: Plan, here: Here) -> Proposal | None:
    """The next of the sweep's duties on the way down, then on the way up. Its holds are also what every search of a
    threshold begins with."""
    curve, tally = plan.curve, here.tally
    if curve is None:
        return None
    duty = _next_falling(curve, tally)
    if duty is not None:
        why = f"Speed curve, falling: the settled speed at {duty:.4g} % on the way down."
        lead = () if flows_on(here, plan.session, duty) else relaunch(plan, duty)
        return Proposal(curve_hold(plan, curve, here, Approach.FALLING, duty, why, lead))
    duty = _next_rising(curve, tally)
    if duty is not None:
        why = f"Speed curve, rising: the settled speed at {duty:.4g} % on the way up, or that it stays at rest."
        return Proposal(curve_hold(plan, curve, here, Approach.RISING, duty, why))
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


def curve_hold(
    plan: Plan, curve: CurvePlan, here: Here, approach: Approach, duty: float, why: str,
    lead: tuple[tuple[float, float], ...] = (),
) -> Hold:  # fmt: skip
    """A hold that ends when the speed has settled, or after the longest wait."""
    return Hold(
        here.number, Purpose.CURVE, approach, here.condition, duty, curve.least_s, curve.most_s, EndsWhen.SETTLED,
        offered(plan, SENSORS), why, lead,
    )  # fmt: skip


def flows_on(here: Here, session: int, duty: float) -> bool:
    """The rotor still turns from the hold before, at a higher duty: the falling branch goes on without a relaunch."""
    last = here.past.last
    return (
        last is not None
        and last.session == session
        and last.status is Status.DONE
        and last.verdict is Verdict.TURNING
        and last.hold.condition == here.condition
        and (last.hold.purpose, last.hold.approach) == (Purpose.CURVE, Approach.FALLING)
        and last.hold.duty_percent > duty
    )


def relaunch(plan: Plan, duty: float) -> tuple[tuple[float, float], ...]:
    """Turning well above the target, for at least five time constants, before a falling approach."""
    above = plan.stall.relaunch_above_percent if plan.stall else 10.0
    seconds = plan.stall.relaunch_s if plan.stall else 0.0
    return ((plan.duty_high_percent if duty + above > 50.0 else max(50.0, duty + above),
             max(seconds, 5.0 * plan.time_constant_s)),)  # fmt: skip
