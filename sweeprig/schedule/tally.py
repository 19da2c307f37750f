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


@dataclass(slots=True)
class Tally:
    """What is known about one condition.

    turned     curve settings → did the rotor turn, by (approach, duty)
    trials     done stall or start trials, by purpose
    last       the latest done trial, by purpose
    at         done trials by setting
    strikes    discarded or abandoned holds by setting
    """

    turned: dict[tuple[Approach, float], bool] = field(default_factory=dict)
    trials: dict[Purpose, int] = field(default_factory=dict)
    last: dict[Purpose, Outcome] = field(default_factory=dict)
    at: dict[Setting, int] = field(default_factory=dict)
    strikes: dict[Setting, int] = field(default_factory=dict)

    def passed_over(self, setting: Setting) -> bool:
        return self.strikes.get(setting, 0) >= STRIKES

    def add(self, outcome: Outcome) -> None:
        hold = outcome.hold
        setting = setting_of(hold)
        if outcome.status is not Status.DONE:
            self.strikes[setting] = self.strikes.get(setting, 0) + 1
            return
        purpose = hold.purpose
        if purpose is Purpose.CURVE:
            self.turned[(hold.approach, setting[2])] = outcome.verdict is Verdict.TURNING
        elif purpose is Purpose.STALL or purpose is Purpose.START:
            self.trials[purpose] = self.trials.get(purpose, 0) + 1
            self.at[setting] = self.at.get(setting, 0) + 1
            latest = self.last.get(purpose)
            if latest is None or outcome.number > latest.number:
                self.last[purpose] = outcome


@dataclass(slots=True)
class Tallies:
    """Everything `next_hold` wants to know about the past.

    this_session   purposes done in the session that asks, with the holds that failed counted by purpose
    """

    conditions: dict[Condition, Tally]
    done_this_session: set[Purpose]
    strikes_this_session: dict[Purpose, int]
    last: Outcome | None
    highest_number: int


def tallies(outcomes: Sequence[Outcome], session: int) -> Tallies:
    """Count `outcomes`, in any order; O(n) with a few dictionary operations each."""
    conditions: dict[Condition, Tally] = {}
    done: set[Purpose] = set()
    strikes: dict[Purpose, int] = {}
    last: Outcome | None = None
    highest = 0
    for outcome in outcomes:
        hold = outcome.hold
        if outcome.number > highest:
            highest, last = outcome.number, outcome
        if hold.purpose is Purpose.ZERO or hold.purpose is Purpose.RUN_IN:
            if outcome.session == session:
                if outcome.status is Status.DONE:
                    done.add(hold.purpose)
                else:
                    strikes[hold.purpose] = strikes.get(hold.purpose, 0) + 1
            continue
        tally = conditions.get(hold.condition)
        if tally is None:
            tally = conditions[hold.condition] = Tally()
        tally.add(outcome)
    return Tallies(conditions, done, strikes, last, highest)
