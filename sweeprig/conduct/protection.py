"""The limits that switch the drive off: small pure policies on readings and on the clock, put together by `Guard`.

Not a safety-rated function. No link and no clock here: readings, what is commanded, and the time are given. What the
drive must answer is `answering`; which policies a rig gets is `policies`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from typing import ClassVar

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.quantities import Reading, show_quantity

NO_READING = "no_reading"
"""The rule of a protected channel that fell silent."""

SURE = 3.0
"""What is known with a standard uncertainty is believed to be off by no more than so many of it."""

NO_LIMIT = math.inf
"""Has to be written out: a policy that is given nothing else has a finite limit and a finite age."""

TELLING = frozenset({"no_data:no_edges", "no_data:overload"})
"""No value, and yet a reading: the rotor rests; more than the range (judged as above). Any other one without a value
says nothing, and the channel's age goes on: an ammeter that answers "no value" all night protects nothing."""


@dataclass(frozen=True, slots=True)
class Trip:
    """Why the drive goes off.

    rule       the policy's name; evidence: what was seen, in words; readings: those that it was seen in
    at         run clock, s: when the reading that tripped was taken, or when the clock's time was due
    ends_run   a person must look before anything moves again; else the hold is discarded and the rig is healed
    """

    rule: str
    evidence: str
    at: float = 0.0
    readings: tuple[Reading, ...] = ()
    ends_run: bool = True

    @property
    def of_answer(self) -> bool:
        """The rig did not answer as commanded, and the hold is discarded for it."""
        return not self.ends_run and self.rule != NO_READING


@dataclass(frozen=True, slots=True)
class Commanded:
    """What drive and supply were told. supply_v: None where no supply is on the bus or it is off; since: run clock, s,
    of the last change; u_…: standard uncertainties of duty and frequency, where the drive does not say itself what it
    gives."""

    on: bool = False
    duty_percent: float = 0.0
    pwm_hz: float = 0.0
    supply_v: float | None = None
    since: float = -math.inf
    u_duty_percent: float = 0.0
    u_pwm_hz: float = 0.0

    @property
    def least_duty_percent(self) -> float:
        return max(self.duty_percent - SURE * self.u_duty_percent, 0.0)


NOTHING = Commanded()


class Policy:
    """One rule. `channel` is what it listens to; `longest_age_s` when silence there becomes a trip (NO_LIMIT: never).

    `judge` is given every reading of the channel and what was commanded meanwhile. `a | b` is both. `listens`: content
    with what is read anyway; else the channel is read because of it.
    """

    __slots__ = ()
    listens: ClassVar[bool] = False
    channel: str
    longest_age_s: float

    def judge(self, reading: Reading, commanded: Commanded) -> Trip | None:
        raise NotImplementedError

    def __or__(self, other: Policy | Policies) -> Policies:
        return Policies((self,)) | other


class Policies(tuple[Policy, ...]):
    """Several rules, all in force."""

    __slots__ = ()

    def __or__(self, other: Policy | Policies) -> Policies:
        return Policies((*self, *(other if isinstance(other, Policies) else (other,))))


@dataclass(slots=True)
class Debounce:
    """Believes what was seen in at least `readings` in a row which span at least `seconds`."""

    readings: int = int(BOUNDS["debounce_readings"])
    seconds: float = 0.0
    seen: list[Reading] = field(default_factory=list)

    def takes(self, reading: Reading, wrong: bool) -> bool:
        """Whether it is believed, with this reading."""
        if not wrong:
            self.seen.clear()
            return False
        self.seen.append(reading)
        if len(self.seen) > max(self.readings, 2):
            del self.seen[1]  # the first tells since when, the latest ones what
        return len(self.seen) >= self.readings and reading.at - self.seen[0].at >= self.seconds


