"""What a power stage makes of a setting: the protocol through which the plant sees any switch, bridge and supply.

The plain stage (ideal low-side switch, freewheel diode, ideal supply) lives here; `bridge` holds the others.
"""

from __future__ import annotations

from typing import Protocol

from sweeprig.simbench.chopper import Chopper, chopper
from sweeprig.simbench.waveform import Waveform


class Setting(Protocol):
    """One electrical setting (supply, winding, PWM, stage): what it gives at any back-EMF. Values, never changed.

    supply_volts, supply_ohms   the supply behind its resistance: terminal voltage = volts − ohms · supply current
    """

    @property
    def supply_volts(self) -> float: ...
    @property
    def supply_ohms(self) -> float: ...
    def mean_current(self, emf_v: float) -> tuple[float, float]:
        """(mean motor current in A, its derivative by the back-EMF in A/V)."""
        ...

    def mean_supply_current(self, emf_v: float) -> float:
        """Mean current from the supply, A; below zero while the stage gives back."""
        ...

    def wave(self, emf_v: float) -> Waveform: ...
    def at_volts(self, volts: float) -> Setting:
        """The same on another supply voltage, V."""
        ...

    def limited(self, emf_v: float, limit_amps: float) -> Setting:
        """The same on the lower voltage at which the mean supply current just is the limit, A."""
        ...


class Stage(Protocol):
    """A power stage. Values, never changed.

    node      the switch node's voltage to supply minus, as (of the supply's, of the motor's, ohms · motor current):
              node = a·V_supply + b·V_motor + c·I_motor holds at every moment of current flow, so also for the means
    """

    @property
    def node(self) -> tuple[float, float, float]: ...
    def conducts(self, supply_v: float, duty_percent: float, drive_on: bool) -> bool:
        """Whether this setting can carry a current through a rotor that stands or turns."""
        ...

    def setting(
        self, supply_v: float, resistance_ohm: float, inductance_henry: float, pwm_hz: float, duty_percent: float,
        conducts: bool,
    ) -> Setting: ...  # fmt: skip


class PlainLowSide:
    """An ideal low-side switch with a freewheel diode on an ideal supply: the closed form of `chopper`."""

    node = (1.0, -1.0, 0.0)

    def conducts(self, supply_v: float, duty_percent: float, drive_on: bool) -> bool:
        return drive_on and duty_percent > 0.0 and supply_v > 0.0

    def setting(
        self, supply_v: float, resistance_ohm: float, inductance_henry: float, pwm_hz: float, duty_percent: float,
        conducts: bool,
    ) -> Chopper:  # fmt: skip
        duty = duty_percent if conducts else 0.0
        return chopper(supply_v, resistance_ohm, inductance_henry, pwm_hz, duty)
