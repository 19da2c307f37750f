"""The periodic steady state within one PWM period, whatever stage made it: values and integrals at any phase.

Pure values for the instruments that resolve the period. How a stage comes to its waveform is not known here.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal, NamedTuple, Protocol

Place = Literal["across_motor", "switch_node", "supply_terminals", "motor_lead", "supply_lead", "switch_shunt"]
"""Where a probe or meter sits, as `connected_to` of a rig file names it; voltages to supply minus, V, currents A."""


class Part(Protocol):
    """A stretch of the period in which nothing switches: `begin_s` its phase, `seconds` how long it lasts."""

    @property
    def begin_s(self) -> float: ...
    @property
    def seconds(self) -> float: ...
    def value(self, place: Place, seconds: float) -> float:
        """Volts or amperes at a place, `seconds` after its begin."""
        ...

    def integral(self, place: Place, seconds: float) -> float:
        """Its integral, V·s or A·s, over its first `seconds`."""
        ...


class Segment(NamedTuple):
    """A stretch of the period in which one circuit conducts: current(t) = level + start·e^(−t/tau), t from its begin.

    begin_s, seconds      phase at which it begins, and how long it lasts
    motor_volts, _ohms    voltage across the motor = motor_volts − motor_ohms·current
    node_volts, _ohms     voltage of the switch node likewise
    supply                part of the motor's current that the supply gives: 1, 0 or −1
    supply_volts, _ohms   voltage at the supply's terminals = supply_volts − supply_ohms·supply·current
    """

    begin_s: float
    seconds: float
    level: float
    start: float
    tau_s: float
    motor_volts: float
    motor_ohms: float
    node_volts: float
    node_ohms: float
    supply: float
    supply_volts: float
    supply_ohms: float

    def amps(self, seconds: float) -> float:
        """Motor current, A, `seconds` after its begin."""
        return self.level + self.start * math.exp(-seconds / self.tau_s)

    def charge(self, seconds: float) -> float:
        """∫ motor current dt, A·s, over its first `seconds`."""
        return self.level * seconds - self.start * self.tau_s * math.expm1(-seconds / self.tau_s)

    def square(self, seconds: float) -> float:
        """∫ motor current² dt, A²·s, over its first `seconds`."""
        x, fading = -seconds / self.tau_s, self.start * self.tau_s
        even = self.level * self.level * seconds
        return even - fading * (2.0 * self.level * math.expm1(x) + 0.5 * self.start * math.expm1(2.0 * x))

    def value(self, place: Place, seconds: float) -> float:
        """Volts or amperes at a place, `seconds` after its begin."""
        amps = self.amps(seconds)
        if place == "across_motor":
            return self.motor_volts - self.motor_ohms * amps
        if place == "switch_node":
            return self.node_volts - self.node_ohms * amps
        if place == "supply_terminals":
            return self.supply_volts - self.supply_ohms * self.supply * amps
        return amps if place == "motor_lead" else self.supply * amps

    def integral(self, place: Place, seconds: float) -> float:
        """Its integral, V·s or A·s, over its first `seconds`."""
        charge = self.charge(seconds)
        if place == "across_motor":
            return self.motor_volts * seconds - self.motor_ohms * charge
        if place == "switch_node":
            return self.node_volts * seconds - self.node_ohms * charge
        if place == "supply_terminals":
            return self.supply_volts * seconds - self.supply_ohms * self.supply * charge
        return charge if place == "motor_lead" else self.supply * charge


@dataclass(frozen=True, slots=True)
class Waveform:
    """The periodic steady state at one back-EMF. Phase 0 is the moment the on-time begins; SI units.

    valley_amps, peak_amps   least and greatest motor current of the period
    mean_motor_volts         mean over the period across the motor, with drops, and the back-EMF in a current-free gap
    mean_supply_amps         mean over the period of what the stage takes from the supply (below zero: gives back)
    mean_square_amps         mean of the squared motor current, A²: what heats the winding
    """

    emf_v: float
    valley_amps: float
    peak_amps: float
    mean_motor_volts: float
    mean_motor_amps: float
    mean_supply_amps: float
    mean_square_amps: float

    @property
    def period_s(self) -> float:
        raise NotImplementedError

    def segments(self) -> Sequence[Part]:
        """The stretches of one period in order; those of no length may be among them."""
        raise NotImplementedError

    def value(self, place: Place, phase_s: float) -> float:
        """Volts or amperes at a place, at a phase (s, any; taken modulo the period)."""
        phase = phase_s % self.period_s
        for segment in self.segments():
            if phase < segment.begin_s + segment.seconds:
                break
        return segment.value(place, phase - segment.begin_s)

    def integral(self, place: Place, phase_from_s: float, phase_to_s: float) -> float:
        """∫ of it dt (V·s or A·s) from one phase to a later one (s; they may be many periods apart)."""
        return self._from_zero(place, phase_to_s) - self._from_zero(place, phase_from_s)

    def mean(self, place: Place) -> float:
        """Mean over the period, V or A."""
        if place == "across_motor":
            return self.mean_motor_volts
        if place == "motor_lead":
            return self.mean_motor_amps
        if place in ("supply_lead", "switch_shunt"):
            return self.mean_supply_amps
        return self.integral(place, 0.0, self.period_s) / self.period_s

    def voltage_steps(self, place: Place) -> Iterator[tuple[float, float, float]]:
        """(phase s, value before, value after) of each jump within the period, the one at phase 0 first."""
        parts = [segment for segment in self.segments() if segment.seconds > 0.0]
        for before, here in zip([parts[-1], *parts[:-1]], parts, strict=True):
            yield here.begin_s, before.value(place, before.seconds), here.value(place, 0.0)

    def _from_zero(self, place: Place, phase_s: float) -> float:
        period, segments = self.period_s, self.segments()
        periods = math.floor(phase_s / period)
        phase = phase_s - periods * period
        total = 0.0
        if periods != 0:
            total = periods * sum(segment.integral(place, segment.seconds) for segment in segments)
        for segment in segments:
            if phase <= segment.begin_s:
                break
            total += segment.integral(place, min(phase - segment.begin_s, segment.seconds))
        return total
