"""Findings from the speed curve: what the motor does at the stall, at the top, and how usable the range between is.

Takes fitted curves and thresholds; which holds they rest on was decided in `evidence`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from sweeprig.characterise.combine import K_TWO_SIDED, ONE_SIDED, TWO_SIDED, carried, summary
from sweeprig.characterise.curve import LEAST_FREEDOM, Curve, Level, levels, pooled_scatter
from sweeprig.characterise.duties_found import TAIL, Threshold
from sweeprig.characterise.evidence import Point
from sweeprig.characterise.findings import Finding, UsableRange, not_found
from sweeprig.laws import Floats
from sweeprig.taps import TapMap

SEGMENTS = 3
LEAST_APART_PERCENT = 2.0
_ACCURACY = "accuracy of an instrument common to all its readings, not averaged down"


@dataclass(frozen=True, slots=True)
class Branch:
    """The falling branch of one quantity. sure: lowest duty above every stop, None where there is none."""

    curve: Curve
    sure: float | None

    def flags(self, *duties: float) -> tuple[str, ...]:
        """`extrapolated` beyond the readings; `from_survivors` below the last duty that always turned."""
        low, high = min(duties), max(duties)
        flags = list(self.curve.flags)
        if low < self.curve.duty[0] - 1e-9 or high > self.curve.duty[-1] + 1e-9:
            flags.append("extrapolated")
        elif self.sure is None or low < self.sure - 1e-9:
            flags.append("from_survivors")
        return tuple(flags)


def two_sided(value: float, u: float, holds: tuple[int, ...], method: str, flags: tuple[str, ...] = ()) -> Finding:
    """A finding with a normal 95 % interval, k = 1.96."""
    return Finding(
        value=value,
        u=u,
        low=value - K_TWO_SIDED * u,
        high=value + K_TWO_SIDED * u,
        coverage_probability=TWO_SIDED,
        coverage_factor=K_TWO_SIDED,
        holds=holds,
        method=method,
        assumes=(_ACCURACY,),
        flags=flags,
    )


def at_stall(branch: Branch | None, stall: Threshold, what: str) -> Finding:
    """The branch's quantity at the stall duty: the stall duty's whole distribution carried through the curve.

    The accuracy of duty is left out: it moves stall duty and curve alike. A stall duty that is only a bound gives one.
    """
    if branch is None:
        return not_found(f"no {what} readings at two duties of the falling branch")
    if not stall.evidence.holds:
        return not_found(stall.reason)
    sample = stall.sample(0.5)
    holds = tuple(sorted({*branch.curve.holds, *stall.evidence.holds}))
    if sample is None:
        return _at_stall_bound(branch, stall, what, holds)
    # neither a speed on this branch nor the mean voltage that drives it can be below zero
    shown = summary([np.maximum(carried(sample, branch.curve.at, branch.curve.u_at), 0.0)])
    return Finding(
        value=shown.value,
        u=shown.u,
        low=shown.low,
        high=shown.high,
        coverage_probability=TWO_SIDED,
        coverage_factor=shown.coverage_factor,
        holds=holds,
        method=f"distribution of the stall duty carried through the falling {what} curve (means weighted by exposure)",
        assumes=(_ACCURACY,),
        flags=tuple(sorted({*branch.flags(float(np.median(sample))), *stall.flags})),
    )


def _at_stall_bound(branch: Branch, stall: Threshold, what: str, holds: tuple[int, ...]) -> Finding:
    duty, upper = stall.bound(0.5, widen=False), not stall.evidence.failures
    value, u = branch.curve.one(duty)
    return Finding(
        value=value,
        u=u,
        low=None if upper else value,
        high=value if upper else None,
        bound="upper" if upper else "lower",
        coverage_probability=ONE_SIDED,
        holds=holds,
        method=f"fitted {what} at the bound of the stall duty",
        assumes=(_ACCURACY,),
        flags=tuple(sorted({*branch.flags(duty), *stall.flags, stall.kind.flags[0 if upper else 1]})),
    )


def lowest_reliable_speed(branch: Branch | None, stall: Threshold) -> Finding:
    """The fitted speed at the one-sided 95 % upper bound of sustain_99: a bound. u: of the fitted speed there."""
    if branch is None:
        return not_found("no speed readings at two duties of the falling branch")
    limit = stall.upper(TAIL)
    if not limit.found:
        return not_found(limit.reason, flags=limit.flags)
    duty = stall.bound(TAIL, widen=False)
    value, u = branch.curve.one(duty)
    return Finding(
        value=value,
        u=u,
        high=value,
        bound="upper",
        coverage_probability=ONE_SIDED,
        holds=tuple(sorted({*branch.curve.holds, *stall.evidence.holds})),
        method="fitted speed of the falling branch at the one-sided 95 % upper bound of sustain_99",
        assumes=(_ACCURACY,),
        flags=tuple(sorted({*branch.flags(duty), *stall.flags})),
    )


def top_speed(branch: Branch | None) -> Finding:
    """The highest fitted speed of the falling branch within the duties allowed."""
    if branch is None:
        return not_found("no speed readings at two duties of the falling branch")
    curve = branch.curve
    value, u = curve.one(float(curve.duty[-1]))
    return two_sided(value, u, curve.holds, "highest fitted speed of the falling branch", curve.flags)


TOP_MISSING = "highest_duty_missing"


def without_top(top: Finding, within: UsableRange) -> tuple[Finding, UsableRange]:
    """The top speed and the upper end of the range, flagged: the highest duty asked for gave no speed."""

    def flagged(found: Finding) -> Finding:
        return replace(found, flags=tuple(sorted({*found.flags, TOP_MISSING})))

    return flagged(top), replace(
        within,
        high_duty_percent=flagged(within.high_duty_percent),
        high_speed_rpm=flagged(within.high_speed_rpm),
        turndown=flagged(within.turndown),
    )


def high_duty(branch: Branch | None, saturation_percent: float, u_duty: float) -> Finding:
    """The lowest duty whose fitted speed is within `saturation_percent` of the highest.

    A ratio of speeds of one instrument: its accuracy cancels. u from the free parts of both speeds over the slope, and
    as a rectangle the distance to the nearest level: where the curve was not seen it may bend (a slow PWM gives a step
    in the last few percent before full duty).
    """
    if branch is None:
        return not_found("no speed readings at two duties of the falling branch")
    curve, share = branch.curve, 1.0 - saturation_percent / 100.0
    duty, speed = curve.dense(float(curve.duty[0]), float(curve.duty[-1]))
    index = int(np.argmax(speed >= share * speed[-1]))
    value = _crossing(duty, speed, index, share * float(speed[-1]))
    free = curve.u_free_at(np.array([value, float(curve.duty[-1])]))
    slope = float(np.gradient(speed, duty)[index])
    u_speed = math.hypot(float(free[0]), share * float(free[1]))
    span = float(curve.duty[-1] - curve.duty[0]) / math.sqrt(12.0)
    # on a flat top the place is known no better than by the whole width of the curve
    u_place = min(u_speed / slope, span) if slope > 0.0 else span
    u = math.hypot(u_place, u_duty, float(np.abs(curve.duty - value).min()) / math.sqrt(3.0))
    method = f"lowest duty within {saturation_percent:g} % of top speed"
    found = two_sided(value, u, curve.holds, method, curve.flags)
    # no duty outside the measured ones can be the answer
    return replace(
        found,
        low=max(value - K_TWO_SIDED * u, float(curve.duty[0])),
        high=min(value + K_TWO_SIDED * u, float(curve.duty[-1])),
    )


def _crossing(duty: Floats, speed: Floats, index: int, wanted: float) -> float:
    """Duty where the speed reaches `wanted`, between the dense points index − 1 and index."""
    if index == 0:
        return float(duty[0])
    part = (wanted - float(speed[index - 1])) / float(speed[index] - speed[index - 1])
    return float(duty[index - 1] + part * (duty[index] - duty[index - 1]))


def usable_range(
    branch: Branch | None, stall: Threshold, start: Threshold, saturation_percent: float, u_duty: float
) -> UsableRange:
    """From the lowest reliable duty to the lowest duty where more duty hardly gives more speed."""
    high, low_speed = high_duty(branch, saturation_percent, u_duty), lowest_reliable_speed(branch, stall)
    high_speed = not_found(high.reason)
    if branch is not None and high.value is not None:
        value, u = branch.curve.one(high.value)
        high_speed = two_sided(value, u, branch.curve.holds, "fitted speed at high_duty_percent", branch.curve.flags)
    return UsableRange(
        low_duty_percent=stall.upper(TAIL),
        low_duty_from_rest_percent=start.upper(TAIL),
        high_duty_percent=high,
        low_speed_rpm=low_speed,
        high_speed_rpm=high_speed,
        turndown=_turndown(high_speed, low_speed),
    )


def _turndown(high: Finding, low: Finding) -> Finding:
    if high.value is None or low.value is None:
        return not_found(low.reason or high.reason)
    if low.value <= 0.0:
        return not_found("the lowest reliable speed is not above zero", flags=low.flags)
    value = high.value / low.value
    return Finding(
        value=value,
        low=value,
        bound="lower",
        coverage_probability=ONE_SIDED,
        holds=low.holds,
        method="high_speed_rpm over low_speed_rpm",
        assumes=("the lowest reliable speed is an upper bound, so this is a lower one",),
        flags=tuple(sorted({*low.flags, *high.flags})),
    )


def _span(branch: Branch | None, within: UsableRange) -> tuple[Curve, float, float] | None:
    low, high = within.low_duty_percent.value, within.high_duty_percent.value
    if branch is None or low is None or high is None:
        return None
    low = max(low, float(branch.curve.duty[0]))
    return (branch.curve, low, high) if high > low else None


def linearity(branch: Branch | None, within: UsableRange) -> Finding:
    """The largest distance of the fitted curve from its least-squares straight line over the usable range, as percent
    of the speed span there (independent linearity)."""
    span = _span(branch, within)
    if span is None:
        return not_found("no usable range was found")
    curve, low, high = span
    duty, speed = curve.dense(low, high)
    away = np.abs(speed - np.polynomial.Polynomial.fit(duty, speed, 1)(duty))
    index, full = int(np.argmax(away)), float(speed[-1] - speed[0])
    if full <= 0.0:
        return not_found("the speed does not rise over the usable range")
    u = float(curve.u_free_at(duty[index : index + 1])[0]) / full * 100.0
    method = f"largest distance from the least-squares line over the usable range, at {duty[index]:.1f} % duty"
    return two_sided(float(away[index]) / full * 100.0, u, curve.holds, method, curve.flags)


def resolution(
    branch: Branch | None, within: UsableRange, step_percent: float | None, taps: TapMap | None = None
) -> Finding:
    """The largest speed step for one step of the drive within the usable range, rpm; by taps: for the mean
    step from one to the next in that place, of which `taps` knows."""
    span = _span(branch, within)
    if span is None:
        return not_found("no usable range was found")
    if step_percent is None or step_percent <= 0.0:
        return not_found("the drive does not state its duty step")
    curve, low, high = span
    duty = _apart(curve, low, high)
    slope, random = np.diff(curve.at(duty)) / np.diff(duty), np.interp(duty, curve.duty, curve.u_random)
    steps = [(step_percent, 0.0)] * slope.size
    if taps is not None:
        steps = [taps.mean_step(*pair) for pair in zip(duty[:-1].tolist(), duty[1:].tolist(), strict=True)]
    steepest = int(np.argmax(slope * [step for step, _ in steps]))
    step_percent, u_step = steps[steepest]
    u_slope = math.hypot(*random[steepest : steepest + 2]) / float(duty[steepest + 1] - duty[steepest])
    where = f"from {duty[steepest]:.1f} to {duty[steepest + 1]:.1f} % duty"
    method = f"duty step {step_percent:.4g} % × steepest slope between levels of the usable range, {where}"
    u = math.hypot(u_slope * step_percent, float(slope[steepest]) * u_step)
    return two_sided(float(slope[steepest]) * step_percent, u, curve.holds, method, curve.flags)


def _apart(curve: Curve, low: float, high: float) -> Floats:
    """Levels from the last at or below `low` to the first at or above `high`, LEAST_APART_PERCENT or more from one
    another (two at the least). Between nearer levels a slope is mostly noise, and within an interval the smooth curve's
    own slope swings before a bend, so only slopes between levels are quoted."""
    first = max(int(np.searchsorted(curve.duty, low, side="right")) - 1, 0)
    last = min(int(np.searchsorted(curve.duty, high)), curve.duty.size - 1)
    kept = [float(curve.duty[first])]
    for duty in curve.duty[first + 1 : last].tolist():
        if duty - kept[-1] >= LEAST_APART_PERCENT and curve.duty[last] - duty >= LEAST_APART_PERCENT:
            kept.append(duty)
    return np.array([*kept, float(curve.duty[last])])


def curve_hysteresis(falling: Branch | None, rising: Sequence[Point]) -> Finding:
    """The largest difference of speed between the branches, rising levels against the falling curve, rpm.

    Where no hold was repeated the scatter is judged by these very differences, so u errs on the safe side.
    """
    found = levels(rising)
    if falling is None or not found:
        return not_found("the curve was not measured in both directions")
    curve = falling.curve
    inside = [level for level in found if curve.duty[0] <= level.duty_percent <= curve.duty[-1]]
    if not inside:
        return not_found("the branches have no duty in common")
    place = np.array([level.duty_percent for level in inside])
    away = np.array([level.value for level in inside]) - curve.at(place)
    index = int(np.argmax(np.abs(away)))
    # one rising hold scatters as one falling hold does there
    free = float(curve.u_free_at(place)[index])
    u = math.hypot(
        free, float(np.interp(place[index], curve.duty, curve.one_hold)) / math.sqrt(inside[index].effective_n)
    )
    direction = "rising above falling" if away[index] > 0.0 else "falling above rising"
    method = f"largest distance between the branches, at {place[index]:.1f} % duty, {direction}"
    holds = tuple(sorted({*curve.holds, *(hold for level in inside for hold in level.holds)}))
    return two_sided(abs(float(away[index])), u, holds, method, curve.flags)


def repeatability(points: Sequence[Point]) -> Finding:
    """One-sided 95 % upper bound of the standard deviation of settled speed at one setting, worst of three segments.

    Pooled in each segment; bound s·√(ν / χ²(0.05, ν)) for ν degrees of freedom (normal scatter).
    """
    rows = [row for segment in _segments(levels(points)) if (row := _bound_of_scatter(segment)) is not None]
    if not rows:
        return not_found("no duty segment has three holds at one setting, or two at two")
    bound, scatter, freedom, holds = max(rows, key=lambda row: row[0])
    return Finding(
        value=bound,
        high=bound,
        bound="upper",
        coverage_probability=ONE_SIDED,
        holds=holds,
        method=f"pooled standard deviation {scatter:.4g} rpm, {freedom} degrees of freedom, worst of three segments",
        assumes=("normal scatter", "this motor, this night"),
        flags=() if len(rows) == SEGMENTS else ("segments_without_replicates",),
    )


def _segments(found: Sequence[Level]) -> list[list[Level]]:
    if not found:
        return []
    low, high = found[0].duty_percent, found[-1].duty_percent
    width = (high - low) / SEGMENTS or 1.0
    parts: list[list[Level]] = [[] for _ in range(SEGMENTS)]
    for level in found:
        parts[min(int((level.duty_percent - low) / width), SEGMENTS - 1)].append(level)
    return parts


def _bound_of_scatter(segment: Sequence[Level]) -> tuple[float, float, int, tuple[int, ...]] | None:
    scatter, freedom = pooled_scatter(segment)
    if freedom < LEAST_FREEDOM:
        return None
    bound = scatter * math.sqrt(freedom / float(special.chdtri(freedom, ONE_SIDED)))
    return (
        bound,
        scatter,
        freedom,
        tuple(sorted(hold for level in segment if len(level.holds) > 1 for hold in level.holds)),
    )
