"""Is an instrument still as it was set? Judged from what its `settings` say. Pure.

One that restarted in a hold, or was turned by hand, makes its readings and the motor's behaviour another experiment.
"""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.errors import InstrumentRefused

EVENT_STATUS = "event_status"
"""The key under which an adapter shows its event status register; asking for it clears it."""
POWER_ON = 128
"""Bit 7 of that register (IEEE 488.2, 11.5.1): it started since the register was last read."""


def restarted(name: str, now: Mapping[str, str]) -> None:
    """InstrumentRefused where the power-on bit is set; an adapter that shows no register is not judged."""
    status = now.get(EVENT_STATUS, "0")
    if status.isdecimal() and int(status) & POWER_ON:
        raise InstrumentRefused(
            f"{name}: it restarted during the hold and has lost its settings",
            value=f"event status {status}",
            remedy="look at its supply and its reset line; the settings are applied again",
            topic="rig",
        )


def changed(name: str, before: Mapping[str, str], now: Mapping[str, str]) -> None:
    """InstrumentRefused where a setting differs from the one seen `before`; a key that was not there is not judged."""
    for key, was in before.items():
        if key != EVENT_STATUS and now.get(key) != was:
            raise InstrumentRefused(
                f"{name}: the setting {key} changed during the hold: it restarted, or somebody turned it",
                value=f"{now.get(key)}",
                allowed=was,
                remedy="leave its front panel alone, look at its supply; the settings are applied again",
                topic="rig",
            )
