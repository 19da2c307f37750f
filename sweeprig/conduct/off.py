"""`sweeprig off`: drive and supply off, on all links at once, then the proof; also on a rig that a run holds.

An instrument that cannot be reached never keeps another one from being told, nor does a meter that is set up wrongly.
"""

from __future__ import annotations

import os
import signal
import socket
from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any

from sweeprig.clock import Clock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.locks import COMMAND, LINK, Holder, RigLock
from sweeprig.conduct.requests import ask
from sweeprig.conduct.rig import OpenRig, RigUse, add_adapters, assemble_actuators, identify, open_link
from sweeprig.conduct.switch_off import Off, prove_off, switch_off
from sweeprig.errors import OffNotProved, RigError, RigInUse, SweeprigError


def off(use: RigUse, clock: Clock, ports: Mapping[str, Any] | None = None) -> Off:
    """Switch off blind on every actuator that can be reached, then identify, read and prove it.

    OffNotProved names what could not be reached, did not confirm, or still reads as on.
    """
    rig = assemble_actuators(use, clock)
    try:
        done, silent = _tell_all(rig, list(rig.adapters), ports)
        if silent:
            told = f"; confirmed off: {', '.join(done.told)}" if done.told else ""
            raise OffNotProved(
                f"not confirmed off: {'; '.join(silent.values())}{told}",
                remedy="Cut the supply by hand before touching anything",
                topic="safety",
            )
        add_adapters(rig)
        for name in rig.adapters:
            if name not in rig.links:
                open_link(rig, name, ports)
        identify(rig, rig.adapters)
        prove_off(rig)
        return done
    finally:
        rig.close()


def _tell_all(rig: OpenRig, actuators: list[str], ports: Mapping[str, Any] | None) -> tuple[Off, dict[str, str]]:
    """Two rounds of opening, a short and a patient one; after each whoever is open is told, so that one that cannot
    be reached holds up nobody. The last word of each counts."""
    silent: dict[str, str] = {}
    done = Off((), {}, 0.0)
    for within_s in (BOUNDS["open_off_s"], BOUNDS["open_s"]):
        for name in actuators:
            if name in rig.links:
                continue
            try:
                open_link(rig, name, ports, within_s)
            except RigInUse:
                raise
            except SweeprigError as error:
                silent[name] = str(error)
            else:
                silent.pop(name, None)
        done = switch_off(rig)
        if not silent and not done.silent:
            break
    return done, silent | dict(done.silent)


def off_or_order(use: RigUse, clock: Clock, wall: Clock, take_over: bool) -> tuple[Off, Holder | None]:
    """Off on this rig, whoever has it; the holder that was ordered off or killed, None for a rig that was free.

    A holder is asked first and has `proof_s` for its proof. RigInUse where it gives none and `take_over` is not set;
    else it is killed, and this process does it.
    """
    addresses = [instrument.address for instrument in use.rig.instruments.values()]
    try:
        with RigLock(addresses, COMMAND, "switches the rig off"):
            return off(use, clock), None
    except RigInUse as error:
        holder = error.holder if isinstance(error.holder, Holder) else None
    if _obeys(holder, wall):
        return Off(("drive", "supply"), {}, 0.0), holder
    if not take_over:
        raise RigInUse(
            f"the holder was ordered off and gave no proof within {BOUNDS['proof_s']:g} s",
            value=str(holder or "a process that does not say who it is"),
            remedy="Cut the supply by hand, or take over by force: the same command with --take-over",
            topic="unattended",
        )
    _kill(addresses, wall)
    with RigLock(addresses, COMMAND, "switches the rig off"):
        return off(use, clock), holder


def _obeys(holder: Holder | None, wall: Clock) -> bool:
    """Order the run that holds the rig off; True when its request was carried out: off, and shown to be."""
    if holder is None or not holder.run:
        return False
    try:
        file = ask(Path(holder.run), "off")
    except SweeprigError:
        return False
    until = wall.now() + BOUNDS["proof_s"]
    while file.exists() and wall.now() < until:
        wall.wait(wall.now() + 0.05)
    return not file.exists()


def _kill(addresses: list[str], wall: Clock) -> None:
    """Kill who commands the rig and who has its links, and wait until both locks are free: then they are gone."""
    until = wall.now() + BOUNDS["kill_s"]
    while held := [one for part in (COMMAND, LINK) for one in RigLock(addresses, part, "looks").held_by()]:
        if wall.now() >= until:
            raise RigError(
                "the holder of the rig could not be killed",
                value="; ".join(str(holder or "it does not say who it is") for holder in held),
                remedy="Cut the supply by hand, then end that process",
                topic="unattended",
            )
        for holder in held:
            if holder is not None and holder.host == socket.gethostname() and holder.pid != os.getpid():
                with suppress(OSError):
                    os.kill(holder.pid, getattr(signal, "SIGKILL", signal.SIGTERM))
        wall.wait(wall.now() + 0.05)
