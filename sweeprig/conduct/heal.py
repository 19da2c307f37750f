"""Bringing a rig into order: broken links back, everyone the same one as before and configured, off proved.

Everything here happens with the drive told to be off. Each instrument is brought back at most `heal_attempts` times,
counted anew after holds that went well; then the run gives up and says so.
"""

from __future__ import annotations

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.rig import Look, OpenRig, configure, identify, named, same_instruments
from sweeprig.conduct.switch_off import drive_off, prove_off, switch_off
from sweeprig.errors import InstrumentRefused, LinkError, RigError

_REFUSED = "a refused setting"
"""Counted beside the instruments' names, which have no blanks."""


def broken(rig: OpenRig) -> list[str]:
    """Instruments whose link cannot be used as it is."""
    return [name for name, link in rig.links.items() if link.dirty or not link.identified]


def heal(rig: OpenRig, used: dict[str, int], look: Look) -> list[str]:
    """Bring back every broken link, configure everyone, prove off. `used` counts the attempts of this session by
    instrument. Returns the names of those brought back; with none broken it is how a session begins. `look` is called
    before each attempt and while it pauses: what it raises ends the healing.

    A link that breaks on the way is brought back too: each round costs an attempt, so this ends. Raises the last link
    error when an instrument cannot be brought back within its attempts, and every error that is no link's.
    """
    saved, names = dict(rig.identities), dict[str, None]()
    while True:
        switch_off(rig)
        waiting = broken(rig)
        for name in waiting:
            if name in names:
                # Drained before, to no avail: a port that looks alive may be a dead one. The drive is off, so that an
                # instrument which restarts when its port is opened does no harm.
                rig.links[name].close()
            _bring_back(rig, name, used, look)
        names.update(dict.fromkeys(waiting))
        try:
            identify(rig, waiting)
            same_instruments(rig, saved)
            configure(rig)
            drive_off(rig, supply_too=True)
            prove_off(rig)
        except InstrumentRefused:
            # One that restarts while it is configured reads back wrong; one that goes on refusing is not to be healed.
            used[_REFUSED] = used.get(_REFUSED, 0) + 1
            if used[_REFUSED] >= BOUNDS["heal_attempts"]:
                raise
        except RigError:
            if not broken(rig):
                raise
        else:
            return list(names)


def _bring_back(rig: OpenRig, name: str, used: dict[str, int], look: Look) -> None:
    link, clock = rig.links[name], rig.clock
    while True:
        look()
        used[name] = used.get(name, 0) + 1
        if used[name] > BOUNDS["heal_attempts"]:
            raise RigError(
                f"{name}: the link was lost {used[name]} times with hardly a hold between",
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
            until = clock.now() + BOUNDS["heal_pause_s"] * 2.0 ** (used[name] - 1)
            while clock.now() < until:
                look()
                clock.wait(min(until, clock.now() + BOUNDS["beat_s"]))
        else:
            return
