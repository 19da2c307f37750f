"""`sweeprig off`: drive and supply off, on all links at once, then the proof; also on a rig that a run holds.

An instrument that cannot be reached never keeps another one from being told, nor does a meter that is set up wrongly.
"""

from __future__ import annotations

import os
import signal
import socket
from collections.abc import Callable, Mapping
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sweeprig.clock import Clock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.locks import COMMAND, LINK, Holder, RigLock
from sweeprig.conduct.requests import CONFIRMED, ask
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


@dataclass(frozen=True, slots=True)
class Switched:
    """A rig that was switched off and shown to be off.

    off      what this process did; None where the holder did it
    holder   who had the rig; None for one that was free
    took_s   real seconds, from the order to the proof
    """

    off: Off | None
    holder: Holder | None
    took_s: float


def off_or_order(
    use: RigUse, clock: Clock, wall: Clock, take_over: bool, say: Callable[[str], None] = lambda _: None
) -> Switched:
    """Off on this rig, whoever has it.

    A run that has it is ordered off. It has `proof_s` to have drive and supply confirm, and then the time that the
    rotor takes to come to rest for its proof. RigInUse where it does not and `take_over` is not set; else it is killed,
    and this process does it. `say` is told what is being waited for.
    """
    began = wall.now()
    addresses = [instrument.address for instrument in use.rig.instruments.values()]
    done, holder = _if_free(use, clock, addresses)
    if done is not None:
        return Switched(done, None, wall.now() - began)
    why = _obeys(holder, wall, say)
    if not why:
        return Switched(None, holder, wall.now() - began)
    done, now_held_by = _if_free(use, clock, addresses)  # it may have ended meanwhile, obeying or not
    if done is not None:
        return Switched(done, None, wall.now() - began)
    if not take_over:
        raise RigInUse(
            f"the rig is in use, and its holder {why}",
            value=str(now_held_by or "a process that does not say who it is"),
            remedy="Cut the supply by hand, or take over by force: the same command with --take-over",
            topic="unattended",
        )
    say(f"{now_held_by or 'the holder'} {why}: it is killed")
    _kill(addresses, wall)
    with RigLock(addresses, COMMAND, "switches the rig off"):
        return Switched(off(use, clock), now_held_by or holder, wall.now() - began)


def _if_free(use: RigUse, clock: Clock, addresses: list[str]) -> tuple[Off | None, Holder | None]:
    """Off by this process where nobody has the rig; else who has it."""
    try:
        with RigLock(addresses, COMMAND, "switches the rig off"):
            return off(use, clock), None
    except RigInUse as error:
        return None, error.holder if isinstance(error.holder, Holder) else None


def _obeys(holder: Holder | None, wall: Clock, say: Callable[[str], None]) -> str:
    """Order the run that holds the rig off; "" when it was carried out: off, and shown to be. Else why not."""
    until = wall.now() + BOUNDS["proof_s"]
    if holder is None or not holder.run:
        wall.wait(until)  # another `off`, or a runner that lost its supervisor: both are just switching off
        return f"takes no orders; it had {BOUNDS['proof_s']:g} s to end by itself"
    try:
        file = ask(Path(holder.run), "off")
    except SweeprigError as error:
        return f"could not be ordered off ({error.what})"
    say(f"ordered off: {holder}")
    _wait_while(file, until, wall)
    if file.exists():
        return f"was ordered off and did not confirm it within {BOUNDS['proof_s']:g} s"
    confirmed = file.with_name(CONFIRMED)
    if confirmed.exists():
        say("drive and supply confirmed that they are off; waiting for the rotor to come to rest, which is the proof")
        _wait_while(confirmed, wall.now() + BOUNDS["obey_s"], wall)
    if confirmed.exists():
        return f"had drive and supply confirm, but gave no proof within {BOUNDS['obey_s']:g} s"
    return ""


def _wait_while(file: Path, until: float, wall: Clock) -> None:
    while file.exists() and wall.now() < until:
        wall.wait(wall.now() + BOUNDS["look_s"])


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
        wall.wait(wall.now() + BOUNDS["look_s"])
