"""Means over the cycles of a hold that count, with their uncertainty, and what a settled hold says of it. Pure."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

from sweeprig.conduct.settle import Settled, mean_and_u
from sweeprig.quantities import Reading

Cycle = dict[str, Reading]


def means_of(cycles: Sequence[Cycle]) -> Cycle:
    """Channel → mean over the cycles that gave data; u: standard error of the mean and the instrument's accuracy
    (common to all its readings, so it does not average down), added in squares."""
    means: Cycle = {}
    if not cycles:
        return means
    for channel, last in cycles[-1].items():
        if channel.endswith((".edge_age", ".edge_gap")):
            continue
        good = [
            reading for cycle in cycles if (reading := cycle.get(channel)) is not None and reading.value is not None
        ]
        if not good:
            continue
        mean, u_mean = mean_and_u([reading.value for reading in good if reading.value is not None])
        u_instrument = sum(reading.u for reading in good) / len(good)
        flags = tuple(sorted({flag for reading in good for flag in reading.flags}))
        means[channel] = Reading(mean, math.hypot(u_mean, u_instrument), last.unit, last.at, channel, flags)
    return means


def settled_means(cycles: Sequence[Cycle], since: float, speed: str, found: Settled | None) -> Cycle:
    """`means_of` the cycles read from `since` (run clock, s) on. The speed's u is also no less than what is known of
    its distance from the final value: what is left of the approach, and a slow drift over the window, are in it."""
    counted = [cycle for cycle in cycles if max(reading.at for reading in cycle.values()) >= since]
    means = means_of(counted)
    mean = means.get(speed)
    if found is None or mean is None:
        return means
    read = [reading for cycle in counted if (reading := cycle.get(speed)) is not None and reading.value is not None]
    u_instrument = sum(reading.u for reading in read) / len(read)
    minutes = (read[-1].at - read[0].at) / 60.0
    drifted = found.drift_percent_per_minute / 100.0 * found.mean * minutes / math.sqrt(12.0)
    return means | {speed: replace(mean, u=max(mean.u, math.hypot(found.u, u_instrument, drifted)))}


def settling_flags(found: Settled | None) -> tuple[str, ...]:
    """What the outcome says of a hold that ended with the rotor turning."""
    if found is None:
        return ("not_settled_to_tolerance:too few speed readings",)
    flags = [] if found.decided else [f"not_settled_to_tolerance:{found.reached_percent:.2g}%"]
    if found.drifting:
        flags.append(f"still_drifting:{found.drift_percent_per_minute:+.2g}%/min")
    return tuple(flags)
