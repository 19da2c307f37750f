"""The rotor as the tachometer shows it during one hold: speeds, the last edge, a stop and when. Pure."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.quantities import Reading


@dataclass(slots=True)
class Track:
    """Fed with every cycle of a hold. Times are run-clock seconds.

    speeds       (time, rpm) of cycles that gave a speed
    last_edge    time of the latest edge seen; -inf before any
    stopped_at   (last good edge, first missing edge) of the first stop; None while it turns
    restarts     times it turned again by itself after a stop
    """

    speed_channel: str
    age_channel: str
    gap_channel: str
    pulses_per_revolution: float
    began: float
    speeds: list[tuple[float, float]] = field(default_factory=list)
    revolutions: float = 0.0
    last_edge: float = -math.inf
    stopped_at: tuple[float, float] | None = None
    restarts: int = 0
    interval_s: float | None = None
    _upto: float = 0.0

    def __post_init__(self) -> None:
        self._upto = self.began

    def take(self, readings: Mapping[str, Reading]) -> None:
        age = readings[self.age_channel]
        if age.value is None:
            return
        edge, now = age.at - age.value, age.at
        speed = readings[self.speed_channel].value
        gap = readings[self.gap_channel].value if self.gap_channel in readings else None
        if gap is not None and self.turned and self.stopped_at is None and max(gap, age.value) > self.longest_gap_s():
            self._stop(now, gap, age.value)
        elif self.stopped_at is not None and edge > self.last_edge:
            self.restarts += 1
        self.last_edge = max(self.last_edge, edge)
        if speed is not None and speed > 0:
            self.speeds.append((now, speed))
            self.interval_s = 60.0 / (self.pulses_per_revolution * speed)
            self.revolutions += speed / 60.0 * (now - self._upto)
        self._upto = now

    def forget(self, speed_rpm: float) -> None:
        """The latest speed of this value was no data."""
        for place in range(len(self.speeds) - 1, -1, -1):
            if self.speeds[place][1] == speed_rpm:
                del self.speeds[place]
                return

    def _stop(self, now: float, gap: float, age: float) -> None:
        """The first longer gap. When edges came again in the same window, all that is known is the window."""
        if age >= gap:
            good = max(self.last_edge, now - age)
            self.stopped_at = (good, good + (self.interval_s or 0.0))
        else:
            self.stopped_at = (max(self.last_edge, self._upto), now)
            self.restarts += 1

    @property
    def turned(self) -> bool:
        return bool(self.speeds)

    def longest_gap_s(self) -> float:
        """No gap longer than this while turning: max(3 × the expected interval, 0.5 s)."""
        expected = 0.0 if self.interval_s is None else BOUNDS["gap_intervals"] * self.interval_s
        return max(expected, BOUNDS["least_gap_s"])

    def turning(self) -> bool:
        """As of the last reading: what has happened since then is not known yet."""
        return self.stopped_at is None and self._upto - self.last_edge <= self.longest_gap_s()
