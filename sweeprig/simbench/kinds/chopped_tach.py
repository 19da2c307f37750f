"""The tachometer of a fan whose supply is chopped: its open collector lets go in every off-time, so the line goes high.

A counter of falling edges then counts PWM periods wherever the output should be low. Pure; no rotor here.
"""

from __future__ import annotations

import math
from collections.abc import Callable


def falls(
    start: float,
    end: float,
    seconds: float,
    when: Callable[[float], float],
    phase_s: float,
    period_s: float,
    on_s: float,
) -> tuple[int, float]:
    """(falling edges, when the last came) in a stretch of `seconds` in which the shaft goes from `start` to `end`.

    start, end   in tachometer pulses; the output is low in the first half of each (falling at whole numbers)
    when         pulse → time of it within the stretch, s
    phase_s      time since an on-time began, at the begin of the stretch; on_s: on-time of each `period_s`
    A falling edge comes where the output goes low within an on-time, and at the begin of each on-time while it is low.
    """
    count, last = 0, 0.0
    for whole in range(math.floor(start), math.floor(end) + 1):
        low_from = 0.0 if whole <= start else when(float(whole))
        if whole + 0.5 <= start:
            continue
        low_until = seconds if whole + 0.5 > end else when(whole + 0.5)
        if whole > start and (phase_s + low_from) % period_s < on_s:
            count, last = count + 1, low_from
        begun = math.floor((phase_s + low_until) / period_s)
        starts = begun - math.floor((phase_s + low_from) / period_s)
        if starts > 0:
            count, last = count + starts, begun * period_s - phase_s
    return count, last
