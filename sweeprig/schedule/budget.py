"""What a hold costs in time, and what must be left for others before the deadline. Pure numbers, no choice of holds."""

from __future__ import annotations

import math

from sweeprig.holds import Hold, Purpose
from sweeprig.plan import Plan
from sweeprig.schedule.tally import Tallies, Tally

COAST_S = 3.0
"""Guessed time for the rotor to come to rest before a rest time counts."""
BETWEEN_S = 0.5
"""Guessed time between two holds: settings asked, drive switched."""
LEAST_KICKS = 10
"""Trials at one kick duty that leave an answer: the bound is wide, but it is one."""


def longest_s(hold: Hold) -> float:
    """The longest that a hold takes from its beginning to its end, lead included, as far as that can be told before."""
    return BETWEEN_S + hold.most_s + sum(seconds + (COAST_S if duty == 0.0 else 0.0) for duty, seconds in hold.lead)


def fits(plan: Plan, hold: Hold, now: float, kept_s: float = 0.0) -> bool:
    """Whether the hold ends before the deadline with `kept_s` left for what must still come. Always without one."""
    return plan.deadline_utc is None or now + longest_s(hold) + kept_s <= plan.deadline_utc


def kept_for_closing(plan: Plan) -> float:
    """Seconds that everything leaves for the last reference hold at each condition."""
    if plan.reference is None or plan.deadline_utc is None:
        return 0.0
    relaunch_s = max(0.0 if plan.stall is None else plan.stall.relaunch_s, 5.0 * plan.time_constant_s)
    return len(plan.conditions) * (plan.reference.time_s + relaunch_s + BETWEEN_S)


def kept_for_later(plan: Plan, past: Tallies) -> float:
    """Seconds that the searches of stall and start leave for kicks and long holds: what each condition needs so that
    it has an answer of these too, as far as that is not there yet, and for the references that come due meanwhile."""
    seconds = sum(_kept(plan, past.conditions.get(one) or Tally()) for one in plan.conditions)
    rounds = 0 if plan.reference is None else math.ceil(seconds / plan.reference.every_s)
    return seconds + rounds * kept_for_closing(plan)


def _kept(plan: Plan, tally: Tally) -> float:
    seconds, kick, long = 0.0, plan.kick, plan.long_run
    if kick is not None:
        missing = max(0, LEAST_KICKS * len(kick.duties_percent) - len(tally.kept.get(Purpose.KICK, ())))
        seconds += missing * (kick.rest_time_s + COAST_S + kick.longest_s + kick.hold_time_s + BETWEEN_S)
    if long is not None and not tally.kept.get(Purpose.LONG):
        seconds += long.hold_time_s + BETWEEN_S + (0.0 if plan.stall is None else plan.stall.relaunch_s)
    return seconds
