"""Bringing links back: resynchronise or reopen, ask who it is, check that it is the same one, configure, prove off.

Everything here happens with the drive told to be off. Within one session each instrument is brought back at most
`heal_attempts` times; then the run gives up and says so.
"""

from __future__ import annotations

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.rig import OpenRig, configure, identify, named, same_instruments
from sweeprig.conduct.switch_off import prove_off, switch_off
from sweeprig.errors import LinkError, RigError


def broken(rig: OpenRig) -> list[str]:
    """Instruments whose link cannot be used as it is."""
    return [name for name, link in rig.links.items() if link.dirty or not link.identified]


def heal(rig: OpenRig, used: dict[str, int]) -> list[str]:
    """Bring back every broken link; `used` counts the attempts of this session by instrument. Returns their names.

    Raises the last link error when an instrument cannot be brought back within its attempts.
    """
    switch_off(rig)
    names = broken(rig)
    saved = dict(rig.identities)
    for name in names:
        _bring_back(rig, name, used)
    identify(rig, names)
    same_instruments(rig, saved)
    configure(rig)
    switch_off(rig)
    prove_off(rig)
    return names


def _bring_back(rig: OpenRig, name: str, used: dict[str, int]) -> None:
    link, clock = rig.links[name], rig.clock
    while True:
        used[name] = used.get(name, 0) + 1
        if used[name] > BOUNDS["heal_attempts"]:
            raise RigError(
                f"{name}: the link was lost {used[name]} times in this session and is given up",
                value=link.dirty or "silent",
                remedy="look at the cable and the instrument, then resume the run",
                topic="links",
            )
        link.identified = False
        try:
            link.resynchronise(clock.now() + BOUNDS["open_s"])
        except LinkError as error:
            if used[name] >= BOUNDS["heal_attempts"]:
                raise named(name, error) from error
            clock.wait(clock.now() + BOUNDS["heal_pause_s"])
        else:
            return
