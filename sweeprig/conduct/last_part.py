"""Which readings of a run-in's or a reference hold count, and the mean speed by which such holds are compared. Pure."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from sweeprig.conduct.settle import mean_and_u
from sweeprig.holds import Hold, Purpose
from sweeprig.quantities import Reading
from sweeprig.steady import LAST_PART, STEADY_SPEED

Cycle = dict[str, Reading]
_COMPARED = (Purpose.RUN_IN, Purpose.REFERENCE)


def last_part(hold: Hold, cycles: Sequence[Cycle]) -> list[Cycle]:
    """All cycles of most holds; of those that are compared with one another only the last, when the speed has come to
    rest as far as it will."""
    first = int((1.0 - LAST_PART) * len(cycles)) if hold.purpose in _COMPARED else 0
    return list(cycles[first:])


def steady_speed(hold: Hold, cycles: Sequence[Cycle], speed: str) -> Cycle:
    """{STEADY_SPEED: mean of channel `speed`} of a hold that is compared with others, else nothing.

    u: of the mean, without the instrument's accuracy, which such holds have in common. Readings that are all alike show
    a tachometer's steps and not that there is no scatter: then the instrument's own u stands for it.
    """
    if hold.purpose not in _COMPARED:
        return {}
    read = [one for cycle in cycles if (one := cycle.get(speed)) is not None and one.value is not None]
    if not read:
        return {}
    mean, u = mean_and_u([one.value for one in read if one.value is not None])
    return {STEADY_SPEED: replace(read[-1], value=mean, u=u or read[-1].u, channel=STEADY_SPEED, flags=())}
