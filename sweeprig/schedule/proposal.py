"""What a source of holds proposes, and how proposals are compared. A value; who proposes what is in the sources."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from sweeprig.holds import Condition, Hold
from sweeprig.plan import Plan
from sweeprig.schedule.tally import Tallies, Tally


@dataclass(frozen=True, slots=True)
class Proposal:
    """A hold that would be useful now. rank: the lowest goes first; equal ranks: the earlier condition and source.

    A search that is steered by gain ranks by minus its gain per second, a list that is worked off by the part done.
    spare: there is an answer already, so before a deadline it must leave time for what has none yet. Never of a hold
    for which that time is left (`budget.kept_for_later`): it would have to leave it for itself, and then none is made.
    """

    hold: Hold
    rank: tuple[float, ...] = ()
    spare: bool = False


@dataclass(frozen=True, slots=True)
class Here:
    """The place that a source is asked about: a condition, what is known of it and of the whole night, the number that
    the hold would have, and the moment (UTC s)."""

    condition: Condition
    tally: Tally
    past: Tallies
    number: int
    now: float


Source = Callable[[Plan, Here], Proposal | None]
"""What it proposes at that place; None: nothing (more)."""


def offered(plan: Plan, wanted: tuple[str, ...]) -> tuple[str, ...]:
    """Those of the roles that the rig has."""
    return tuple(role for role in wanted if role in plan.roles)


SENSORS = ("speed", "current", "motor_voltage", "duty", "pwm_frequency")
TRIAL_SENSORS = ("speed", "current", "motor_voltage", "duty")
