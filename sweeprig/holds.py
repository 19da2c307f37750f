"""What is done and what came of it: the values that schedule, conduct, logbook and characterise share.

Plain frozen values; meaning in the manual under `words`. Nothing here acts.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

from sweeprig.quantities import Reading, show_quantity


class Purpose(StrEnum):
    ZERO = "zero"
    REST = "rest"
    RUN_IN = "run_in"
    TAP_MAP = "tap_map"
    CURVE = "curve"
    STALL = "stall"
    START = "start"
    KICK = "kick"
    LONG = "long"
    REFERENCE = "reference"
    COAST = "coast"
    VERIFY = "verify"


class Approach(StrEnum):
    FALLING = "falling"
    RISING = "rising"
    FROM_REST = "from_rest"


class EndsWhen(StrEnum):
    SETTLED = "settled"
    STOPPED = "stopped"
    """The exposure runs for the hold time; it ends early when the rotor stops."""
    TIME = "time"


class Status(StrEnum):
    DONE = "done"
    DISCARDED = "discarded"
    ABANDONED = "abandoned"
    TRIPPED = "tripped"


class Verdict(StrEnum):
    """What the rotor did; never pass or fail."""

    TURNING = "turning"
    STOPPED = "stopped"
    STARTED = "started"
    DID_NOT_START = "did_not_start"
    STEPPING = "stepping"
    UNDECIDED = "undecided"


@dataclass(frozen=True, slots=True, order=True)
class Condition:
    """What is the same for a set of findings. Order: as a person would list them."""

    pwm_hz: float
    supply_v: float
    direction: str = "forward"
    load: str = "free air"
    thermal: str = "warm"
    freewheel: str = "slow_decay"

    def label(self) -> str:
        """Short text for tables: what differs in most sweeps comes first."""
        pwm, supply = show_quantity(self.pwm_hz, "Hz"), show_quantity(self.supply_v, "V")
        return f"{pwm}, {supply}, {self.direction}, {self.load}, {self.thermal}"


@dataclass(frozen=True, slots=True)
class AtTap:
    """What a duty became on a drive whose digital potentiometer is stepped: the nearest tap, and what that should give.

    asked_percent             the duty that was wanted
    duty_percent, u_percent   the duty expected at the tap, and its standard uncertainty, %
    pwm_hz, u_hz              the PWM frequency likewise, Hz
    """

    asked_percent: float
    tap: int
    duty_percent: float
    u_percent: float
    pwm_hz: float
    u_hz: float


@dataclass(frozen=True, slots=True)
class Hold:
    """One setting, held until it is settled and read, or until it ended.

    duty_percent  as it was asked for; on a drive by taps `at_tap` says what is expected of it
    lead       ((duty_percent, seconds), …) performed before the exposure clock starts: the relaunch before a falling
               approach, the kick pulse. A lead of duty 0 is the drive off until no edge came for that long.
    least_s    no decision before this; most_s: the exposure, or the longest wait for `settled`
    roles      what is read during the hold
    why        one sentence, shown to people
    tap, taps  of a drive with a digital potentiometer: the tap of the target; and each duty above 0 of lead and target
    """

    number: int
    purpose: Purpose
    approach: Approach
    condition: Condition
    duty_percent: float
    least_s: float
    most_s: float
    ends_when: EndsWhen
    roles: tuple[str, ...]
    why: str
    lead: tuple[tuple[float, float], ...] = ()
    tap: int | None = None
    taps: tuple[AtTap, ...] = ()

    def at_tap(self, duty_percent: float) -> AtTap | None:
        """What `duty_percent`, of the lead or the target, became; None where the drive is told a duty."""
        return next((one for one in self.taps if one.asked_percent == duty_percent), None)

    @property
    def expected_percent(self) -> float:
        """The duty that the drive should give: as asked for, or what is expected of the tap."""
        at = self.at_tap(self.duty_percent)
        return self.duty_percent if at is None else at.duty_percent

    def same_setting(self, other: Hold) -> bool:
        """The "same hold" of the three-strikes rule: equal purpose, approach, condition and setting."""
        return (self.purpose, self.approach, self.condition, round(self.duty_percent, 6), self.tap) == (
            other.purpose,
            other.approach,
            other.condition,
            round(other.duty_percent, 6),
            other.tap,
        )


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a hold gave.

    began, ended      run clock, s; began_utc, ended_utc likewise in UTC seconds
    exposed_s         time at the target duty, from its application
    event_between_s   a stop or a start seen between these two moments of the exposure (s); the open upper end None
                      means it had not happened by the lower one (censored)
    restarts          times the rotor turned again by itself after a stop
    means             channel → mean over the settled part; u there is the standard uncertainty of that mean with the
                      instrument's accuracy in it
    """

    number: int
    hold: Hold
    session: int
    status: Status
    verdict: Verdict
    began: float
    ended: float
    began_utc: float
    ended_utc: float
    exposed_s: float = 0.0
    event_between_s: tuple[float, float | None] = (0.0, None)
    restarts: int = 0
    means: Mapping[str, Reading] = field(default_factory=dict)
    flags: tuple[str, ...] = ()
    reason: str = ""


@dataclass(frozen=True, slots=True)
class NeedsPerson:
    """what, why: in words; hands: what will be set by hand once it is done, None where the plan does not care."""

    what: str
    why: str
    hands: str | None = None


@dataclass(frozen=True, slots=True)
class Finished:
    reason: str


Decision = Hold | NeedsPerson | Finished
