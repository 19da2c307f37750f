"""The duty of each hold on a drive by taps, and the doubt about a potentiometer whose taps break the order.

The map itself is `taps`, the same as `schedule` chooses by; here the measured duty of a tap counts as it is.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from sweeprig.holds import Outcome
from sweeprig.plan import Plan, TapPlan
from sweeprig.taps import TapMap, TapsSeen, tap_map, value_of

NOT_MONOTONE = "tap_map_not_monotone"
NOT_MEASURED = "duty_of_tap_not_measured"


def known_map(plan: Plan, taps: TapPlan, outcomes: Sequence[Outcome]) -> TapMap:
    """The map that all `outcomes` (done) show."""
    seen = TapsSeen(plan.roles.get("duty"), plan.roles.get("pwm_frequency"))
    for outcome in outcomes:
        seen.add(outcome)
    return tap_map(taps, seen.taps)


def duty_of_taps(
    plan: Plan, known: TapMap, outcomes: Sequence[Outcome]
) -> tuple[dict[int, float], float, tuple[str, ...]]:
    """(hold number → duty %, u common to all, flags) of holds at a tap.

    A tap repeats its duty far better than an instrument reads it, so the readings at one tap are taken together
    (median). A tap that was never read has what the map expects of it, and its flag.
    """
    channel = plan.roles.get("duty")
    read: dict[int, list[float]] = {}
    us = []
    at_tap = [outcome for outcome in outcomes if outcome.hold.tap is not None]
    for outcome in at_tap:
        reading = value_of(outcome.means, channel)
        if outcome.hold.tap is not None and reading is not None and reading.value is not None:
            read.setdefault(outcome.hold.tap, []).append(reading.value)
            us.append(reading.u)
    measured = {tap: float(np.median(values)) for tap, values in read.items()}
    flags = {NOT_MONOTONE} if known.faulty else set()
    of = {}
    for outcome in at_tap:
        tap = outcome.hold.tap
        if tap is not None:
            flags |= set() if tap in measured else {NOT_MEASURED}
            of[outcome.number] = measured.get(tap, float(known.duty[min(tap, known.duty.size - 1)]))
    return of, float(np.median(us)) if us else float(np.median(known.u)), tuple(sorted(flags))


def doubts(plan: Plan, outcomes: Sequence[Outcome]) -> tuple[Mapping[str, Any], ...]:
    """One suspicion for each tap that does not lie between its neighbours. outcomes: all, also discarded ones."""
    if plan.taps is None:
        return ()
    seen = TapsSeen(plan.roles.get("duty"))
    for outcome in outcomes:
        seen.add(outcome)
    gave = {tap: one.duty / one.count for tap, one in seen.taps.items() if one.count}
    return tuple(
        {
            "what": f"tap {tap} of the digital potentiometer is out of order: a wiper or ladder fault",
            "evidence": _neighbours(tap, gave),
            "rule": NOT_MONOTONE,
        }
        for tap in tap_map(plan.taps, seen.taps).faulty
    )


def _neighbours(tap: int, gave: Mapping[int, float]) -> str:
    """What it and the measured taps on either side gave."""
    order = sorted(gave)
    place = order.index(tap)
    near = order[max(place - 1, 0) : place + 2]
    return "measured duty " + ", ".join(f"{gave[one]:.4g} % at tap {one}" for one in near)
