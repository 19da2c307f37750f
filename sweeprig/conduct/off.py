"""`sweeprig off`: drive and supply off on a rig that no run holds, on all links at once, then the proof.

An instrument that cannot be reached never keeps another one from being told.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sweeprig.clock import Clock
from sweeprig.conduct.rig import RigUse, assemble, identify, open_link
from sweeprig.conduct.switch_off import Off, prove_off, switch_off
from sweeprig.errors import OffNotProved, SweeprigError


def off(use: RigUse, clock: Clock, ports: Mapping[str, Any] | None = None) -> Off:
    """Switch off blind on every actuator that can be reached, then identify, read and prove it.

    OffNotProved names what could not be reached, did not confirm, or still reads as on.
    """
    rig = assemble(use, clock)
    actuators = dict.fromkeys(rig.source[role] for role in ("drive", "supply") if role in rig.source)
    silent: dict[str, str] = {}
    try:
        for name in actuators:
            try:
                open_link(rig, name, ports)
            except SweeprigError as error:
                silent[name] = str(error)
        done = switch_off(rig)
        silent |= done.silent
        if silent:
            told = f"; confirmed off: {', '.join(done.told)}" if done.told else ""
            raise OffNotProved(
                f"not confirmed off: {'; '.join(silent.values())}{told}",
                remedy="Cut the supply by hand before touching anything",
                topic="safety",
            )
        for name in rig.adapters:
            if name not in rig.links:
                open_link(rig, name, ports)
        identify(rig, rig.adapters)
        prove_off(rig)
        return done
    finally:
        rig.close()
