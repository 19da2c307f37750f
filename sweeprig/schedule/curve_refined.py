"""Curve points where the curve bends, and replicates, until the speed curve is known as asked. A source.

What counts is what more holds can mend: the scatter between holds at one setting, and how far the truth may lie from
the chord between two levels. The instruments' accuracy is not in it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import interpolate, special

from sweeprig.holds import Approach, Purpose
from sweeprig.plan import CurvePlan, Plan
from sweeprig.schedule.curve_points import curve_hold, flows_on, relaunch
from sweeprig.schedule.proposal import Here, Proposal
from sweeprig.schedule.tally import Tally

REPLICATED = 3
"""Levels with replicates that a test for lack of fit needs (definitions: replicate holds at three duties or more)."""
SURE = 0.8
NARROWEST_PERCENT = 0.5
"""No two levels nearer than this: a smooth curve between them would follow the scatter."""


@dataclass(frozen=True, slots=True)
class Wanted:
    """A hold at `duty_percent` for which the curve is uncertain by `u_rpm`; why: the rest of a sentence for people."""

    duty_percent: float
    u_rpm: float
    why: str


def refined_curve(plan: Plan, here: Here) -> Proposal | None:
    """One more hold of the falling branch where the curve is least certain; the condition with the largest first."""
    curve, tally = plan.curve, here.tally
    if curve is None or curve.standard_error_percent is None:
        return None
    wanted = least_certain(curve, tally)
    if wanted is None:
        return None
    duty = wanted.duty_percent
    lead = () if flows_on(here, plan.session, duty) else relaunch(plan, duty)
    why = f"Speed curve, falling: the settled speed at {duty:.4g} %: {wanted.why}."
    hold = curve_hold(plan, curve, here, Approach.FALLING, duty, why, lead)
    return Proposal(hold, (-wanted.u_rpm,), spare=True)


def least_certain(curve: CurvePlan, tally: Tally) -> Wanted | None:
    """Where one more hold helps most; None when the curve is known everywhere as asked, or its holds are used up."""
    speeds = {duty: found for duty, found in sorted(tally.speeds.items()) if found}
    if len(speeds) < 3 or tally.curve_holds >= curve.most_points or curve.standard_error_percent is None:
        return None
    asked = curve.standard_error_percent / 100.0 * max(float(np.mean(found)) for found in speeds.values())
    open_ = [one for one in _candidates(speeds, asked) if not _passed_over(tally, one)]
    return max(open_, key=lambda one: (one.u_rpm, -one.duty_percent), default=None)


def _passed_over(tally: Tally, wanted: Wanted) -> bool:
    """Discarded three times, or the rotor stopped there: then it is the searches' business."""
    if tally.falling.get(round(wanted.duty_percent, 6)) is False:
        return True
    return tally.passed_over(Purpose.CURVE, Approach.FALLING, wanted.duty_percent)


def _candidates(speeds: Mapping[float, Sequence[float]], asked: float) -> list[Wanted]:
    missing = _unreplicated(speeds)
    if missing is not None:
        why = "a replicate shows how far single holds scatter"
        return [Wanted(missing, math.inf, why)]
    duty = np.array(list(speeds))
    mean = np.array([np.mean(found) for found in speeds.values()])
    one_hold = _scatter(speeds)
    count = np.array([len(found) for found in speeds.values()])
    found = []
    for level, u in zip(duty, one_hold / np.sqrt(count), strict=True):
        if u > asked:
            why = f"holds scatter, and its mean is known to {u:.2g} rpm, {asked:.2g} rpm are asked for"
            found.append(Wanted(float(level), float(u), why))
    middle = (duty[1:] + duty[:-1]) / 2.0
    bend = np.abs(interpolate.PchipInterpolator(duty, mean)(middle) - (mean[1:] + mean[:-1]) / 2.0) / math.sqrt(3.0)
    for place, u, width in zip(middle, bend, np.diff(duty), strict=True):
        if u > asked and width >= 2.0 * NARROWEST_PERCENT:
            why = f"the curve bends here, and lies within {u:.2g} rpm; {asked:.2g} rpm are asked for"
            found.append(Wanted(round(float(place), 4), float(u), why))
    return found


def _unreplicated(speeds: Mapping[float, Sequence[float]]) -> float | None:
    """The next of lowest, middle and highest level without a replicate, while fewer than three levels have one."""
    if sum(len(found) > 1 for found in speeds.values()) >= REPLICATED:
        return None
    levels = list(speeds)
    for level in (levels[0], levels[len(levels) // 2], levels[-1], *levels):
        if len(speeds[level]) < 2:
            return level
    return None


def _scatter(speeds: Mapping[float, Sequence[float]]) -> float:
    """Standard deviation between holds at one setting, pooled over the replicates, rpm: its one-sided 80 % bound, since
    that of three pairs alone is a third of the true one too often."""
    groups = [np.asarray(found) for found in speeds.values() if len(found) > 1]
    square = sum(float(((group - group.mean()) ** 2).sum()) for group in groups)
    freedom = sum(group.size - 1 for group in groups)
    return math.sqrt(square / float(special.chdtri(freedom, SURE))) if freedom else 0.0
