"""Switching off, on every way out: drive and supply at once, neither waiting for the other, then the proof.

Sent blind where it must be: also on a link that is dirty or has not yet said who it is.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.rig import OpenRig, by_channel
from sweeprig.errors import OffNotProved
from sweeprig.quantities import Reading, show_quantity
from sweeprig.roles import Window


@dataclass(frozen=True, slots=True)
class Off:
    """told: actuators that confirmed; silent: those that did not, with the reason; took_s: until the last confirmed."""

    told: tuple[str, ...]
    silent: Mapping[str, str]
    took_s: float


def switch_off(rig: OpenRig, supply_too: bool = True) -> Off:
    """Tell drive (and supply) to be off, all links at once. Never raises: what did not answer is in the result."""
    began = rig.clock.now()
    roles = ("drive", "supply") if supply_too else ("drive",)
    try:
        results = rig.ask_off(roles)
    finally:
        rig.guard.drive_off()
    silent = {name: str(result.error) for name, result in results.items() if result.error is not None}
    told = tuple(name for name, result in results.items() if result.error is None)
    if told and supply_too and not silent:
        rig.off_confirmed_at = rig.clock.now()
    return Off(told, silent, rig.clock.now() - began)


def drive_off(rig: OpenRig, supply_too: bool = False) -> None:
    """The drive off between holds, supply left on unless it is meant too; raises when one does not confirm."""
    off = switch_off(rig, supply_too or rig.off_is_supply_off)
    for name, why in off.silent.items():
        raise OffNotProved(
            f"'{name}' did not confirm that it is off: {why}",
            remedy="cut the supply by hand before touching anything, then look at the link and the instrument",
            topic="safety",
        )


def prove_off(rig: OpenRig) -> dict[str, Reading]:
    """Read until everything says off: no voltage at the motor, no current, rotor at rest; else OffNotProved.

    A spinning motor is still a generator: voltage and speed get `coast_s` to die down, and must not rise meanwhile.
    """
    until = rig.clock.now() + BOUNDS["coast_s"]
    roles = [role for role in ("speed", "motor_voltage", "current", "supply") if role in rig.source]
    while True:
        readings = _read_blind(rig, roles)
        wrong = still_on(rig, readings)
        if not wrong:
            return readings
        if rig.clock.now() >= until:
            raise OffNotProved(
                f"{BOUNDS['coast_s']:g} s after the drive was told to be off, {'; '.join(wrong)}",
                remedy="cut the supply by hand before touching anything, then look at the switch and its wiring",
                topic="safety",
            )


def still_on(rig: OpenRig, readings: Mapping[str, Reading]) -> list[str]:
    """What contradicts "off", in words; empty when nothing does."""
    wrong = []
    for role, limit in (("motor_voltage", BOUNDS["off_volts"]), ("current", BOUNDS["off_amps"])):
        reading = across_motor(rig, readings) if role == "motor_voltage" else readings.get(rig.roles.get(role, ""))
        if reading is None:
            continue
        value = reading.value
        if value is None or abs(value) > limit:
            shown = "more than its range" if value is None else show_quantity(value, reading.unit)
            wrong.append(f"{reading.channel} reads {shown} (off is below {show_quantity(limit, reading.unit)})")
    age = readings[rig.rotation_channel]
    if age.value is not None and age.value < BOUNDS["least_gap_s"]:
        wrong.append(f"the rotor still turns (last tachometer edge {age.value:.2f} s ago)")
    return wrong


def across_motor(rig: OpenRig, readings: Mapping[str, Reading]) -> Reading | None:
    """The motor's voltage: as read, or from the switch node as supply less node (the motor hangs on the supply's plus).

    None where it was not read, or where the node was and nobody reads the supply."""
    reading = readings.get(rig.roles.get("motor_voltage", ""))
    if reading is None or rig.use.rig.voltage_at != "switch_node":
        return reading
    supply = readings.get(f"{rig.source.get('supply', '')}.volts")
    if supply is None or supply.value is None or reading.value is None:
        return reading if reading.value is None else None
    return replace(reading, value=supply.value - reading.value, channel=f"{supply.channel} less {reading.channel}")


def _read_blind(rig: OpenRig, roles: Sequence[str]) -> dict[str, Reading]:
    names = rig.serving(roles)
    window = Window(BOUNDS["cycle_window_s"])
    results = rig.ask({name: rig.adapters[name].measure(window) for name in names}, window.seconds + BOUNDS["cycle_s"])
    readings: dict[str, Reading] = {}
    for name, result in results.items():
        if result.error is not None:
            raise _not_proved(name, result.error)
        readings.update(by_channel(result.value))
    return readings


def _not_proved(name: str, error: Exception) -> OffNotProved:
    return OffNotProved(f"'{name}' cannot be read, so off cannot be proved: {error}", topic="safety")
