"""The supply behind the stage, in time: a capacitor that a current limit fills and a braked motor pumps up; no sink.

The capacitor's voltage is taken as constant within a PWM period and in short ticks; resistance in the leads is the
stage's. What draws the current is not known here.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from sweeprig.errors import ConfigError

TICK_VOLTS = 0.1
"""While its voltage moves, a tick lasts until it has moved by so much; the mean of a tick is taken at its middle."""
NEAR_VOLTS = 1e-4
"""A voltage so near to where it comes to rest is in no hurry."""
EMPTY_VOLTS = 0.01
"""A capacitor that is left to its bleeder counts as empty below this."""


@dataclass(frozen=True, slots=True)
class Source:
    """A bench supply that does not sink current; SI units.

    capacitor_farad       at its output; behind the blocking diode where there is one
    limit_response_s      how long it still holds its voltage after the mean current has passed the limit
    bleeder_ohms          what discharges the capacitor besides the stage; infinite: nothing
    clamp_volts           a clamp across the capacitor that takes any current above this; infinite: none
    blocking_diode_volts  drop of a diode between supply and capacitor, which keeps the supply from being pumped up
    """

    capacitor_farad: float
    limit_response_s: float = 0.0
    bleeder_ohms: float = 1000.0
    clamp_volts: float = math.inf
    blocking_diode_volts: float | None = None

    def __post_init__(self) -> None:
        """ConfigError for a value that no supply can have."""
        positive = (self.capacitor_farad, self.bleeder_ohms, self.clamp_volts)
        if not (min(positive) > 0.0 and min(self.limit_response_s, self.blocking_diode_volts or 0.0) >= 0.0):
            what = "the simulated supply cannot be like this"
            remedy = "Correct [simulated_source] of the rig file"
            raise ConfigError(what, value=repr(self), allowed="values above zero", remedy=remedy)


class Bus:
    """The capacitor's voltage in time. The plant asks for a plan, lets the motor run on it, and tells what it drew.

    volts       the capacitor's voltage, V
    limiting    the supply does not hold its voltage, since its current limit acts
    """

    def __init__(self, source: Source) -> None:
        self.source = source
        self.volts = 0.0
        self.limiting = False
        self._set, self._limit, self._on = 0.0, 0.0, False
        self._grace = source.limit_response_s
        self._gives: float | None = 0.0
        self._apart_volts = self._mid = 0.0
        self._lead_extra = self._terminal_extra = 0.0

    def set(self, volts: float, limit_amps: float, on: bool) -> None:
        """The supply's settings from now on."""
        if (volts, limit_amps, on) != (self._set, self._limit, self._on):
            self._set, self._limit, self._on = volts, limit_amps, on
            self._grace = self.source.limit_response_s

    def holds(self, drawn: float) -> bool:
        """The present plan stays good with this mean current drawn, A: the supply holds its voltage."""
        return self._gives is None and 0.0 <= drawn <= self._limit and not self.limiting

    @property
    def _target(self) -> float:
        """The voltage that the supply holds the capacitor at while it can; zero while it is off."""
        return max(0.0, self._set - (self.source.blocking_diode_volts or 0.0)) if self._on else 0.0

    def plan(self, drawn_at: Callable[[float], float], most_s: float) -> tuple[float, float]:
        """(seconds the plan holds, capacitor voltage V to reckon with until then); `drawn_at(volts)` → mean A drawn.

        Infinite seconds: the voltage stands still as long as what is drawn does not change. Else at most `most_s`.
        """
        seconds, self._mid = self._planned(drawn_at, most_s)
        self._apart_volts = self._terminals(self._mid) - self._mid
        return seconds, self._mid

    def _planned(self, drawn_at: Callable[[float], float], most_s: float) -> tuple[float, float]:
        target, drawn = self._target, drawn_at(self.volts)
        self.limiting, self._gives = False, self._given(target, drawn)
        if self._gives is None:
            grace = self._grace if drawn > self._limit else math.inf
            self.limiting = drawn > self._limit
            return grace, self.volts
        self.limiting = self._on and self.volts < target
        rate = (self._gives - drawn - self.volts / self.source.bleeder_ohms) / self.source.capacitor_farad
        if rate == 0.0 or (rate < 0.0 and self.volts == 0.0) or (rate > 0.0 and self.volts >= self.source.clamp_volts):
            return math.inf, self.volts
        aside = 1e-3 * (1.0 + self.volts)
        stiff = abs(drawn_at(self.volts + aside) - drawn) / aside + 1.0 / self.source.bleeder_ohms
        seconds = TICK_VOLTS / abs(rate)
        if stiff > 0.0:
            seconds = min(seconds, 0.5 * self.source.capacitor_farad / stiff)
        if abs(rate) * seconds < NEAR_VOLTS:
            # all but at rest: a longer tick cannot carry it away, and the next cell looks again
            seconds = 10.0 * NEAR_VOLTS / abs(rate)
        seconds = min(seconds, most_s)
        to_target = (target - self.volts) / rate
        if 0.0 < to_target < seconds:
            seconds = to_target
        seconds = max(seconds, 1e-6)
        # the mean of the exponential by which it moves: what is drawn at that voltage is the mean of what is drawn
        x = stiff * seconds / self.source.capacitor_farad
        part = (x + math.expm1(-x)) / (x * x) if x > 1e-4 else 0.5
        return seconds, max(0.0, self.volts + rate * seconds * part)

    def _given(self, target: float, drawn: float) -> float | None:
        """What the supply gives, A; None: whatever is drawn, for it holds its voltage."""
        if self.volts < target:
            return self._limit
        if self.volts > target or drawn < 0.0 or not self._on:
            return 0.0
        if drawn <= self._limit:
            self._grace = self.source.limit_response_s
            return None
        return None if self._grace > 0.0 else self._limit

    def run(self, seconds: float, charge: float) -> None:
        """`seconds` have passed since the plan and the stage drew `charge`, A·s."""
        self._terminal_extra += self.terminal_offset(seconds)
        self._lead_extra += self.lead_offset(seconds, charge)
        if self._gives is None and charge > self._limit * seconds:
            self._grace = max(0.0, self._grace - seconds)
        self.volts = self.volts_after(seconds, charge)

    def volts_after(self, seconds: float, charge: float) -> float:
        """The capacitor's voltage, V, `seconds` into the plan, when the stage has drawn `charge` since, A·s."""
        target, before = self._target, self.volts
        if self._gives is None:
            volts = before + max(0.0, -charge) / self.source.capacitor_farad
        else:
            lost = self._mid * seconds / self.source.bleeder_ohms
            volts = before + (self._gives * seconds - charge - lost) / self.source.capacitor_farad
        reached = (before - target) * (volts - target) <= 0.0 and before != target
        if self._on and (reached or abs(volts - target) < 1e-9):
            volts = target
        elif volts < EMPTY_VOLTS and not self._on:
            volts = 0.0
        return min(max(0.0, volts), self.source.clamp_volts)

    # ---- what sits on the supply's side of the blocking diode -----------------------------------------------------

    def _terminals(self, volts: float) -> float:
        """Voltage at the supply's terminals, V: the capacitor's, but for a blocking diode."""
        drop = self.source.blocking_diode_volts
        if drop is None:
            return volts
        return min(self._set, volts + drop) if self._on else 0.0

    def terminal_offset(self, seconds: float) -> float:
        """∫ (terminals less capacitor) dt, V·s, over `seconds` of the plan."""
        return self._apart_volts * seconds

    def lead_offset(self, seconds: float, charge: float) -> float:
        """Charge, A·s, through the supply's lead less what the stage drew, over `seconds` of the plan."""
        if self.source.blocking_diode_volts is None:
            return 0.0
        return max(0.0, -charge) if self._gives is None else self._gives * seconds - charge

    def supply_volt_seconds(self, at_stage: float, seconds: float) -> float:
        """∫ voltage at the supply's terminals dt from that at the stage, `seconds` into the plan."""
        return at_stage + self._terminal_extra + self.terminal_offset(seconds)

    def supply_amp_seconds(self, of_stage: float, seconds: float, charge: float) -> float:
        """∫ current in the supply's lead dt from what the stage drew, `seconds` and `charge` into the plan."""
        return of_stage + self._lead_extra + self.lead_offset(seconds, charge)
