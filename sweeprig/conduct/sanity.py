"""Can these readings be true? Frozen, out of all proportion, jumping, reversed, contradicting each other. Pure.

A doubt is told, nothing is done about it here: the hold is discarded and the rig healed by whoever asked. What must
switch the drive off is `protection`; whether a stop of the rotor is believed is `rotation`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.protection import NOTHING, Commanded
from sweeprig.quantities import Reading, show_quantity

JUMPED = "no_data:jump"
"""The flag of a reading that cannot be, or that its neighbours rule out."""
NEIGHBOURS = 3
"""A reading with the one before and the one after it."""


@dataclass(frozen=True, slots=True)
class Doubt:
    """cause: a name; evidence: what was seen, in words."""

    cause: str
    evidence: str

    def __str__(self) -> str:
        return f"{self.cause}: {self.evidence}"


@dataclass(frozen=True, slots=True)
class MotorFacts:
    """What the motor file says that bounds what can be read. A motor's own electronics make the rules of a brushed
    motor void (`brushed` False)."""

    brushed: bool
    nominal_v: float
    maximum_rpm: float
    time_constant_s: float


@dataclass(frozen=True, slots=True)
class Looked:
    """How the rig looks at the motor: channel names (None: not read), and what a voltage there means.

    switched   a power switch chops the supply, and the meter sits across the motor
    one_way    the stage can drive one way only: a negative voltage is no setting
    brushed_on_diode   a brushed motor with a freewheel diode: voltage and current tell whether it turns
    """

    speed: str
    age: str
    voltage: str | None
    current: str | None
    duty: str | None
    supply: str | None
    switched: bool
    one_way: bool
    brushed_on_diode: bool
    current_limit: float


@dataclass(slots=True)
class _Frozen:
    """A channel's text as long as it stays the same: how often, and over which commanded duties."""

    raw: str = ""
    count: int = 0
    lowest: float = math.inf
    highest: float = -math.inf

    def take(self, raw: str, duty: float) -> bool:
        """Whether it has stayed for too long, over too much of the duty range."""
        if raw != self.raw:
            self.raw, self.count, self.lowest, self.highest = raw, 0, math.inf, -math.inf
        self.count += 1
        self.lowest, self.highest = min(self.lowest, duty), max(self.highest, duty)
        return self.count >= BOUNDS["frozen_readings"] and self.highest - self.lowest >= BOUNDS["frozen_duty_percent"]


