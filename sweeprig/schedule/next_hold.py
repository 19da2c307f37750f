"""`next_hold(plan, outcomes, now)`: the one decision that gives resume, preview, rerun and tests without hardware.

Total: a sensible answer to any history, also one it would not have produced. It never replays or checks old decisions.
Each kind of hold has a source of its own in this room; here is their order. A new one is a file and its name below.
Before a hold in which the rotor may lock, a rest where the winding's heat asks for it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from sweeprig.holds import Condition, Decision, Finished, Hold, NeedsPerson, Outcome, Purpose
from sweeprig.plan import Plan
from sweeprig.schedule.adaptive import how_they_ended, stall_beyond, stall_search, start_beyond, start_search
from sweeprig.schedule.budget import fits, kept_for_closing, kept_for_later
from sweeprig.schedule.by_taps import at_taps, map_taps
from sweeprig.schedule.curve_points import coarse_curve
from sweeprig.schedule.curve_refined import refined_curve
from sweeprig.schedule.heat import rest_before
from sweeprig.schedule.history import past_of
from sweeprig.schedule.kick import kicks
from sweeprig.schedule.ladder import stall_ladder, start_ladder
from sweeprig.schedule.long_run import long_holds
from sweeprig.schedule.opening import opening
from sweeprig.schedule.proposal import Here, Proposal, Source
from sweeprig.schedule.reference import last_reference, reference
from sweeprig.schedule.tally import Tallies, Tally

STAGES: tuple[tuple[Source, ...], ...] = (
    (map_taps,),
    (coarse_curve,),
    (stall_ladder, start_ladder),
    (stall_search, start_search),
    (refined_curve,),
    (kicks,),
    (long_holds,),
    (stall_beyond, start_beyond),
    (last_reference,),
)
"""A later stage has its turn at the conditions in hand when no source of an earlier one wants a hold there any more.
Within a stage the lowest rank over all sources and conditions goes first. A reference hold that is due goes before all
of them."""


def next_hold(plan: Plan, outcomes: Sequence[Outcome], now: float) -> Decision:
    """The next thing to do. `now`: UTC seconds. Holds are numbered one above the highest number in `outcomes`."""
    past = past_of(outcomes, plan)
    if plan.deadline_utc is not None and now >= plan.deadline_utc:
        return Finished("the deadline has come")
    wanted, late = _wanted(plan, past, now)
    first = plan.conditions[0] if wanted is None else wanted.condition
    if wanted is not None and plan.by_hand and plan.set_by_hand(first) != plan.hands:
        return _hands(plan, first)
    if wanted is None and late:
        late_for = "no hold that is still asked for would end before the deadline"
        return Finished(f"{late_for}{how_they_ended(plan, past, now)}")
    hold = opening(plan, past, past.highest_number + 1, first) or wanted
    if plan.taps is not None and isinstance(hold, Hold):
        hold = at_taps(plan, past, hold)
    if plan.heat is not None and isinstance(hold, Hold):
        return rest_before(hold, outcomes, plan.heat, now) or hold
    return hold or Finished(f"every hold that the sweep asks for is done{how_they_ended(plan, past, now)}")


def _wanted(plan: Plan, past: Tallies, now: float) -> tuple[Hold | None, bool]:
    """The next hold of the conditions that are set alike by hand, the first such group that still wants one; and
    whether there were others that the deadline leaves no time for."""
    kept_s = 0.0 if plan.deadline_utc is None else kept_for_later(plan, past)
    late, closing_s = False, kept_for_closing(plan)
    for group in _groups(plan):
        places = [Here(one, past.conditions.get(one) or Tally(), past, past.highest_number + 1, now) for one in group]
        for stage in STAGES:
            proposals = [one for here in places for source in stage if (one := source(plan, here)) is not None]
            timely = [one for one in proposals if fits(plan, one.hold, now, _kept(one, kept_s, closing_s))]
            late = late or len(timely) < len(proposals)
            if timely:
                due = [one for here in places if (one := reference(plan, here)) is not None]
                due = [one for one in due if fits(plan, one.hold, now)]
                return min(due or timely, key=lambda one: one.rank).hold, late
    return None, late


def _kept(proposal: Proposal, later_s: float, closing_s: float) -> float:
    """Seconds that must be left after it before the deadline."""
    if proposal.hold.purpose is Purpose.REFERENCE:
        return 0.0
    return closing_s + (later_s if proposal.spare else 0.0)


def _groups(plan: Plan) -> Iterator[tuple[Condition, ...]]:
    """Conditions that need the same done by hand together: all at once where nothing is set by hand."""
    if not plan.by_hand:
        yield plan.conditions
        return
    for wish in dict.fromkeys(plan.set_by_hand(condition) for condition in plan.conditions):
        yield tuple(condition for condition in plan.conditions if plan.set_by_hand(condition) == wish)


def _hands(plan: Plan, condition: Condition) -> NeedsPerson:
    """What nobody but a person can set is set with the drive off, and a session of its own begins: warm-up again."""
    wish = plan.set_by_hand(condition)
    if plan.hands is None:
        return NeedsPerson(f"see that the rig is set to: {wish}", "only a person can set or see this", wish)
    return NeedsPerson(f"change the rig by hand to: {wish}", f"done with: {plan.hands}", wish)
