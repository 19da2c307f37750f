"""What is known of the past, counted by condition and setting; each outcome is added once. No decisions here."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from operator import attrgetter

from sweeprig.exposures import LEAST_TIME_CONSTANTS, exposure, turned_before
from sweeprig.holds import Approach, Condition, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.taps import TapsSeen

STRIKES = 3
"""The same hold discarded or abandoned so often is passed over."""

Setting = tuple[Purpose, Approach, float]


def setting_of(hold: Hold) -> Setting:
    return hold.purpose, hold.approach, round(hold.duty_percent, 6)


# Looking a member up in its class costs more than all else here, and a plain list is counted at every decision.
_ZERO, _RUN_IN, _CURVE, _STALL, _START = Purpose.ZERO, Purpose.RUN_IN, Purpose.CURVE, Purpose.STALL, Purpose.START
_DONE, _FALLING, _TURNING, _STOPPED = Status.DONE, Approach.FALLING, Verdict.TURNING, Verdict.STOPPED
_STARTED, _DID_NOT_START = Verdict.STARTED, Verdict.DID_NOT_START
_KEPT = (Purpose.KICK, Purpose.LONG, Purpose.REFERENCE, Purpose.TAP_MAP)
_EXPOSED = (Purpose.STALL, Purpose.LONG)


@dataclass(frozen=True, slots=True)
class Reads:
    """What the plan says that counting needs: the motor's longest time constant (s), and the channel of the speed; of
    a drive by taps also those of the duty and the PWM frequency."""

    time_constant_s: float
    speed: str | None
    duty: str | None = None
    frequency: str | None = None


@dataclass(slots=True)
class Sums:
    """The sufficient sums of trials of one law.

    exposure   seconds survived for certain at each duty (rounded to 1e-6 %); in a start trial 1 for each success
    events     failures at (duty, width in s of the interval in which it happened, three digits; a start trial: 1)
    """

    exposure: dict[float, float] = field(default_factory=dict)
    events: dict[tuple[float, float], int] = field(default_factory=dict)
    successes: int = 0
    failures: int = 0

    def add(self, duty: float, survived: float, width: float | None) -> None:
        self.exposure[duty] = self.exposure.get(duty, 0.0) + survived
        if width is None:
            self.successes += 1
            return
        self.failures += 1
        event = duty, float(f"{width:.3g}")
        self.events[event] = self.events.get(event, 0) + 1


@dataclass(slots=True)
class Trials:
    """Done stall or start trials: how many, the latest, how many at each duty (rounded to 1e-6 %), and their sums, to
    which other exposures of the same kind are added (falling curve, long run)."""

    count: int = 0
    last: Outcome | None = None
    at: dict[float, int] = field(default_factory=dict)
    sums: Sums = field(default_factory=Sums)

    def add(self, outcome: Outcome, duty: float) -> None:
        self.count += 1
        self.at[duty] = self.at.get(duty, 0) + 1
        if self.last is None or outcome.number > self.last.number:
            self.last = outcome


@dataclass(slots=True)
class Tally:
    """What is known about one condition.

    falling, rising   curve settings → did the rotor turn, by duty (rounded to 1e-6 %)
    speeds            settled speeds of curve holds of the falling branch, rpm, by duty
    curve_holds       how many such holds there were
    strikes           discarded or abandoned holds by setting
    kept              done holds of the purposes of which there are few, as they are
    last_number       of the last done hold
    """

    falling: dict[float, bool] = field(default_factory=dict)
    rising: dict[float, bool] = field(default_factory=dict)
    speeds: dict[float, list[float]] = field(default_factory=dict)
    curve_holds: int = 0
    stall: Trials = field(default_factory=Trials)
    start: Trials = field(default_factory=Trials)
    strikes: dict[Setting, int] = field(default_factory=dict)
    kept: dict[Purpose, list[Outcome]] = field(default_factory=dict)
    last_number: int = 0

    def passed_over(self, purpose: Purpose, approach: Approach, duty_percent: float) -> bool:
        return self.strikes.get((purpose, approach, round(duty_percent, 6)), 0) >= STRIKES

    def add(self, outcome: Outcome, previous: Outcome | None, reads: Reads, given: float) -> None:
        """given: the duty that the drive gave, under which it is summed; lists of duties are by what was asked."""
        hold = outcome.hold
        if outcome.status is not _DONE:
            setting = setting_of(hold)
            self.strikes[setting] = self.strikes.get(setting, 0) + 1
            return
        purpose, duty = hold.purpose, round(hold.duty_percent, 6)
        self.last_number = outcome.number
        if purpose is _STALL:
            self.stall.add(outcome, duty)
        elif purpose is _START:
            self.start.add(outcome, duty)
            self._started(outcome, given)
        elif purpose is _CURVE:
            self._curve(outcome, duty, reads.speed, given)
        elif purpose in _KEPT:
            self.kept.setdefault(purpose, []).append(outcome)
        if hold.approach is _FALLING:
            self._exposed(outcome, given, previous, reads.time_constant_s)

    def _curve(self, outcome: Outcome, duty: float, channel: str | None, given: float) -> None:
        turning = outcome.verdict is _TURNING
        if outcome.hold.approach is not _FALLING:
            self.rising[duty] = turning
            return
        self.curve_holds += 1
        self.falling[duty] = turning and self.falling.get(duty, True)
        reading = outcome.means.get(channel) if turning and channel is not None else None
        if reading is not None and reading.value is not None:
            self.speeds.setdefault(given, []).append(reading.value)

    def _exposed(self, outcome: Outcome, duty: float, previous: Outcome | None, time_constant_s: float) -> None:
        purpose, verdict = outcome.hold.purpose, outcome.verdict
        if verdict is not _TURNING and verdict is not _STOPPED:
            return
        if purpose is _CURVE:
            long_enough = outcome.hold.least_s >= LEAST_TIME_CONSTANTS * time_constant_s
            if not (long_enough and turned_before(outcome, previous)):
                return
        elif purpose not in _EXPOSED:
            return
        survived, width = exposure(outcome, time_constant_s)
        self.stall.sums.add(duty, survived, width)

    def _started(self, outcome: Outcome, duty: float) -> None:
        if outcome.verdict is _STARTED:
            self.start.sums.add(duty, 1.0, None)
        elif outcome.verdict is _DID_NOT_START:
            self.start.sums.add(duty, 0.0, 1.0)


@dataclass(slots=True)
class Tallies:
    """Everything `next_hold` wants to know about the past. Outcomes are added in the order of their numbers.

    taps, tap_strikes   of a drive by taps: what was measured at each, and holds discarded or abandoned at it
    """

    reads: Reads
    conditions: dict[Condition, Tally] = field(default_factory=dict)
    last: Outcome | None = None
    highest_number: int = 0
    taps: TapsSeen = field(default_factory=TapsSeen)
    tap_strikes: dict[tuple[Purpose, int], int] = field(default_factory=dict)
    _done: dict[tuple[int, Purpose], list[Outcome]] = field(default_factory=dict)
    _strikes: dict[tuple[int, Purpose], int] = field(default_factory=dict)

    def done(self, session: int, purpose: Purpose) -> list[Outcome]:
        """Zero checks or run-ins done in a session."""
        return self._done.get((session, purpose), [])

    def strikes(self, session: int, purpose: Purpose) -> int:
        """Zero checks or run-ins that failed in it."""
        return self._strikes.get((session, purpose), 0)

    def add(self, outcome: Outcome) -> None:
        hold, previous = outcome.hold, self.last
        self.highest_number, self.last = outcome.number, outcome
        given = round(hold.duty_percent, 6) if hold.tap is None else self._tap(outcome, hold.tap)
        if hold.purpose is _ZERO or hold.purpose is _RUN_IN:
            key = outcome.session, hold.purpose
            if outcome.status is _DONE:
                self._done.setdefault(key, []).append(outcome)
            else:
                self._strikes[key] = self._strikes.get(key, 0) + 1
            return
        tally = self.conditions.get(hold.condition)
        if tally is None:
            tally = self.conditions[hold.condition] = Tally()
        tally.add(outcome, previous, self.reads, given)

    def _tap(self, outcome: Outcome, tap: int) -> float:
        """The duty under which a hold at a tap is summed."""
        if outcome.status is not _DONE:
            key = outcome.hold.purpose, tap
            self.tap_strikes[key] = self.tap_strikes.get(key, 0) + 1
        return self.taps.add(outcome)


def tallies(outcomes: Sequence[Outcome], reads: Reads) -> Tallies:
    """Count `outcomes`, in any order."""
    past = Tallies(reads, taps=TapsSeen(reads.duty, reads.frequency))
    for outcome in sorted(outcomes, key=attrgetter("number")):
        past.add(outcome)
    return past
