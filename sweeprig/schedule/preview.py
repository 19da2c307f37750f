"""The night ahead, from the same decision function fed with predicted outcomes. Pure: nothing is opened or moved.

So many motors are drawn from what is believed of the motor, and each is given its night; what one more night would take
lies between the shortest and the longest of n nights with a chance of (n − 1)/(n + 1), whatever their law.
"""

from __future__ import annotations

import statistics
from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Protocol

from sweeprig.holds import Finished, Hold, NeedsPerson, Purpose
from sweeprig.plan import Plan
from sweeprig.schedule.history import History
from sweeprig.schedule.needs import what_can_be_found
from sweeprig.schedule.next_hold import next_hold
from sweeprig.schedule.predicted import PredictedMotor
from sweeprig.schedule.sharpness import answered, standard_errors

NIGHTS = 19
"""The longest and the shortest of 19 hold a twentieth night between them nine times in ten."""
ROUGH = 3
"""So many are enough for about how long it will take."""
MOST_HOLDS = 100_000


@dataclass(frozen=True, slots=True)
class Band:
    """Median over the predicted nights, and the 90 % band for one more night."""

    median: float
    low: float
    high: float

    @classmethod
    def of(cls, values: Sequence[float]) -> Band:
        return cls(statistics.median(values), min(values), max(values))


@dataclass(frozen=True, slots=True)
class Preview:
    """holds: predicted number by purpose (median); seconds: predicted bench time (median), rest_s of it with the drive
    off so that the winding cools; answered_s: until every condition has an answer, at the latest of
    the nights, None where some night left one without; hours, count: time and holds with
    their 90 % bands; standard_errors: of the findings that a search can sharpen, worst over the conditions, %;
    can / cannot: what this rig gives and lacks, in words; persons: what needs a person; guesses: what the prediction
    assumes; ends: why the night ends; remarks: the plan's, on what is done otherwise than asked."""

    holds: dict[str, int]
    seconds: float
    can: tuple[str, ...]
    cannot: tuple[str, ...]
    persons: tuple[str, ...]
    guesses: tuple[str, ...]
    rest_s: float = 0.0
    answered_s: float | None = None
    hours: Band = Band(0.0, 0.0, 0.0)
    count: Band = Band(0.0, 0.0, 0.0)
    standard_errors: dict[str, Band] = field(default_factory=dict)
    ends: str = ""
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Night:
    """One predicted night. seconds: of it until the last hold ended; answered_s None: not every condition was."""

    holds: Counter[str]
    seconds: float
    rest_s: float
    answered_s: float | None
    errors: dict[str, float]
    persons: tuple[str, ...]
    ends: str


class Spread(Protocol):
    """`map`, or what does as it does."""

    def __call__(self, do: Callable[[int], Night], numbers: Iterable[int], /) -> Iterable[Night]: ...


def preview(plan: Plan, now: float, nights: int = NIGHTS, spread: Spread = map) -> Preview:
    """Run `next_hold` to its end on motors drawn from what is expected of this one. `now`: UTC seconds of the start.

    spread: `map`, or what does as it does over several processes; a night takes a second or two.
    """
    seen = list(spread(partial(one_night, plan, now), range(nights)))
    can, cannot = what_can_be_found(plan)
    middle = sorted(seen, key=lambda night: night.seconds)[nights // 2]
    names = [name for name in seen[0].errors if all(name in night.errors for night in seen)]
    finished = [night.answered_s for night in seen if night.answered_s is not None]
    return Preview(
        holds={name: round(statistics.median(n.holds[name] for n in seen)) for name in middle.holds},
        seconds=middle.seconds,
        can=can,
        cannot=cannot,
        persons=middle.persons,
        guesses=_guesses(plan),
        rest_s=middle.rest_s,
        answered_s=max(finished) if len(finished) == len(seen) else None,
        hours=Band.of([night.seconds / 3600.0 for night in seen]),
        count=Band.of([float(night.holds.total()) for night in seen]),
        standard_errors={name: Band.of([night.errors[name] for night in seen]) for name in names},
        ends=Counter(night.ends for night in seen).most_common(1)[0][0],
        remarks=plan.remarks,
    )


def one_night(plan: Plan, now: float, number: int) -> Night:
    """The night of the motor that is drawn with `number`; the same number draws the same."""
    motor, history, clock = PredictedMotor(plan, number), History(), 0.0
    persons: list[str] = []
    holds: Counter[str] = Counter()
    rest_s, answered_s, ends = 0.0, None, "the prediction was given up"
    reached = _once(lambda: answered(plan, history))
    while len(history) < MOST_HOLDS:
        decision = next_hold(plan, history, now + clock)
        if isinstance(decision, Finished):
            ends = decision.reason
            break
        if isinstance(decision, NeedsPerson):
            persons.append(f"{decision.what} ({decision.why})")
            if decision.hands is None:
                ends = "a person is needed"
                break
            plan = replace(plan, hands=decision.hands, session=plan.session + 1)
            continue
        outcome = motor.outcome(decision, plan.session, clock, now)
        history.append(outcome)
        clock = outcome.ended
        holds[str(decision.purpose)] += 1
        rest_s += outcome.exposed_s if decision.purpose is Purpose.REST else 0.0
        if answered_s is None and _tells(decision) and reached():
            answered_s = clock
    errors = standard_errors(plan, history)
    return Night(holds, clock, rest_s, answered_s, errors, tuple(persons), ends)


def _tells(hold: Hold) -> bool:
    return hold.purpose in (Purpose.CURVE, Purpose.STALL, Purpose.START)


def _once(asked: Callable[[], bool]) -> Callable[[], bool]:
    """`asked`, until it has said yes."""
    said = False

    def ask() -> bool:
        nonlocal said
        said = said or asked()
        return said

    return ask


def _guesses(plan: Plan) -> tuple[str, ...]:
    expected = plan.expected
    about = (
        f"stall near {expected.stall_percent[0]:g} % with a spread of about {expected.stall_spread_percent[0]:g} %, "
        f"start near {expected.start_percent[0]:g} % with {expected.start_spread_percent[0]:g} % ({expected.source})"
    )
    known = sorted({one.source for one in plan.expected_at.values()})
    more = tuple(f"what is known of {len(plan.expected_at)} conditions from {source}" for source in known)
    times = (
        f"about {expected.settle_s[0]:g} s until a curve point is settled, {expected.coast_s[0]:g} s to coast down",
        "no hold discarded",
    )
    return (about, *more, *times)
