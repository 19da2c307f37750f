"""The rotor step by step through PWM period and cogging: current, speed and angle together, sticking and slipping.

One stretch of constant setting and friction at a time; when a stretch is worth resolving is `detailed`'s to say.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

from sweeprig.simbench.chopper import Chopper
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.stage import Setting
from sweeprig.simbench.switched import Branch, Phase, SwitchedSetting

COGGING_STEP = 0.2
"""Longest step in radians of the cogging's own phase, moving or swinging at its natural frequency."""
MECHANICAL_STEP = 0.05
"""Longest step in parts of the mechanical time constant J·R/K²."""
PHASE_STEPS, PHASE_STEPS_AT_REST = 2, 6
"""Least number of steps in each part of a PWM period; at rest the moment of breaking away is looked for."""
_BLOCKED = Branch(math.inf, 0.0, 0.0, 0.0, 0.0)


class Moment(NamedTuple):
    """Where things stand `seconds` after the stretch began; sums count from there.

    position   signed shaft angle, rad; pointer follows it with play, travel is the pointer's whole way
    phase      which part of the PWM period, and left_s what is left of it
    """

    seconds: float
    position: float
    pointer: float
    travel: float
    speed: float
    amps: float
    phase: int
    left_s: float
    motor_as: float = 0.0
    supply_as: float = 0.0


class Flowed(NamedTuple):
    """Current at the end, A; charge through the motor and from the supply, A·s."""

    amps: float
    charge: float
    drawn: float


@dataclass(frozen=True, slots=True)
class Shaft:
    """What the rotor is and what holds it, within one stretch; SI units.

    against   speed → (outer load, slope); positive hinders forward rotation
    play_rad  the pointer that drives the tachometer follows this far behind, so that rocking in a detent is no turning
    """

    inertia: float
    torque_constant: float
    running_nm: float
    breakaway_nm: float
    cogging: Cogging | None
    against: Callable[[float], tuple[float, float]]
    play_rad: float


class Chopped:
    """The winding's current as the stage switches it, exact for a constant back-EMF within each part of a period."""

    def __init__(self, setting: Setting, resistance_ohm: float, inductance_henry: float) -> None:
        self._ohms, self._henry = resistance_ohm, inductance_henry
        self.phases = phases_of(setting)

    def at(self, phase_s: float) -> tuple[int, float]:
        """(part of the period, s left of it) at a phase in s."""
        for number, phase in enumerate(self.phases):
            left = phase.seconds - phase_s
            if left > 1e-9 * phase.seconds:
                return number, left
            phase_s -= phase.seconds
        return 0, self.phases[0].seconds

    def longest(self, phase: int) -> float:
        return self.phases[phase].seconds

    def flow(self, amps: float, emf: float, seconds: float, phase: int) -> Flowed:
        """The current from `amps` on, through zero where it gets there."""
        _, forward, reverse = self.phases[phase]
        charge = drawn = 0.0
        while seconds > 0.0:
            if amps > 0.0 or (amps == 0.0 and emf < forward.volts):
                branch = forward
            elif amps < 0.0 or emf > reverse.volts:
                branch = reverse
            else:
                break
            ohms = self._ohms + branch.ohms
            tau, level = self._henry / ohms, (branch.volts - emf) / ohms
            part = seconds
            fallen = -math.expm1(-part / tau)
            end = amps + (level - amps) * fallen
            if end * amps < 0.0:
                part = tau * math.log1p(-amps / level)
                fallen, end = amps / (amps - level), 0.0
            gone = level * part + (amps - level) * tau * fallen
            charge, drawn = charge + gone, drawn + branch.supply * gone
            amps, seconds = end, seconds - part
        return Flowed(amps, charge, drawn)


class Smooth:
    """The mean current that belongs to the back-EMF: for a ripple that does not matter, and without any drive."""

    def __init__(self, setting: Setting) -> None:
        self._setting = setting

    def at(self, phase_s: float) -> tuple[int, float]:
        del phase_s
        return 0, math.inf

    def longest(self, phase: int) -> float:
        del phase
        return math.inf

    def flow(self, amps: float, emf: float, seconds: float, phase: int) -> Flowed:
        del amps, phase
        mean = self._setting.mean_current(emf)[0]
        return Flowed(mean, mean * seconds, self._setting.mean_supply_current(emf) * seconds)

    phases: tuple[Phase, ...] = ()


def phases_of(setting: Setting) -> tuple[Phase, ...]:
    """The parts of a period, of the plain stage and of the switched ones: there are no others."""
    if isinstance(setting, SwitchedSetting):
        return setting.phases
    assert isinstance(setting, Chopper)
    on = Branch(setting.on_volts, 0.0, 0.0, 0.0, 1.0)
    off = Branch(-setting.diode_drop_v, 0.0, 0.0, 0.0, 0.0)
    parts = (Phase(setting.on_s, on, _BLOCKED), Phase(setting.period_s - setting.on_s, off, _BLOCKED))
    return tuple(part for part in parts if part.seconds > 0.0)


