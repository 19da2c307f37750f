"""Timing a kick-start pulse over real links: how long it is made, how long it was, and how well that is known.

No drive here times a pulse itself, so it is the host's: the pulse begins while the drive is told to switch on and ends
while it is told the run duty. Each moment lies somewhere in its exchange, and counts as a rectangle over it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.exposures import KICK_AMPS, KICK_PULSE
from sweeprig.holds import Hold, Verdict
from sweeprig.quantities import Reading

if TYPE_CHECKING:
    from sweeprig.conduct.perform import Performed, Performer

Between = tuple[float, float]
"""A moment is known to lie between these two (run clock, s)."""


@dataclass(slots=True)
class Pulse:
    """One pulse. began: between these moments the drive switched on; lead_s: telling it a new duty takes so long."""

    began: Between
    lead_s: float
    amps: list[Reading] = field(default_factory=list)

    def until(self, seconds: float) -> float:
        """When the run duty must be told, so that the middle of that exchange lies `seconds` after the beginning."""
        return _middle(self.began) + seconds - 0.5 * self.lead_s

    def readings(self, ended: Between) -> dict[str, Reading]:
        """The pulse as it was, and the mean current of what was read within it."""
        seconds = _middle(ended) - _middle(self.began)
        u = math.hypot(_width(self.began), _width(ended)) / math.sqrt(12.0)
        found = {KICK_PULSE: Reading(seconds, u, "s", ended[1], KICK_PULSE)}
        values = [reading.value for reading in self.amps if reading.value is not None]
        if values:
            u_mean = math.sqrt(sum((value - sum(values) / len(values)) ** 2 for value in values)) / len(values)
            accuracy = sum(reading.u for reading in self.amps if reading.value is not None) / len(values)
            mean = sum(values) / len(values)
            found[KICK_AMPS] = Reading(mean, math.hypot(u_mean, accuracy), "A", ended[1], KICK_AMPS)
        return found


def _middle(between: Between) -> float:
    return 0.5 * (between[0] + between[1])


def _width(between: Between) -> float:
    return between[1] - between[0]


def begin(performer: Performer, hold: Hold, duty: float, seconds: float, done: Performed) -> Pulse:
    """From rest to the kick duty, and on until it is time to tell the run duty: reading while a whole averaging window
    fits, then waiting with a look at least every `look_s`."""
    performer.apply(hold.condition, duty, done)
    rig, clock = performer.rig, performer.rig.clock
    pulse = Pulse(performer.changed, performer.apply_s)
    until, names = pulse.until(seconds), rig.serving(("speed", "current"))
    window_s = took_s = BOUNDS["kick_window_s"]
    while until - clock.now() > took_s + BOUNDS["kick_spare_s"]:
        asked = clock.now()
        readings = performer.cycle(names, window_s, hold, done)
        took_s = max(took_s, clock.now() - asked)
        if "current" in rig.roles:
            pulse.amps.append(readings[rig.roles["current"]])
    while (now := clock.now()) < until:
        performer.watch.look()
        clock.wait(min(until, now + BOUNDS["look_s"]))
    return pulse


def conclude(done: Performed, pulse: Pulse | None, ended: Between) -> None:
    """A rotor that turned to the end of the hold time was started; one that stopped, whenever, was not."""
    if pulse is not None:
        done.means.update(pulse.readings(ended))
    if done.verdict is Verdict.TURNING:
        done.verdict = Verdict.STARTED
    elif done.verdict is Verdict.STOPPED:
        done.verdict = Verdict.DID_NOT_START
