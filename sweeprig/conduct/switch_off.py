"""Switching off, on every way out: drive and supply at once, neither waiting for the other, then the proof.

Sent blind where it must be: also on a link that is dirty or has not yet said who it is.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

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
    names = [rig.source[role] for role in roles if role in rig.source and rig.source[role] in rig.links]
    try:
        results = rig.ask({name: rig.adapters[name].switch_off() for name in names}, BOUNDS["off_s"])
    finally:
        rig.guard.drive_off()
    silent = {name: str(result.error) for name, result in results.items() if result.error is not None}
    told = tuple(name for name, result in results.items() if result.error is None)
    return Off(told, silent, rig.clock.now() - began)


def drive_off(rig: OpenRig) -> None:
    """The drive off between holds, supply left on; raises when it does not confirm."""
    off = switch_off(rig, supply_too=False)
    for name, why in off.silent.items():
        raise OffNotProved(f"the drive '{name}' did not confirm that it is off: {why}", topic="safety")


def prove_off(rig: OpenRig) -> dict[str, Reading]:
    """Read until everything says off: no voltage at the motor, no current, rotor at rest; else OffNotProved.

    A spinning motor is still a generator: voltage and speed get `coast_s` to die down, and must not rise meanwhile.
    """
    until = rig.clock.now() + BOUNDS["coast_s"]
    roles = [role for role in ("speed", "motor_voltage", "current") if role in rig.source]
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
        channel = rig.roles.get(role)
        reading = None if channel is None else readings.get(channel)
        if reading is None:
            continue
        value = reading.value
        if value is None or abs(value) > limit:
            shown = "more than its range" if value is None else show_quantity(value, reading.unit)
            wrong.append(f"{channel} reads {shown} (off is below {show_quantity(limit, reading.unit)})")
    age = readings[rig.rotation_channel]
    if age.value is not None and age.value < BOUNDS["least_gap_s"]:
        wrong.append(f"the rotor still turns (last tachometer edge {age.value:.2f} s ago)")
    return wrong


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
