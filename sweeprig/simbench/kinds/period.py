"""The waveform of a fan with electronics, or of a prescribed motor: stretches of steady, fading or sloping values.

Plain values; what flows when is each kind's (`feed` for electronics on a chopped supply). No mechanics.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

from sweeprig.simbench.waveform import Place, Waveform


class Signal(NamedTuple):
    """value(t) = level + fading·e^(−t/tau) + slope·t, t from the stretch's begin."""

    level: float
    fading: float = 0.0
    tau_s: float = 1.0
    slope: float = 0.0

    def at(self, seconds: float) -> float:
        return self.level + self.fading * math.exp(-seconds / self.tau_s) + self.slope * seconds

    def integral(self, seconds: float) -> float:
        """∫ value dt over the first `seconds`."""
        faded = -self.fading * self.tau_s * math.expm1(-seconds / self.tau_s)
        return self.level * seconds + faded + 0.5 * self.slope * seconds * seconds


class Stretch(NamedTuple):
    """A part of the period, as `waveform.Part`: voltage across the motor V, currents of motor and supply A.

    motor_amps    steady within a stretch; supply_volts: at the supply's terminals
    """

    begin_s: float
    seconds: float
    across: Signal
    motor_amps: float
    supply: Signal
    supply_volts: float

    def value(self, place: Place, seconds: float) -> float:
        """Volts or amperes at a place, `seconds` after its begin; the motor hangs between supply plus and the node."""
        if place == "across_motor":
            return self.across.at(seconds)
        if place == "switch_node":
            return self.supply_volts - self.across.at(seconds)
        if place == "supply_terminals":
            return self.supply_volts
        return self.motor_amps if place == "motor_lead" else self.supply.at(seconds)

    def integral(self, place: Place, seconds: float) -> float:
        """Its integral, V·s or A·s, over its first `seconds`."""
        if place == "across_motor":
            return self.across.integral(seconds)
        if place == "switch_node":
            return self.supply_volts * seconds - self.across.integral(seconds)
        if place == "supply_terminals":
            return self.supply_volts * seconds
        return self.motor_amps * seconds if place == "motor_lead" else self.supply.integral(seconds)


@dataclass(frozen=True, slots=True)
class PeriodWave(Waveform):
    """The stretches of one period, those of no length left out."""

    period: float
    stretches: tuple[Stretch, ...]

    @property
    def period_s(self) -> float:
        return self.period

    def segments(self) -> tuple[Stretch, ...]:
        return self.stretches


def period_wave(emf_v: float, parts: Sequence[tuple[float, Signal, float, Signal]], supply_v: float) -> PeriodWave:
    """The waveform of (seconds, voltage across, motor current, supply current), in order from phase 0.

    emf_v      back-EMF, V, for those who ask; it is no part of these values. supply_v: at the supply's terminals
    """
    begin, made = 0.0, []
    for seconds, across, amps, supply in parts:
        if seconds > 0.0:
            made.append(Stretch(begin, seconds, across, amps, supply, supply_v))
            begin += seconds
    volts = sum(one.across.integral(one.seconds) for one in made) / begin
    charge = sum(one.motor_amps * one.seconds for one in made) / begin
    drawn = sum(one.supply.integral(one.seconds) for one in made) / begin
    square = sum(one.motor_amps**2 * one.seconds for one in made) / begin
    ends = [one.motor_amps for one in made]
    return PeriodWave(emf_v, min(ends), max(ends), volts, charge, drawn, square, begin, tuple(made))
