"""One pass over the outcomes: counts for each setting, and the last trial of each kind. No decisions here."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from sweeprig.holds import Approach, Condition, Hold, Outcome, Purpose, Status, Verdict

STRIKES = 3
"""The same hold discarded or abandoned so often is passed over."""

Setting = tuple[Purpose, Approach, float]


def setting_of(hold: Hold) -> Setting:
    return hold.purpose, hold.approach, round(hold.duty_percent, 6)


# Looking a member up in its class costs more than all else here, and this runs once an outcome at every decision.
_ZERO, _RUN_IN, _CURVE, _STALL, _START = Purpose.ZERO, Purpose.RUN_IN, Purpose.CURVE, Purpose.STALL, Purpose.START
_DONE, _FALLING, _TURNING = Status.DONE, Approach.FALLING, Verdict.TURNING


@dataclass(slots=True)
class Trials:
    """Done stall or start trials: how many, the latest, and how many at each duty (rounded to 1e-6 %)."""

    count: int = 0
    last: Outcome | None = None
    at: dict[float, int] = field(default_factory=dict)

    def add(self, outcome: Outcome, duty: float) -> None:
        self.count += 1
        self.at[duty] = self.at.get(duty, 0) + 1
        if self.last is None or outcome.number > self.last.number:
            self.last = outcome


@dataclass(slots=True)
class Tally:
    """What is known about one condition.

    falling, rising   curve settings → did the rotor turn, by duty (rounded to 1e-6 %)
    strikes           discarded or abandoned holds by setting
    """

    falling: dict[float, bool] = field(default_factory=dict)
    rising: dict[float, bool] = field(default_factory=dict)
    stall: Trials = field(default_factory=Trials)
    start: Trials = field(default_factory=Trials)
    strikes: dict[Setting, int] = field(default_factory=dict)

    def passed_over(self, purpose: Purpose, approach: Approach, duty_percent: float) -> bool:
        return self.strikes.get((purpose, approach, round(duty_percent, 6)), 0) >= STRIKES

    def add(self, outcome: Outcome) -> None:
        hold = outcome.hold
        if outcome.status is not _DONE:
            setting = setting_of(hold)
            self.strikes[setting] = self.strikes.get(setting, 0) + 1
            return
        purpose, duty = hold.purpose, round(hold.duty_percent, 6)
        if purpose is _STALL:
            self.stall.add(outcome, duty)
        elif purpose is _START:
            self.start.add(outcome, duty)
        elif purpose is _CURVE:
            branch = self.falling if hold.approach is _FALLING else self.rising
            branch[duty] = outcome.verdict is _TURNING


@dataclass(slots=True)
class Tallies:
    """Everything `next_hold` wants to know about the past.

    done_this_session      purposes done in the session that asks
    strikes_this_session   zero checks and run-ins that failed in it, by purpose
    """

    conditions: dict[Condition, Tally]
    done_this_session: set[Purpose]
    strikes_this_session: dict[Purpose, int]
    last: Outcome | None
    highest_number: int


def tallies(outcomes: Sequence[Outcome], session: int) -> Tallies:
    """Count `outcomes`, in any order; one short step for each."""
    conditions: dict[Condition, Tally] = {}
    known: dict[int, Tally] = {}  # by identity: most outcomes share their condition object
    done: set[Purpose] = set()
    strikes: dict[Purpose, int] = {}
    last: Outcome | None = None
    highest = 0
    for outcome in outcomes:
        hold = outcome.hold
        if outcome.number > highest:
            highest, last = outcome.number, outcome
        if hold.purpose is _ZERO or hold.purpose is _RUN_IN:
            if outcome.session == session:
                if outcome.status is _DONE:
                    done.add(hold.purpose)
                else:
                    strikes[hold.purpose] = strikes.get(hold.purpose, 0) + 1
            continue
        condition = hold.condition
        tally = known.get(id(condition))
        if tally is None:
            tally = known[id(condition)] = conditions.setdefault(condition, Tally())
        tally.add(outcome)
    return Tallies(conditions, done, strikes, last, highest)
