"""What an oscilloscope makes of a voltage: trigger, finite edges, noise, eight bits; and what it measures on that.

Functions of a voltage's running integral over time. No messages, no motor.
"""

from __future__ import annotations

import random
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Times = npt.NDArray[np.float64]
Integral = Callable[[Times], Times]
LEVELS = 256
BEFORE_TRIGGER = 0.1
"""Part of the screen that lies before the trigger."""
TRIGGER_STEPS = 400
"""Steps in which one period is searched for the trigger."""


@dataclass(frozen=True, slots=True)
class Screen:
    """How it is set: time across the screen s, points, volts from bottom to top, volts at its middle, trigger."""

    seconds: float = 0.01
    points: int = 1000
    full_volts: float = 40.0
    middle_volts: float = 0.0
    trigger_volts: float = 1.0
    rising: bool = True

    @property
    def step_s(self) -> float:
        return self.seconds / self.points

    @property
    def step_volts(self) -> float:
        return self.full_volts / LEVELS


@dataclass(frozen=True, slots=True)
class Capture:
    """One screen. `codes` 0 to 255: volts = middle + (code − 128)·step. `triggered`: False when it ran free."""

    screen: Screen
    codes: bytes
    triggered: bool

    def volts(self) -> list[float]:
        s = self.screen
        return [s.middle_volts + (code - LEVELS // 2) * s.step_volts for code in self.codes]


def capture(
    integral: Integral, period_s: float, screen: Screen, edge_s: float, noise_volts: float, draw: random.Random
) -> Capture:
    """One screen of a voltage that repeats with `period_s`; time 0 is now.

    integral     ∫ voltage dt to times (s), V·s
    edge_s       a jump becomes a ramp of this length: each sample is the mean over it
    noise_volts  standard deviation of a sample
    """

    def volts(at: Times) -> Times:
        return (integral(at) - integral(at - edge_s)) / edge_s

    trigger = find_trigger(volts, period_s, screen)
    begin = (trigger or 0.0) - BEFORE_TRIGGER * screen.seconds
    samples = volts(begin + screen.step_s * np.arange(screen.points, dtype=np.float64))
    if noise_volts > 0.0:
        samples = samples + np.array([draw.gauss(0.0, noise_volts) for _ in range(screen.points)])
    codes = np.floor((samples - screen.middle_volts) / screen.step_volts + LEVELS / 2 + 0.5)
    return Capture(screen, np.clip(codes, 0, LEVELS - 1).astype(np.uint8).tobytes(), trigger is not None)


def find_trigger(volts: Callable[[Times], Times], period_s: float, screen: Screen) -> float | None:
    """The first time within one period at which the voltage passes the trigger level in its direction; None if never.

    Searched in 400 steps, then halved to a millionth of a step."""
    sign = 1.0 if screen.rising else -1.0
    times = np.arange(TRIGGER_STEPS + 1, dtype=np.float64) * (period_s / TRIGGER_STEPS)
    over = sign * (volts(times) - screen.trigger_volts) >= 0.0
    passed = np.flatnonzero(~over[:-1] & over[1:])
    if passed.size == 0:
        return None
    low, high = float(times[passed[0]]), float(times[passed[0] + 1])
    for _ in range(20):
        half = 0.5 * (low + high)
        below = sign * (float(volts(np.array([half]))[0]) - screen.trigger_volts) < 0.0
        low, high = (half, high) if below else (low, half)
    return high


def middle_level(volts: Sequence[float]) -> float:
    """The automatic threshold: half-way between the highest and the lowest sample, whatever lies between."""
    return 0.5 * (max(volts) + min(volts))


def crossings(volts: Sequence[float], step_s: float, level: float, hysteresis: float) -> list[tuple[float, bool]]:
    """(time s, upwards) of each passage of `level` (V), by straight lines between samples.

    A passage counts once the voltage has gone beyond level ± hysteresis / 2 (V): noise at the level makes none.
    """
    found: list[tuple[float, bool]] = []
    above: bool | None = None
    last = 0.0
    for n, value in enumerate(volts):
        if n and (volts[n - 1] < level) is not (value < level):
            last = (n - 1 + (level - volts[n - 1]) / (value - volts[n - 1])) * step_s
        beyond = True if value > level + 0.5 * hysteresis else False if value < level - 0.5 * hysteresis else above
        if above is not None and beyond is not above:
            found.append((last, beyond is True))
        above = beyond
    return found


def frequency_and_duty(passages: Sequence[tuple[float, bool]]) -> tuple[float, float] | None:
    """(Hz, percent of the time above) over the whole periods on the screen; None with less than one."""
    rises = [at for at, up in passages if up]
    if len(rises) < 2:
        return None
    span = rises[-1] - rises[0]
    high = sum(next((fall for fall, up in passages if not up and fall > rise), rises[-1]) - rise for rise in rises[:-1])
    return (len(rises) - 1) / span, 100.0 * high / span
