"""Reference holds: one duty again and again through the night, at each condition in turn, so that drift shows.

Two sources: `reference`, which goes before anything else when one is due, and `last_reference`, when nothing else is
left, so that every speed lies between two references.
"""

from __future__ import annotations

from dataclasses import replace

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose
from sweeprig.plan import Plan, ReferencePlan
from sweeprig.schedule.curve_points import coarse_curve, relaunch
from sweeprig.schedule.proposal import SENSORS, Here, Proposal, offered
from sweeprig.schedule.tally import STRIKES, Tally
from sweeprig.steady import warm_up


def reference(plan: Plan, here: Here) -> Proposal | None:
    """The first of a session at this condition, right after the run-in, and one whenever `every` has passed since and
    there is something new to bracket. Asked only where another source wants a hold.

    A pass of the speed curve is not broken into: its way up must come from below.
    """
    wanted = plan.reference
    if wanted is None or _given_up(wanted, here) or _within_a_pass(plan, here):
        return None
    last = _last(here)
    if last is None or last.session != plan.session:
        return Proposal(_hold(plan, wanted, here, "the first of this session" + _after_run_in(plan, here)))
    passed = here.now - last.ended_utc
    if passed < wanted.every_s or not _used_since(here, last):
        return None
    return Proposal(_hold(plan, wanted, here, f"{passed / 60.0:.3g} min after the last one here"))


def last_reference(plan: Plan, here: Here) -> Proposal | None:
    """One more where a hold was done at this condition since the last one, when no other source wants anything."""
    wanted, last = plan.reference, _last(here)
    if wanted is None or last is None or _given_up(wanted, here) or not _used_since(here, last):
        return None
    return Proposal(_hold(plan, wanted, here, "the last one, so that all holds here lie between two"))


def _hold(plan: Plan, wanted: ReferencePlan, here: Here, when: str) -> Hold:
    """Always reached in the same way, from above, so that nothing but time differs between two."""
    duty, time_s = wanted.duty_percent, wanted.time_s
    why = f"Reference: the speed at {duty:.4g} % after {time_s:g} s, which shows drift; {when}."
    return Hold(
        here.number, Purpose.REFERENCE, Approach.FALLING, here.condition, duty, time_s, time_s, EndsWhen.TIME,
        offered(plan, SENSORS), why, relaunch(plan, duty),
    )  # fmt: skip


def _last(here: Here) -> Outcome | None:
    done = here.tally.kept.get(Purpose.REFERENCE)
    return max(done, key=lambda one: one.number) if done else None


def _given_up(wanted: ReferencePlan, here: Here) -> bool:
    """Three strikes, as for every hold; each one that was done takes one strike back, since a night has many."""
    setting = Purpose.REFERENCE, Approach.FALLING, round(wanted.duty_percent, 6)
    return here.tally.strikes.get(setting, 0) >= STRIKES + len(here.tally.kept.get(Purpose.REFERENCE, ()))


def _used_since(here: Here, last: Outcome) -> bool:
    return here.tally.last_number > last.number


def _within_a_pass(plan: Plan, here: Here) -> bool:
    """The last hold was one of a condition's first pass of the curve, and there is more of it to come."""
    last = here.past.last
    if last is None or last.session != plan.session or last.hold.purpose not in (Purpose.CURVE, Purpose.REST):
        return False
    other = last.hold.condition
    tally = here.past.conditions.get(other) or Tally()
    begun = bool(tally.falling or tally.rising)
    return begun and coarse_curve(plan, _at(here, other, tally)) is not None


def _at(here: Here, condition: Condition, tally: Tally) -> Here:
    return replace(here, condition=condition, tally=tally)


def _after_run_in(plan: Plan, here: Here) -> str:
    """How the run-in ended, where it was to go on until the speed is steady."""
    run_in, pieces = plan.run_in, here.past.done(plan.session, Purpose.RUN_IN)
    if run_in is None or run_in.drift_percent_per_hour is None or not pieces:
        return ""
    return f"; the run-in has ended: {warm_up(run_in, pieces).words(run_in.drift_percent_per_hour)}"
