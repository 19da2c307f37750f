"""Power stages as circuits: low-side switch, half bridge and H bridge with switch resistance, diodes and dead time.

What each phase of the PWM period connects to the winding, for either sign of the current. The waveform that follows
from it is `switched`'s; what the supply does is `source`'s.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, NamedTuple

from sweeprig.errors import ConfigError
from sweeprig.simbench.chopper import DIODE_DROP_V
from sweeprig.simbench.switched import Branch, Phase, SwitchedSetting

Kind = Literal["low_side_diode", "half_bridge", "h_bridge"]


class _Off(NamedTuple):
    """What conducts while the chopping switch is open: actively, and by diodes for either sign of the current."""

    active: Branch
    forward: Branch
    reverse: Branch


@dataclass(frozen=True, slots=True)
class SwitchedStage:
    """A power stage of real parts; SI units. A switch conducts both ways through its resistance, a diode one way.

    kind                where the motor sits: supply plus to node, node to supply minus, between two half bridges
    synchronous         the freewheel path is a switch (but for the dead time); False: a diode
    fast_decay          H bridge only: in the off-time the whole bridge is reversed (or all open), not one half of it
    switch_ohms         of each closed switch
    diode_volts, _ohms  each diode, body or freewheel: forward drop = volts + ohms · current
    dead_time_s         synchronous only: between one switch opening and the other closing; body diodes conduct
    on_time_error_s     on-time minus commanded on-time: switch delays
    supply_ohms         supply and leads, in series with every pulse it gives or takes
    holds_bus           a capacitor holds the supply rail when the supply is off, and takes what a braked motor returns
    """

    kind: Kind
    synchronous: bool = False
    fast_decay: bool = False
    switch_ohms: float = 0.0
    diode_volts: float = DIODE_DROP_V
    diode_ohms: float = 0.0
    dead_time_s: float = 0.0
    on_time_error_s: float = 0.0
    supply_ohms: float = 0.0
    holds_bus: bool = False

    def __post_init__(self) -> None:
        """ConfigError for a combination that cannot be wired."""
        if self.kind == "low_side_diode" and self.synchronous:
            what, remedy = "a low-side switch with a diode has no second switch", 'Set recirculation = "diode"'
            raise ConfigError(what, value="synchronous", allowed="diode", remedy=remedy)
        if self.fast_decay and self.kind != "h_bridge":
            what, remedy = "only an H bridge can reverse the motor in the off-time", 'Set decay = "slow"'
            raise ConfigError(what, value=self.kind, allowed="h_bridge", remedy=remedy)

    @property
    def node(self) -> tuple[float, float, float]:
        if self.kind == "low_side_diode":
            return 1.0, -1.0, 0.0
        if self.kind == "half_bridge":
            return 0.0, 1.0, 0.0
        # the other half's low switch stays closed in slow decay; in fast decay both halves swing, one against the other
        return (0.5, 0.5, 0.0) if self.fast_decay else (0.0, 1.0, self.switch_ohms)

    def conducts(self, supply_v: float, duty_percent: float, drive_on: bool) -> bool:
        """A synchronous bridge that is on shorts the motor even at duty 0."""
        if not drive_on or (supply_v <= 0.0 and not self.holds_bus):
            return False
        return self.synchronous or (duty_percent > 0.0 and supply_v > 0.0)

    def setting(
        self, supply_v: float, resistance_ohm: float, inductance_henry: float, pwm_hz: float, duty_percent: float,
        conducts: bool,
    ) -> SwitchedSetting:  # fmt: skip
        """What one period consists of. Without conduction, and with no capacitor to charge, the motor is open."""
        period = 1.0 / pwm_hz
        on, off = self._on(supply_v), self._off(supply_v)
        whole = Phase(period, off.forward, off.reverse)
        open_circuit = not conducts and not self.holds_bus
        phases = self._phases(period, duty_percent / 100.0, on, off) if conducts else (whole,)

        def again(volts: float) -> SwitchedSetting:
            return self.setting(volts, resistance_ohm, inductance_henry, pwm_hz, duty_percent, conducts)

        return SwitchedSetting(self, supply_v, resistance_ohm, inductance_henry, phases, open_circuit, again)

    def _phases(self, period: float, duty: float, on: Branch, off: _Off) -> tuple[Phase, ...]:
        closed = period * duty
        if 0.0 < duty < 1.0:
            closed = min(period, max(0.0, closed + self.on_time_error_s))
        if not self.synchronous:
            return _lasting(Phase(closed, on, on), Phase(period - closed, off.forward, off.reverse))
        dead = self.dead_time_s if 0.0 < closed < period else 0.0
        first, second = min(dead, closed), min(dead, period - closed)
        return _lasting(
            Phase(first, off.forward, off.reverse),
            Phase(closed - first, on, on),
            Phase(second, off.forward, off.reverse),
            Phase(period - closed - second, off.active, off.active),
        )

    def _on(self, volts: float) -> Branch:
        r, rs = self.switch_ohms, self.supply_ohms
        if self.kind == "low_side_diode":
            return Branch(volts, r + rs, 0.0, -r, 1.0)
        if self.kind == "half_bridge":
            return Branch(volts, r + rs, volts, r + rs, 1.0)
        return Branch(volts, 2.0 * r + rs, volts, r + rs, 1.0)

    def _off(self, volts: float) -> _Off:
        """The three branches of the off-time; `reverse` feeds the supply through the diodes."""
        r, rs, vf, rd = self.switch_ohms, self.supply_ohms, self.diode_volts, self.diode_ohms
        above, back = volts + vf, rd + rs
        if self.kind == "low_side_diode":
            freewheel = Branch(-vf, rd, above, -rd, 0.0)
            return _Off(freewheel, freewheel, Branch(above, back, -vf, -rd, 1.0))
        if self.kind == "half_bridge":
            return _Off(
                Branch(0.0, r, 0.0, r, 0.0), Branch(-vf, rd, -vf, rd, 0.0), Branch(above, back, above, back, 1.0)
            )
        if self.fast_decay:
            return _Off(
                Branch(-volts, 2.0 * r + rs, 0.0, r, -1.0),
                Branch(-volts - 2.0 * vf, 2.0 * rd + rs, -vf, rd, -1.0),
                Branch(above + vf, rd + back, above, back, 1.0),
            )
        return _Off(
            Branch(0.0, 2.0 * r, 0.0, r, 0.0),
            Branch(-vf, rd + r, -vf, rd, 0.0),
            Branch(above, back + r, above, back, 1.0),
        )


def _lasting(*phases: Phase) -> tuple[Phase, ...]:
    return tuple(phase for phase in phases if phase.seconds > 0.0)
