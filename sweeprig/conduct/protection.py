"""The limits that switch the drive off: small pure policies on readings and on the clock, put together by `Guard`.

Not a safety-rated function. No link and no clock here: readings and the time are given.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

from sweeprig.quantities import Reading, show_quantity

NO_READING = "no_reading"
"""The rule of a protected channel that fell silent."""

TELLING = frozenset({"no_data:no_edges", "no_data:overload"})
"""No value, and yet a reading: the rotor rests; more than the range (judged as above). Any other one without a value
says nothing, and the channel's age goes on: an ammeter that answers "no value" all night protects nothing."""


@dataclass(frozen=True, slots=True)
class Trip:
    """Why the drive goes off: the rule's name and what was seen, in words."""

    rule: str
    evidence: str


class Policy(Protocol):
    """The `channel` it listens to, and when silence there becomes a trip (`longest_age_s`, math.inf for never)."""

    channel: str
    longest_age_s: float

    def judge(self, reading: Reading) -> Trip | None: ...


@dataclass(slots=True)
class Above:
    """Trips after `debounce` readings in a row above `limit`."""

    rule: str
    channel: str
    limit: float
    longest_age_s: float
    debounce: int = 1
    _seen: int = 0

    def judge(self, reading: Reading) -> Trip | None:
        value = reading.value
        # An overloaded meter says "more than I can show": that is above, not unknown.
        above = "no_data:overload" in reading.flags if value is None else abs(value) > self.limit
        self._seen = self._seen + 1 if above else 0
        if self._seen < self.debounce:
            return None
        shown = "more than its range" if value is None else show_quantity(value, reading.unit)
        limit = show_quantity(self.limit, reading.unit)
        return Trip(self.rule, f"{self.channel} read {shown}, limit {limit}, {self._seen} readings in a row")


@dataclass(slots=True)
class LockedRotor:
    """Trips when the drive is on and no rotation was seen for `longest_age_s`. Listens to the age of the last edge."""

    channel: str
    longest_age_s: float
    rule: str = "locked_rotor"

    def judge(self, reading: Reading) -> Trip | None:
        del reading
        return None


class Guard:
    """All policies of a rig. `take` every reading as it comes; ask `check(now)` at least every 50 ms.

    While the drive is off only the limits act; silence and locked rotor count from the moment it went on.
    """

    __slots__ = ("_ages", "_by_channel", "due", "on", "trip")

    def __init__(self, policies: Sequence[Policy]) -> None:
        self._by_channel: dict[str, list[Policy]] = {}
        self._ages: dict[str, float] = {}
        for policy in policies:
            self._by_channel.setdefault(policy.channel, []).append(policy)
        self.on = False
        self.due = math.inf
        """The earliest moment at which the clock alone can trip something: it caps every wait."""
        self.trip: Trip | None = None

    def channels(self) -> tuple[str, ...]:
        return tuple(self._by_channel)

    def drive_on(self, now: float) -> None:
        """The drive was switched on, or is about to be: every age counts from now."""
        if not self.on:
            self.on = True
            self._ages = dict.fromkeys(self._by_channel, now)
            self._set_due()

    def drive_off(self) -> None:
        self.on = False
        self.due = math.inf

    def take(self, readings: Mapping[str, Reading]) -> None:
        """Judge the readings that have a policy; the first trip stays."""
        for channel, reading in readings.items():
            policies = self._by_channel.get(channel)
            if policies is None:
                continue
            rotation_at = reading.at if reading.value is None else reading.at - reading.value
            for policy in policies:
                if isinstance(policy, LockedRotor):
                    if reading.value is not None and rotation_at > self._ages.get(channel, -math.inf):
                        self._ages[channel] = rotation_at
                    continue
                trip = policy.judge(reading)
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
            for policy in policies:
                age = now - self._ages[channel]
                if age < policy.longest_age_s:
                    continue
                if isinstance(policy, LockedRotor):
                    return Trip(policy.rule, f"drive on and no rotation seen for {age:.2f} s")
                return Trip(
                    NO_READING, f"{channel} gave no reading for {age:.2f} s, longest {policy.longest_age_s:g} s"
                )
        return None