@dataclass(slots=True)
class Sanity:
    """Fed with every cycle of readings while a session lasts.

    jumped   readings that are not data: of this cycle what cannot be, of the one before what its neighbours rule out
    """

    looked: Looked
    motor: MotorFacts
    jumped: list[Reading] = field(default_factory=list)
    _to: Commanded = NOTHING
    _past: list[Mapping[str, Reading]] = field(default_factory=list)
    _frozen: dict[str, _Frozen] = field(default_factory=dict)
    _in_a_row: dict[str, int] = field(default_factory=dict)

    def take(self, readings: Mapping[str, Reading], commanded: Commanded) -> Doubt | None:
        """The first doubt about the readings of one cycle, given what was commanded while they were taken."""
        self.jumped = []
        if commanded is not self._to:
            self._to = commanded
            self._past.clear()
            self._in_a_row.clear()
        if not commanded.on:
            return None
        self._past.append(readings)
        self._find_jumps(commanded)
        doubt = self._impossible(readings, commanded) or self._stands_still(readings, commanded)
        del self._past[: 1 - NEIGHBOURS]
        return doubt

    # -- frozen --------------------------------------------------------------------------------------------------

    def _stands_still(self, readings: Mapping[str, Reading], commanded: Commanded) -> Doubt | None:
        """The same text over and over although the duty changed, while the rotor turns."""
        looked = self.looked
        answering = [looked.duty]
        if looked.switched:
            answering += [looked.voltage, looked.current]
        if self.motor.brushed:
            answering.append(looked.speed)
        if not self._turning(readings):
            return None
        for channel in answering:
            reading = readings.get(channel or "")
            if reading is None or reading.value is None or not reading.raw:
                continue
            frozen = self._frozen.setdefault(reading.channel, _Frozen())
            if frozen.take(reading.raw, commanded.duty_percent):
                return Doubt(
                    "frozen",
                    f"{reading.channel} says the same {show_quantity(reading.value, reading.unit)} in {frozen.count} "
                    f"readings, at duties from {frozen.lowest:.4g} % to {frozen.highest:.4g} %",
                )
        return None

    def _turning(self, readings: Mapping[str, Reading]) -> bool:
        speed = readings.get(self.looked.speed)
        return speed is not None and speed.value is not None

    # -- out of all proportion -----------------------------------------------------------------------------------

    def _impossible(self, readings: Mapping[str, Reading], commanded: Commanded) -> Doubt | None:
        """An impossible reading is no data; one alone may be a glitch, the next one in a row is a doubt."""
        looked = self.looked
        rules = ((looked.voltage, self._voltage), (looked.speed, self._speed), (looked.current, self._amps))
        for channel, rule in rules:
            reading = readings.get(channel or "")
            if reading is None or reading.value is None:
                continue
            found, before = rule(reading, readings, commanded), self._in_a_row.get(reading.channel, 0)
            self._in_a_row[reading.channel] = 0 if found is None else before + 1
            if found is not None:
                self.jumped.append(reading)
                if before + 1 >= BOUNDS["impossible_readings"]:
                    return found
        return None

    def _amps(self, reading: Reading, readings: Mapping[str, Reading], commanded: Commanded) -> Doubt | None:
        """More than the limit is protection's, which wants two readings in a row; one alone is no data."""
        del readings, commanded
        value, limit = reading.value, self.looked.current_limit
        if value is None or abs(value) <= limit:
            return None
        return Doubt("current_impossible", f"{reading.channel} reads {value:.4g} A, limit {limit:g} A")

    def _voltage(self, reading: Reading, readings: Mapping[str, Reading], commanded: Commanded) -> Doubt | None:
        """Mean motor voltage of a switched motor: within [D·V_s − drops, V_s + 1 V] while it turns."""
        looked, value = self.looked, reading.value
        supply = self._supply(readings, commanded)
        if value is None or supply is None or not looked.switched:
            return None
        low, high = voltage_range(commanded.least_duty_percent, supply, looked.one_way)
        at = f"at {commanded.duty_percent:.4g} % of {supply:.4g} V"
        shown = f"{reading.channel} reads {show_quantity(value, 'V')} {at}"
        if looked.one_way and value < -BOUNDS["reversed_volts"]:
            words = "it is driven forward: the leads of the motor or of the meter are swapped"
            return Doubt("leads_reversed", f"{shown} although {words}")
        if value > high or (value < low and self._turning(readings)):
            factor = _factor(value, low, high)
            words = f"{shown}, where from {show_quantity(low, 'V')} to {show_quantity(high, 'V')} is possible{factor}"
            return Doubt("wrong_scale" if factor else "voltage_impossible", words)
        return None

    def _speed(self, reading: Reading, readings: Mapping[str, Reading], commanded: Commanded) -> Doubt | None:
        """No motor turns faster than it may at nominal voltage; a brushed one on less supply in proportion less."""
        del readings
        supply, value = commanded.supply_v, reading.value
        part = supply / self.motor.nominal_v if supply is not None and self.motor.brushed else 1.0
        most = self.motor.maximum_rpm * part * (1.0 + BOUNDS["speed_spare_percent"] / 100.0)
        if value is None or value <= most:
            return None
        at = "" if supply is None else f" on a supply of {supply:g} V"
        return Doubt(
            "speed_impossible", f"{reading.channel} reads {value:.4g} rpm{at}, where {most:.4g} rpm is the most"
        )

    def _supply(self, readings: Mapping[str, Reading], commanded: Commanded) -> float | None:
        measured = readings.get(self.looked.supply or "")
        return commanded.supply_v if measured is None or measured.value is None else measured.value

    # -- jumps ---------------------------------------------------------------------------------------------------

    def _find_jumps(self, commanded: Commanded) -> None:
        """A reading off both its neighbours by more than the motor's time constant allows, which agree."""
        if len(self._past) < NEIGHBOURS:
            return
        before, middle, after = self._past
        for channel, span in self._spans(middle, commanded):
            a, b, c = before.get(channel), middle.get(channel), after.get(channel)
            if a is not None and b is not None and c is not None and jumped(a, b, c, span, self.motor.time_constant_s):
                self.jumped.append(b)

    def _spans(self, readings: Mapping[str, Reading], commanded: Commanded) -> list[tuple[str, float]]:
        """(channel, how far its values can lie apart) of what follows the rotor's speed."""
        supply = self._supply(readings, commanded)
        spans = [(self.looked.speed, self.motor.maximum_rpm)]
        if self.looked.voltage is not None and supply is not None:
            spans.append((self.looked.voltage, supply))
        return spans


def jumped(before: Reading, middle: Reading, after: Reading, span: float, time_constant_s: float) -> bool:
    """Whether `middle` is ruled out by its neighbours.

    A quantity that follows a first-order time constant τ (s) within `span` (its unit) moves at most span·(1 − e^(−t/τ))
    in a time t. It must be further off both, and both must agree to a quarter of that."""
    if before.value is None or middle.value is None or after.value is None:
        return False
    seconds = max(middle.at - before.at, after.at - middle.at)
    allowed = span * -math.expm1(-seconds / time_constant_s)
    there, back = middle.value - before.value, middle.value - after.value
    return min(abs(there), abs(back)) > allowed and abs(there - back) < allowed / 4.0


def voltage_range(duty_percent: float, supply_v: float, one_way: bool) -> tuple[float, float]:
    """(lowest, highest) mean motor voltage, V, behind a switch that works, at a rotor that is driven forward.

    From D·(V_s − V_switch) − (1 − D)·V_diode, the rotor at rest, to V_s + 1 V. A bridge may reverse in the off-time."""
    duty = duty_percent / 100.0
    high = supply_v + BOUNDS["voltage_spare_volts"]
    if not one_way:
        return -high, high
    low = duty * (supply_v - BOUNDS["switch_drop_volts"]) - (1.0 - duty) * BOUNDS["diode_drop_volts"]
    return low - BOUNDS["voltage_slack_volts"], high


def _factor(value: float, low: float, high: float) -> str:
    """ ", which looks like a factor of …" where one of a thousand would explain the reading."""
    for factor, name in ((1000.0, "1000"), (0.001, "0.001")):
        if value != 0.0 and max(low, BOUNDS["voltage_slack_volts"]) <= value / factor <= high:
            return f"; it looks like a factor of {name} (a unit or a scale)"
    return ""


__all__ = ["JUMPED", "Doubt", "Looked", "MotorFacts", "Sanity", "jumped", "voltage_range"]