@dataclass(slots=True)
class Above(Policy):
    """Trips after `debounce` readings in a row, over `debounce_s`, above `limit`."""

    rule: str
    channel: str
    limit: float
    longest_age_s: float = BOUNDS["reading_age_s"]
    debounce: int = 1
    debounce_s: float = 0.0
    _seen: Debounce = field(init=False)

    def __post_init__(self) -> None:
        self._seen = Debounce(self.debounce, self.debounce_s)

    def judge(self, reading: Reading, commanded: Commanded) -> Trip | None:
        del commanded
        value = reading.value
        # An overloaded meter says "more than I can show": that is above, not unknown.
        above = "no_data:overload" in reading.flags if value is None else abs(value) > self.limit
        if not self._seen.takes(reading, above):
            return None
        shown = "more than its range" if value is None else show_quantity(value, reading.unit)
        limit, seen = show_quantity(self.limit, reading.unit), tuple(self._seen.seen)
        words = f"{self.channel} read {shown}, limit {limit}, {len(seen)} readings in a row"
        return Trip(self.rule, words, reading.at, seen)


@dataclass(slots=True)
class LockedRotor(Policy):
    """Trips when the drive is on and no rotation was seen for `longest_age_s`. Listens to the age of the last edge."""

    channel: str
    longest_age_s: float
    rule: str = "locked_rotor"

    def judge(self, reading: Reading, commanded: Commanded) -> Trip | None:
        del reading, commanded
        return None


class Guard:
    """All policies of a rig. `take` every reading as it comes; ask `check(now)` at least every 50 ms.

    While the drive is off only what is read is judged; silence and locked rotor count from the moment it went on.
    """

    __slots__ = ("_ages", "_by_channel", "_last", "commanded", "due", "on", "trip")

    def __init__(self, policies: Iterable[Policy]) -> None:
        self._by_channel: dict[str, list[Policy]] = {}
        self._ages: dict[str, float] = {}
        self._last: dict[str, Reading] = {}
        for policy in policies:
            self._by_channel.setdefault(policy.channel, []).append(policy)
        self.on = False
        self.due = math.inf
        """The earliest moment at which the clock alone can trip something: it caps every wait."""
        self.trip: Trip | None = None
        self.commanded = NOTHING

    def channels(self) -> tuple[str, ...]:
        """Those that must be read because of protection; what only listens is judged where it is read anyway."""
        return tuple(name for name, found in self._by_channel.items() if not all(each.listens for each in found))

    def command(self, commanded: Commanded) -> None:
        """What drive and supply are told from now on."""
        self.commanded = commanded

    def drive_on(self, now: float) -> None:
        """The drive was switched on, or is about to be: every age counts from now."""
        if not self.on:
            self.on = True
            self._ages = dict.fromkeys(self._by_channel, now)
            self._set_due()

    def drive_off(self) -> None:
        self.on = False
        self.due = math.inf
        self.commanded = replace(self.commanded, on=False)

    def take(self, readings: Mapping[str, Reading]) -> None:
        """Judge the readings that have a policy; the first trip stays."""
        for channel, reading in readings.items():
            policies = self._by_channel.get(channel)
            if policies is None:
                continue
            self._last[channel] = reading
            rotation_at = reading.at if reading.value is None else reading.at - reading.value
            for policy in policies:
                if isinstance(policy, LockedRotor):
                    if reading.value is not None and rotation_at > self._ages.get(channel, -math.inf):
                        self._ages[channel] = rotation_at
                    continue
                trip = policy.judge(reading, self.commanded)
                if trip is not None and self.trip is None:
                    self.trip = trip
                if reading.value is not None or not TELLING.isdisjoint(reading.flags):
                    self._ages[channel] = reading.at
        if self.on:
            self._set_due()

    def check(self, now: float) -> Trip | None:
        """The trip that stands, or one that the clock has brought."""
        if self.trip is None and self.on and now >= self.due:
            self.trip = self._overdue(now)
        return self.trip

    def _set_due(self) -> None:
        self.due = min(
            (self._ages[channel] + policy.longest_age_s for channel, policies in self._by_channel.items()
             for policy in policies),
            default=math.inf,
        )  # fmt: skip

    def _overdue(self, now: float) -> Trip | None:
        for channel, policies in self._by_channel.items():
            seen = (self._last[channel],) if channel in self._last else ()
            for policy in policies:
                age = now - self._ages[channel]
                if age < policy.longest_age_s:
                    continue
                due = self._ages[channel] + policy.longest_age_s
                if isinstance(policy, LockedRotor):
                    return Trip(policy.rule, f"drive on and no rotation seen for {age:.2f} s", due, seen)
                words = f"{channel} gave no reading for {age:.2f} s, longest {policy.longest_age_s:g} s"
                return Trip(NO_READING, words, due, seen, ends_run=False)
        return None