class Track:
    """The stretch from a commit on, stepped as far as somebody looks. The steps do not depend on who looks when.

    Error: second order in the step. With the step limits above, the way of a rotor that keeps turning is within
    0.05 % of an adaptive integrator's at 1e-10 after 0.1 s (tested, by a factor of two).
    """

    def __init__(self, shaft: Shaft, current: Chopped | Smooth, begin: Moment, mechanical_s: float) -> None:
        self._shaft, self._current = shaft, current
        self.moments = [begin]
        self._times = [0.0]
        self._longest = MECHANICAL_STEP * mechanical_s
        if shaft.cogging is not None and shaft.cogging.amplitude_nm > 0.0:
            swing = math.sqrt(shaft.cogging.steps_per_revolution * shaft.cogging.amplitude_nm / shaft.inertia)
            self._longest = min(self._longest, COGGING_STEP / swing)

    def at(self, seconds: float) -> Moment:
        """How things stand `seconds` after the begin of the stretch."""
        while self._times[-1] < seconds:
            last = self.moments[-1]
            here = self._step(last, self._natural(last))
            self.moments.append(here)
            self._times.append(here.seconds)
        here = self.moments[bisect_right(self._times, seconds) - 1]
        while here.seconds < seconds:
            further = self._step(here, seconds - here.seconds)
            if further.seconds <= here.seconds:
                break
            here = further
        return here

    def when(self, travel: float, seconds: float) -> float:
        """When within `seconds` the pointer's way was last below `travel`, rad: straight within a step."""
        later = self.at(seconds)
        for here in reversed(self.moments[: bisect_right(self._times, seconds)]):
            if here.travel < travel:
                part = (travel - here.travel) / (later.travel - here.travel)
                return here.seconds + part * (later.seconds - here.seconds)
            later = here
        return later.seconds

    def _natural(self, here: Moment) -> float:
        steps = PHASE_STEPS if here.speed != 0.0 else PHASE_STEPS_AT_REST
        longest = min(self._longest, here.left_s, self._current.longest(here.phase) / steps)
        cogging = self._shaft.cogging
        if cogging is not None and here.speed != 0.0:
            longest = min(longest, COGGING_STEP / (cogging.steps_per_revolution * abs(here.speed)))
        return longest

    def _step(self, here: Moment, h: float) -> Moment:
        """One step of h (s) or less: the stretch's part ends, or the rotor comes to a stand, within it."""
        shaft, k = self._shaft, self._shaft.torque_constant
        if here.speed == 0.0:
            flowed = self._current.flow(here.amps, 0.0, h, here.phase)
            push = k * flowed.charge / h - shaft.against(0.0)[0] - self._cog(here.position)
            if abs(push) <= shaft.breakaway_nm:
                return self._arrived(here, h, 0.0, here.position, flowed)
            way = math.copysign(1.0, push)
        else:
            way = math.copysign(1.0, here.speed)
        speed, position, flowed = self._slide(here, h, way)
        if here.speed == 0.0 and speed * way <= 0.0:  # the running friction holds what the breakaway friction let go
            return self._arrived(here, h, 0.0, here.position, self._current.flow(here.amps, 0.0, h, here.phase))
        if speed * way <= 0.0:
            h *= here.speed / (here.speed - speed)
            _, position, flowed = self._slide(here, h, way)
            speed = 0.0
        return self._arrived(here, h, speed, position, flowed)

    def _slide(self, here: Moment, h: float, way: float) -> tuple[float, float, Flowed]:
        """(speed, position, current) after sliding for h: forces at the middle, found in three rounds."""
        shaft, k, j = self._shaft, self._shaft.torque_constant, self._shaft.inertia
        speed, friction = here.speed, shaft.running_nm * way
        end = speed
        flowed = Flowed(here.amps, 0.0, 0.0)
        for _ in range(3):
            middle = 0.5 * (speed + end)
            flowed = self._current.flow(here.amps, k * middle, h, here.phase)
            held = shaft.against(middle)[0] + self._cog(here.position + 0.25 * h * (speed + middle))
            end = speed + (k * flowed.charge - (held + friction) * h) / j
        return end, here.position + 0.5 * h * (speed + end), flowed

    def _cog(self, angle: float) -> float:
        return 0.0 if self._shaft.cogging is None else self._shaft.cogging.torque(angle)

    def _arrived(self, here: Moment, h: float, speed: float, position: float, flowed: Flowed) -> Moment:
        play, phase, left = self._shaft.play_rad, here.phase, here.left_s - h
        pointer = max(position - play, min(position + play, here.pointer))
        if left <= 1e-9 * h:
            phase = (phase + 1) % len(self._current.phases)
            left = self._current.phases[phase].seconds
        return Moment(
            here.seconds + h, position, pointer, here.travel + abs(pointer - here.pointer), speed, flowed.amps, phase,
            left, here.motor_as + flowed.charge, here.supply_as + flowed.drawn,
        )  # fmt: skip
