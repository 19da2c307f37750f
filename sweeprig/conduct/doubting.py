"""A performer's doubts: sanity of readings and of stops, put together for one open rig.

Told to the loop as `Doubted`; what each rule is stands in `sanity` and `rotation`. No link and no clock here.
"""

from __future__ import annotations

from dataclasses import replace

from sweeprig.conduct.protection import Commanded
from sweeprig.conduct.rig import OpenRig
from sweeprig.conduct.rotation import Rotation
from sweeprig.conduct.sanity import JUMPED, Doubt, Looked, MotorFacts, Sanity
from sweeprig.quantities import Reading


class Spoiled(Exception):
    """The hold says nothing about the motor; the text is the outcome's reason."""


class Doubted(Spoiled):
    """Its readings cannot be true: the rig is healed before the next hold."""

    def __init__(self, doubt: Doubt) -> None:
        super().__init__(str(doubt))


def looked(rig: OpenRig, motor: MotorFacts) -> Looked:
    """How this rig looks at the motor."""
    described, roles, supply = rig.use.rig, rig.roles, rig.source.get("supply")
    power_switch = described.drive_kind == "power_switch"
    across = described.voltage_at == "across_motor"
    has_volts = supply is not None and "volts" in rig.adapters[supply].channels
    return Looked(
        speed=roles["speed"], age=rig.rotation_channel, voltage=roles.get("motor_voltage") if across else None,
        current=roles.get("current"), duty=roles.get("duty"), supply=f"{supply}.volts" if has_volts else None,
        switched=power_switch, one_way=described.stage != "h_bridge",
        brushed_on_diode=motor.brushed and power_switch and described.stage == "low_side_diode",
        current_limit=rig.use.limits.current,
    )  # fmt: skip


class Doubting:
    """Fed with every cycle. Without the motor's facts (nothing is swept) it doubts nothing."""

    def __init__(self, rig: OpenRig, current_at: str) -> None:
        self.guard = rig.guard
        self.sanity: Sanity | None = None
        self.rotation: Rotation | None = None
        if rig.use.motor is not None:
            how = looked(rig, rig.use.motor)
            self.sanity = Sanity(how, rig.use.motor)
            self.rotation = Rotation(how, 1 if current_at == "motor_lead" else 2, rig.use.motor.maximum_rpm)
        self._last: dict[str, Reading] = {}

    def command(self, commanded: Commanded) -> None:
        """Drive and supply are told something else."""
        self.guard.command(commanded)
        if self.rotation is not None:
            self.rotation.begin()

    def take(self, readings: dict[str, Reading], kept: list[Reading]) -> list[Reading]:
        """Judge a cycle; Doubted for one that cannot be true. Returns the readings, of this cycle and the one before,
        that are now known to be no data: in their cycle and in `kept` they are flagged."""
        if self.sanity is None or self.rotation is None:
            return []
        doubt = self.sanity.take(readings, self.guard.commanded)
        for reading in self.sanity.jumped:
            flagged = replace(reading, value=None, u=0.0, flags=(*reading.flags, JUMPED))
            of_now = readings.get(reading.channel) is reading
            (readings if of_now else self._last)[reading.channel] = flagged
            for place in range(len(kept) - 1, -1, -1):
                if kept[place] is reading:
                    kept[place] = flagged
                    break
        self._last = readings
        self.rotation.take(readings)
        if doubt is not None:
            raise Doubted(doubt)
        return self.sanity.jumped

    def believe_rest(self) -> None:
        """Before a rotor is said to be at rest with the drive on: Doubted where the other readings contradict it."""
        doubt = None if self.rotation is None else self.rotation.stopped(self.guard.commanded)
        if doubt is not None:
            raise Doubted(doubt)

    def stands(self) -> str:
        """Before a rotor is said to turn: what says that it is at rest; "" where nothing does."""
        return "" if self.rotation is None else self.rotation.at_rest(self.guard.commanded)
