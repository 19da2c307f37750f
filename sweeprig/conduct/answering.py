"""Does the rig answer as commanded? Policies on pairs of what was commanded and what was measured. Pure.

A switch that failed short and a supply that is pumped up end the run; the softer ones discard the hold.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import ClassVar

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.protection import NO_LIMIT, NOTHING, SURE, Commanded, Debounce, Policy, Trip
from sweeprig.quantities import Reading, show_quantity


def _short() -> Debounce:
    return Debounce(int(BOUNDS["short_readings"]), BOUNDS["short_s"])


def _soft() -> Debounce:
    return Debounce(int(BOUNDS["soft_readings"]), BOUNDS["soft_s"])


@dataclass(slots=True)
class Answer(Policy):
    """What all have in common: one channel, judged only where it is read anyway, counted anew after each command."""

    listens: ClassVar[bool] = True
    channel: str
    longest_age_s: float = NO_LIMIT
    _to: Commanded = NOTHING
    _seen: Debounce = field(default_factory=_soft)

    def judge(self, reading: Reading, commanded: Commanded) -> Trip | None:
        if commanded is not self._to:
            self._to = commanded
            self._seen.seen.clear()
        wrong = None if reading.value is None else self.wrong(reading.value, reading, commanded)
        if not self._seen.takes(reading, wrong is not None) or wrong is None:
            return None
        rule, words, ends_run = wrong
        seen = tuple(self._seen.seen)
        shown = show_quantity(reading.value or 0.0, reading.unit)
        return Trip(rule, f"{self.channel} read {shown} {words}", reading.at, seen, ends_run)

    def wrong(self, value: float, reading: Reading, commanded: Commanded) -> tuple[str, str, bool] | None:
        """(rule, what contradicts the reading, whether it ends the run), or None."""
        raise NotImplementedError


@dataclass(slots=True)
class CurrentWhileOff(Answer):
    """A switch that failed short: with the drive off no current flows, once the motor's own has died down."""

    _seen: Debounce = field(default_factory=_short)

    def wrong(self, value: float, reading: Reading, commanded: Commanded) -> tuple[str, str, bool] | None:
        del reading
        if commanded.on or commanded.supply_v is None or abs(value) <= BOUNDS["short_amps"]:
            return None
        return "switch_short", "with the drive off: the switch conducts, it failed short", True


@dataclass(slots=True)
class VoltageWhileOff(Answer):
    """… and the motor has no voltage but that of a rotor that runs down: it falls, and begins below the supply's."""

    _seen: Debounce = field(default_factory=_short)

    def wrong(self, value: float, reading: Reading, commanded: Commanded) -> tuple[str, str, bool] | None:
        del reading
        supply = commanded.supply_v
        if commanded.on or supply is None or value < BOUNDS["short_percent"] / 100.0 * supply:
            return None
        first = self._seen.seen[0].value if self._seen.seen else None
        if first is not None and value < BOUNDS["falls_percent"] / 100.0 * first:
            return None
        return "switch_short", "with the drive off, and it does not fall: the switch conducts, it failed short", True


@dataclass(slots=True)
class VoltageAtDuty(Answer):
    """With the drive on: full voltage at 80 % duty or less (short), next to none although some is due (open).

    A capacitor at the motor may hold it at full voltage always: only where it had answered to the duty before does full
    voltage contradict. A switch that was short from the beginning shows with the drive off."""

    _answered: bool = False

    def wrong(self, value: float, reading: Reading, commanded: Commanded) -> tuple[str, str, bool] | None:
        del reading
        supply, duty = commanded.supply_v, commanded.least_duty_percent / 100.0
        if not commanded.on or supply is None:
            return None
        set_to = f"at {commanded.duty_percent:.4g} % of {supply:g} V"
        most = commanded.duty_percent + SURE * commanded.u_duty_percent
        half = most <= BOUNDS["short_shows_percent"]
        self._answered = self._answered or (half and value < BOUNDS["short_percent"] / 100.0 * supply)
        if half and self._answered and value >= BOUNDS["full_percent"] / 100.0 * supply:
            return "switch_short", f"{set_to}: the switch conducts all the time, it failed short", True
        if next_to_none(value, duty, supply):
            return "switch_open", f"{set_to}: the switch does not conduct, or a lead is off", False
        return None


def next_to_none(volts: float, duty: float, supply_v: float) -> bool:
    """Less than a tenth of D·V_s (D as a fraction) at the motor, where a freewheel diode alone would leave more."""
    due = duty * supply_v - (1.0 - duty) * BOUNDS["diode_drop_volts"]
    least = BOUNDS["open_percent"] / 100.0 * duty * supply_v
    return due > least and abs(volts) < least


@dataclass(slots=True)
class DutyMeasured(Answer):
    """Measured against commanded duty, %; `delay_s` is what the switch adds to the on-time (0 at its gate)."""

    delay_s: float = 0.0

    def wrong(self, value: float, reading: Reading, commanded: Commanded) -> tuple[str, str, bool] | None:
        del reading
        duty = commanded.duty_percent
        allowed = BOUNDS["duty_off_percent"] + 100.0 * self.delay_s * commanded.pwm_hz
        allowed += SURE * commanded.u_duty_percent
        if not commanded.on or not 0.0 < duty < 100.0 or abs(value - duty) <= allowed:
            return None
        return "duty_not_as_commanded", f"where {duty:.4g} % was commanded, {allowed:.3g} % off is allowed", False


@dataclass(slots=True)
class FrequencyMeasured(Answer):
    """Measured against commanded PWM frequency, Hz."""

    def wrong(self, value: float, reading: Reading, commanded: Commanded) -> tuple[str, str, bool] | None:
        del reading
        hz, allowed = commanded.pwm_hz, BOUNDS["frequency_off_percent"]
        allowed += 100.0 * SURE * commanded.u_pwm_hz / hz if hz > 0.0 else 0.0
        if not commanded.on or not 0.0 < commanded.duty_percent < 100.0:
            return None
        if abs(value - hz) <= allowed / 100.0 * hz:
            return None
        shown = show_quantity(hz, "Hz")
        return "frequency_not_as_commanded", f"where {shown} was commanded, {allowed:.3g} % off is allowed", False


@dataclass(slots=True)
class SupplyMeasured(Answer):
    """Measured against set supply voltage, V: far above it is pumped up (trip). A few percent off it, either way and
    without its current limit acting, gives the motor another voltage than the findings say (discards)."""

    def wrong(self, value: float, reading: Reading, commanded: Commanded) -> tuple[str, str, bool] | None:
        volts = commanded.supply_v
        if volts is None:
            return None
        allowed = BOUNDS["supply_off_percent"] / 100.0 * volts + BOUNDS["supply_off_volts"]
        if value > volts + allowed:
            return "supply_pumped_up", f"where {volts:g} V is set, {allowed:.3g} V off is allowed", True
        held = BOUNDS["supply_held_percent"] / 100.0 * volts + BOUNDS["supply_held_volts"] + 3.0 * reading.u
        if not commanded.on or abs(value - volts) <= held or "supply_limited" in reading.flags:
            return None
        words = f"where {volts:g} V is set, {held:.3g} V off is allowed"
        return ("supply_too_low" if value < volts else "supply_too_high"), words, False
