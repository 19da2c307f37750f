"""The map from the tap of a digital potentiometer to duty and PWM frequency, as learned from what was measured.

One definition for `schedule`, which turns duties into taps by it, and `characterise`, which judges by it. Pure numbers;
no choice of holds, no findings.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import interpolate, optimize

from sweeprig.holds import Outcome, Status
from sweeprig.plan import TapPlan
from sweeprig.quantities import Reading

Floats = NDArray[np.float64]

READ_AGAIN_PERCENT = 0.05
"""Two means of one duty differ by no more than this (a scope's scatter, common practice, no source)."""
SURPRISING_PERCENT = 1.0
"""A duty that is off by more than this and three of its u is another one than was expected."""
LEAST_RISE = 0.1
"""Part of the step by the parts that a tap must rise by at least; potentiometers are stated to within half a step."""
PARTS_U_PERCENT = 3.0
"""u of a duty by the parts alone, %: a potentiometer is ± 20 % from end to end, which its fixed resistors are not."""
INSIDE, OUTSIDE = 0.02, 0.05
"""… and of one between or beyond taps that were measured: this part of the duty in between, besides one tap's step."""
PARTS_U_HZ, NEAR_U_HZ, FAR_U_HZ = 0.15, 0.005, 0.001
"""u of the frequency, as a part of it: by the parts alone (potentiometer ± 20 %, capacitor ± 10 %), at a tap that was
measured, and for each percent of duty from there."""


@dataclass(slots=True)
class Seen:
    """What was measured at one tap: sums of duties (%), of their u, and of frequencies (Hz). name: see `TapsSeen`."""

    name: float
    count: int = 0
    duty: float = 0.0
    u: float = 0.0
    counted_hz: int = 0
    hz: float = 0.0


@dataclass(slots=True)
class TapsSeen:
    """What was measured at each tap so far; `duty`, `frequency`: the channels that are looked at."""

    duty: str | None = None
    frequency: str | None = None
    taps: dict[int, Seen] = field(default_factory=dict)

    def add(self, outcome: Outcome) -> float:
        """Count an outcome; returns the duty, %, under which holds at its tap are counted together.

        That is the first duty measured there (expected, where none was): the same for all of them, so that the holds of
        one tap are holds at one setting. A hold without a tap has its own duty.

        A hold that is no data for findings tells of its tap too where the duty was another one than expected: for that
        it may have been discarded. Of the others that went wrong nothing is believed.
        """
        hold = outcome.hold
        if hold.tap is None or (outcome.status is not Status.DONE and not self._surprised(outcome)):
            return round(hold.duty_percent, 6)
        duty, hz = value_of(outcome.means, self.duty), value_of(outcome.means, self.frequency)
        seen = self.taps.get(hold.tap)
        if seen is None:
            first = hold.expected_percent if duty is None else duty.value or 0.0
            seen = self.taps[hold.tap] = Seen(round(first, 6))
        if duty is not None and duty.value is not None:
            seen.count, seen.duty, seen.u = seen.count + 1, seen.duty + duty.value, seen.u + duty.u
        if hz is not None and hz.value is not None:
            seen.counted_hz, seen.hz = seen.counted_hz + 1, seen.hz + hz.value
        return seen.name

    def _surprised(self, outcome: Outcome) -> bool:
        at, duty = outcome.hold.at_tap(outcome.hold.duty_percent), value_of(outcome.means, self.duty)
        if at is None or duty is None or duty.value is None:
            return False
        return abs(duty.value - at.duty_percent) > SURPRISING_PERCENT + 3.0 * at.u_percent


def value_of(means: Mapping[str, Reading], channel: str | None) -> Reading | None:
    """The mean of a channel where it has a value."""
    reading = None if channel is None else means.get(channel)
    return None if reading is None or reading.value is None else reading


@dataclass(frozen=True, slots=True)
class TapMap:
    """duty, u: expected duty of every tap from 0 and its standard uncertainty, %; hz, u_hz: frequency likewise, Hz.

    measured  taps of which the duty was measured; faulty: those of them that break the order of the others
    """

    duty: Floats
    u: Floats
    hz: Floats
    u_hz: Floats
    measured: tuple[int, ...]
    faulty: tuple[int, ...]

    def nearest(self, duty_percent: float, low: float, high: float, avoid: Collection[int] = ()) -> int:
        """The tap whose duty is nearest, of equals the lower; none that is faulty, to be avoided or, as far as there
        are others, outside [low, high] percent."""
        usable = np.ones(self.duty.size, dtype=bool)
        usable[[*self.faulty, *avoid]] = False
        inside = usable & (self.duty >= low - 1e-9) & (self.duty <= high + 1e-9)
        allowed = inside if inside.any() else usable if usable.any() else np.ones(self.duty.size, dtype=bool)
        away = np.where(allowed, np.round(np.abs(self.duty - duty_percent), 9), np.inf)
        return int(np.argmin(away))

    def step_at(self, duty_percent: float) -> float:
        """The step between the two neighbouring taps about a duty (beyond the ends: of the last two), %."""
        above = int(np.clip(np.searchsorted(self.duty, duty_percent), 1, self.duty.size - 1))
        return float(self.duty[above] - self.duty[above - 1])

    def mean_step(self, low: float, high: float) -> tuple[float, float]:
        """(mean step of the taps between two duties, %, its u): of one step alone the readings say too little."""
        first, last = (int(np.abs(self.duty - duty).argmin()) for duty in (low, high))
        if last <= first:
            return self.step_at(low), float(READ_AGAIN_PERCENT * np.sqrt(2.0 / 3.0))
        steps = last - first
        u = float(READ_AGAIN_PERCENT * np.sqrt(2.0 / 3.0)) / steps
        return float(self.duty[last] - self.duty[first]) / steps, u


def by_parts(plan: TapPlan) -> Floats:
    """Duty of each tap by the parts' nominal values, %."""
    return np.linspace(*plan.ends_percent, plan.highest_tap + 1)


def tap_map(plan: TapPlan, seen: Mapping[int, Seen]) -> TapMap:
    """The map that the measured taps let expect: rising (isotonic, then a shape-preserving cubic) between them, with
    their mean slope beyond, by the parts where nothing was measured."""
    parts = by_parts(plan)
    measured = tuple(sorted(tap for tap, one in seen.items() if one.count and 0 <= tap < parts.size))
    duty = {tap: seen[tap].duty / seen[tap].count for tap in measured}
    faulty = out_of_order(parts, duty)
    good = [tap for tap in measured if tap not in faulty]
    expected = np.clip(
        _through(parts, good, [duty[tap] for tap in good], [seen[tap].count for tap in good]), 0.0, 100.0
    )
    u_read = max((seen[tap].u / seen[tap].count for tap in good), default=0.0)
    hz, u_hz = _frequencies(plan, parts, seen)
    return TapMap(expected, _uncertainty(parts, good, u_read), hz, u_hz, measured, faulty)


def out_of_order(parts: Floats, duty: Mapping[int, float]) -> tuple[int, ...]:
    """Taps whose measured duty is no further up than that of a lower tap, as a broken wiper or ladder makes it.

    Of two neighbours in contradiction the one is at fault that lies further off the straight line through all (median
    of the slopes between pairs), until no two contradict each other.
    """
    taps = sorted(duty)
    faulty: list[int] = []
    off: dict[int, float] = {}
    while True:
        lacks = [
            (duty[low] + LEAST_RISE * (parts[high] - parts[low]) - READ_AGAIN_PERCENT - duty[high], low, high)
            for low, high in pairwise(taps)
        ]
        worst = max(lacks, default=(0.0, 0, 0))
        if worst[0] <= 0.0:
            return tuple(sorted(faulty))
        off = off or _off_line(taps, parts, duty)
        guilty = max(worst[1:], key=lambda tap: (off[tap], tap))
        taps.remove(guilty)
        faulty.append(guilty)


def _off_line(taps: Sequence[int], parts: Floats, duty: Mapping[int, float]) -> dict[int, float]:
    """How far each tap is off the line through all of them, %: slope the median over pairs (Theil 1950, Sen 1968)."""
    x, y = parts[list(taps)], np.array([duty[tap] for tap in taps])
    first, second = np.triu_indices(x.size, 1)
    slope = float(np.median((y[second] - y[first]) / (x[second] - x[first])))
    rest = y - slope * x
    return dict(zip(taps, np.abs(rest - np.median(rest)).tolist(), strict=True))


def _through(parts: Floats, taps: Sequence[int], duty: Sequence[float], count: Sequence[int]) -> Floats:
    if not taps:
        return parts
    x = parts[list(taps)]
    rising = np.asarray(optimize.isotonic_regression(np.asarray(duty), weights=np.asarray(count, float)).x)
    if len(taps) == 1:
        return np.asarray(parts + rising[0] - x[0])
    inside = interpolate.PchipInterpolator(x, rising)(np.clip(parts, x[0], x[-1]))
    slope = (rising[-1] - rising[0]) / (x[-1] - x[0])
    beyond = np.minimum(parts - x[0], 0.0) + np.maximum(parts - x[-1], 0.0)
    return np.asarray(inside + slope * beyond)


def _uncertainty(parts: Floats, taps: Sequence[int], u_read: float) -> Floats:
    """Of the expected duty: readings at a measured tap; elsewhere a step (rectangle) and a part of the distance."""
    step = float(parts[1] - parts[0])
    if not taps:
        return np.full(parts.size, np.hypot(PARTS_U_PERCENT, step))
    x = parts[list(taps)]
    away = np.abs(parts[:, None] - x[None, :]).min(axis=1)
    rate = np.where((parts < x[0]) | (parts > x[-1]), OUTSIDE, INSIDE)
    between = np.where(away > 1e-9, np.hypot(step / np.sqrt(3.0), rate * away), 0.0)
    return np.asarray(np.hypot(np.hypot(u_read, READ_AGAIN_PERCENT / np.sqrt(3.0)), between))


def _frequencies(plan: TapPlan, parts: Floats, seen: Mapping[int, Seen]) -> tuple[Floats, Floats]:
    taps = sorted(tap for tap, one in seen.items() if one.counted_hz and 0 <= tap < parts.size)
    if not taps:
        return np.full(parts.size, plan.pwm_hz), np.full(parts.size, PARTS_U_HZ * plan.pwm_hz)
    x = parts[taps]
    hz = np.interp(parts, x, [seen[tap].hz / seen[tap].counted_hz for tap in taps])
    away = np.abs(parts[:, None] - x[None, :]).min(axis=1)
    return hz, hz * (NEAR_U_HZ + FAR_U_HZ * away)
