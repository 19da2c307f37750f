"""Whether an outcome read from a logbook can be what a run wrote: finite settings, times of this age, short texts.

Pure. The logbook itself keeps whatever it is given; findings and report are made only of what passes here. The bounds
are far outside of any motor and only keep arithmetic and pictures from what a damaged or forged file may hold.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from sweeprig.errors import RunError, Where
from sweeprig.holds import Outcome

BOUNDS = {
    "number": (0.0, 1e9),
    "session": (0.0, 1e6),
    "pwm_hz": (1e-6, 1e9),
    "supply_v": (-1e6, 1e6),
    "duty_percent": (0.0, 100.0),
    "least_s": (0.0, 1e9),
    "began": (-1e9, 1e9),
    "ended": (-1e9, 1e9),
    "began_utc": (0.0, 9e9),
    "ended_utc": (0.0, 9e9),
    "exposed_s": (0.0, 1e9),
    "event_between_s": (0.0, 1e9),
    "restarts": (0.0, 1e6),
    "means": (-1e15, 1e15),
    "u": (0.0, 1e15),
    "at": (-1e9, 1e9),
}
"""Field → least and largest; an unbounded u (infinite) is honest, and so is a hold without an end."""

MOST_TEXT = 10_000
"""Characters of one text of an outcome."""

MOST_ENTRIES = 1_000
"""Flags, roles, leads or means of one outcome."""


def plausible(outcomes: list[Outcome], where: Where) -> list[Outcome]:
    """The outcomes as they are; RunError for the first value that no run writes. `where`: the logbook, for the text."""
    for outcome in outcomes:
        for name, value in _numbers(outcome):
            low, high = BOUNDS[name]
            if not low <= value <= high and not (name == "u" and value == math.inf):
                allowed = f"{low:g} to {high:g}"
                raise _unlikely(outcome, f"{name} is not what a run writes", f"{value:g}", allowed, where)
        if any(len(text) > MOST_TEXT for text in _texts(outcome)):
            raise _unlikely(outcome, "a text is too long", None, f"up to {MOST_TEXT} characters", where)
        if max(map(len, (outcome.flags, outcome.hold.roles, outcome.hold.lead, outcome.means))) > MOST_ENTRIES:
            raise _unlikely(outcome, "there is too much in it", None, f"up to {MOST_ENTRIES} flags or means", where)
    return outcomes


def _numbers(outcome: Outcome) -> Iterator[tuple[str, float]]:
    hold = outcome.hold
    for name in ("number", "session", "began", "ended", "began_utc", "ended_utc", "exposed_s", "restarts"):
        yield name, getattr(outcome, name)
    yield from (("event_between_s", time) for time in outcome.event_between_s if time is not None)
    yield from (("pwm_hz", hold.condition.pwm_hz), ("supply_v", hold.condition.supply_v))
    yield from (("duty_percent", hold.duty_percent), ("least_s", hold.least_s))
    for duty, seconds in hold.lead:
        yield from (("duty_percent", duty), ("least_s", seconds))
    for mean in outcome.means.values():
        yield from (("u", mean.u), ("at", mean.at))
        if mean.value is not None:
            yield "means", mean.value


def _texts(outcome: Outcome) -> Iterator[str]:
    hold, condition = outcome.hold, outcome.hold.condition
    yield from (outcome.reason, hold.why, condition.direction, condition.load, condition.thermal, condition.freewheel)
    yield from (*outcome.flags, *hold.roles, *outcome.means)
    for mean in outcome.means.values():
        yield from (mean.channel, mean.unit, *mean.flags)


def _unlikely(outcome: Outcome, what: str, value: str | None, allowed: str, where: Where) -> RunError:
    remedy = "The file was damaged or changed by another program; take a copy from before if there is one"
    return RunError(f"hold {outcome.number}: {what}", value=value, allowed=allowed, where=where, remedy=remedy)
