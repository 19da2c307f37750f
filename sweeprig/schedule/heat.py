"""The heat of a locked rotor, kept over holds and restarts: how much there is, and how long to rest before more. Pure.

Counted in equivalent locked seconds: seconds at rest at full duty and maximum voltage. No decision what to hold next.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from operator import attrgetter

from sweeprig.holds import Approach, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import HeatPlan

MATTERS_FOR = 12.0
"""Heat older than so many cooling time constants is forgotten: exp(−12) = 6e-6 of it is left."""
COLD = 0.01
"""Part of the budget below which the winding counts as cold: where a hold alone would use it all up."""
COAST_SEEN_S = 1.0
"""A rest begins when no edge has come for so long."""

_REST, _DONE = Purpose.REST, Status.DONE  # looking a member up costs more than all else in the walk
_TURNED = (Verdict.TURNING, Verdict.STARTED)
_COLD_PURPOSES = (Purpose.ZERO, Purpose.REST)
_MAY_LOCK = (
    Purpose.START,
    Purpose.STALL,
    Purpose.RUN_IN,
    Purpose.KICK,
    Purpose.LONG,
    Purpose.REFERENCE,
    Purpose.TAP_MAP,
)


def full_exposure(hold: Hold, plan: HeatPlan) -> float:
    """Equivalent locked seconds if the rotor had been at rest in the whole hold, its lead included.

    Σ (duty/100)·(V/V_max)²·seconds. At standstill the heat is i²·R with i ≤ D·V/R; counted linear in D, which is never
    less than its square."""
    percent_s = hold.duty_percent * hold.most_s + sum(duty * seconds for duty, seconds in hold.lead)
    return percent_s / 100.0 * (hold.condition.supply_v / plan.highest_v) ** 2


def worst_case(hold: Hold, plan: HeatPlan) -> float:
    """… where protection is at work: no longer than the locked-rotor time in force, at the hold's highest duty."""
    duty = max((hold.duty_percent, *(duty for duty, _ in hold.lead)))
    most = duty / 100.0 * (hold.condition.supply_v / plan.highest_v) ** 2 * plan.locked_s
    return min(full_exposure(hold, plan), most)


def heat_of(outcome: Outcome, plan: HeatPlan) -> float:
    """Equivalent locked seconds that a hold left, at its end.

    Full exposure for a rotor that stopped, did not start or cannot be told, for a trip, and for an abandoned hold, of
    which nobody knows how long the drive was on. A discarded hold was watched to its end: at most its worst case."""
    hold = outcome.hold
    if hold.purpose in _COLD_PURPOSES:
        return 0.0
    if outcome.status is Status.DISCARDED:
        return worst_case(hold, plan)
    if outcome.status is _DONE and outcome.verdict in _TURNED:
        return 0.0
    return full_exposure(hold, plan)


def heat(outcomes: Sequence[Outcome], plan: HeatPlan, now: float) -> float:
    """Equivalent locked seconds that are left at `now` (UTC s): each hold's own, decayed since it ended, in any order.

    A clock that was set back cools nothing; a rest that was held cools by its own length whatever the clock says. The
    walk goes back only as far as the decay matters."""
    since = now - MATTERS_FOR * plan.cooling_s
    late = [outcome for outcome in outcomes if outcome.ended_utc > since]
    late.sort(key=attrgetter("number"), reverse=True)
    total = rested = 0.0
    for outcome in late:
        if outcome.hold.purpose is _REST and outcome.status is _DONE:
            rested += outcome.exposed_s
            continue
        left = heat_of(outcome, plan)
        if left > 0.0:
            total += left * math.exp(-max(now - _ended(outcome), rested) / plan.cooling_s)
    return total


def _ended(outcome: Outcome) -> float:
    """UTC s. An abandoned hold is concluded at the next start, but was over once all of it would be done."""
    if outcome.status is not Status.ABANDONED:
        return outcome.ended_utc
    hold = outcome.hold
    return min(outcome.ended_utc, outcome.began_utc + hold.most_s + sum(seconds for _, seconds in hold.lead))


def rest_before(hold: Hold, outcomes: Sequence[Outcome], plan: HeatPlan, now: float) -> Hold | None:
    """The rest that `hold` needs first; None where its worst case still fits into the budget. Whole seconds."""
    rising = hold.purpose is Purpose.CURVE and hold.approach is not Approach.FALLING
    if not (rising or hold.purpose in _MAY_LOCK):
        return None
    allowed = max(plan.budget_s - worst_case(hold, plan), COLD * plan.budget_s)
    present = heat(outcomes, plan, now)
    if present <= allowed:
        return None
    seconds = float(math.ceil(plan.cooling_s * math.log(present / allowed)))
    why = (
        f"Rest: the winding may hold the heat of {present:.3g} s locked at full power, and the next hold could add "
        f"{worst_case(hold, plan):.3g} s; {plan.budget_s:g} s are allowed, so it cools for {seconds:g} s."
    )
    return Hold(
        hold.number, Purpose.REST, Approach.FROM_REST, hold.condition, 0.0, seconds, seconds, EndsWhen.TIME,
        hold.roles, why, ((0.0, COAST_SEEN_S),),
    )  # fmt: skip
