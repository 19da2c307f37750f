"""The drift of a condition's speed through the night: as a finding, taken out of the speeds, and offered to thresholds.

The course itself is `speed_course`'s. All speeds of a condition are brought to one moment, the one that its thresholds
hold for: the middle of its stall trials (of its speed holds where there are none).
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from sweeprig.characterise.combine import K_TWO_SIDED, TWO_SIDED
from sweeprig.characterise.curve import SAME_DUTY_PERCENT, Curve
from sweeprig.characterise.evidence import Chosen, Duties, Point, speed_points
from sweeprig.characterise.findings import NOT_ASKED, Finding, not_found
from sweeprig.characterise.speed_course import LEAST, Course, course
from sweeprig.characterise.usable import Branch
from sweeprig.holds import Approach, Outcome, Purpose
from sweeprig.laws import Floats, Trial
from sweeprig.plan import Plan
from sweeprig.steady import Steady, steady, warm_up

SHARE, U_SHARE = 0.5, 0.5
"""What is believed of the share (see `Drift`) before the holds are seen: anything from a magnet's to friction's."""
LEAST_FREEDOM = 3
SURELY = 4.0
_FINE = 1025
_AROUND, _LEAST_DEAD_BAND = 5.0, 2.0
"""Percent duty: the slope at the reference is that of a chord so far to both sides; a dead band counts as no less."""
_HOUR_S = 3600.0
_HUBER = 2.5
_ROUNDS = 4


@dataclass(frozen=True, slots=True)
class Drift:
    """A condition's drift. moment_s: run clock, the moment to which speeds are brought.

    share, u_share   how the drift at the reference speed v_r goes over to a lower speed v: a part 1 − share of it in
                     proportion (a magnet that fades), a part `share` by as many rpm (friction that rises). Learned from
                     holds at one duty at different times; for higher speeds, which are hardly ever repeated and where
                     the load flattens the curve, u is what it was before
    """

    references: tuple[Steady, ...]
    course: Course
    moment_s: float
    share: float = SHARE
    u_share: float = U_SHARE

    @property
    def reference_rpm(self) -> float:
        """The reference speed at the moment."""
        at = np.array([one.at_s for one in self.references])
        change, _ = self.course.change(at, self.moment_s)
        speeds = np.array([one.speed_rpm for one in self.references])
        return float(np.median(speeds * np.exp(-change)))


@dataclass(frozen=True, slots=True)
class Speeds:
    """Speeds of both branches at one moment, and the drift that was taken out; None: they are as they were read."""

    falling: tuple[Point, ...]
    rising: tuple[Point, ...]
    drift: Drift | None


def speeds(plan: Plan, known: Duties, done: Sequence[Outcome], exposures: Chosen) -> Speeds:
    """A condition's settled speeds, brought to one moment where reference holds show how they drift."""

    def read(branch: Approach, *, creeping: bool) -> tuple[Point, ...]:
        return speed_points(plan, known, done, branch, creeping=creeping)

    falling = read(Approach.FALLING, creeping=False)
    drift = drift_of(done, [trial.at_s for trial in exposures.trials] or [point.at_s for point in falling])
    if drift is None:
        return Speeds(read(Approach.FALLING, creeping=True), read(Approach.RISING, creeping=True), None)
    drift = with_share(drift, falling)
    return Speeds(corrected(drift, falling), corrected(drift, read(Approach.RISING, creeping=False)), drift)


def drift_of(outcomes: Sequence[Outcome], times_s: Sequence[float]) -> Drift | None:
    """From a condition's done holds; None with fewer than LEAST usable references. times_s: when the holds were made
    that the moment is the middle of."""
    found = references(outcomes)
    made = course(
        [one.at_s for one in found],
        [math.log(one.speed_rpm) for one in found],
        [one.u_rpm / one.speed_rpm for one in found],
    )
    return None if made is None or not times_s else Drift(found, made, _moment(made, times_s))


def _moment(made: Course, times_s: Sequence[float]) -> float:
    """The time at which the course is at its mean over `times_s`; of several the nearest to their mean."""
    times = np.array(times_s)
    middle = float(times.mean())
    if not _moves(made, times):
        return middle
    wanted = float(made.change(times, middle)[0].mean())
    fine = np.linspace(times.min(), times.max(), _FINE)
    off = made.change(fine, middle)[0] - wanted
    crossings = np.flatnonzero(off[:-1] * off[1:] <= 0.0)
    places = fine[crossings] if crossings.size else fine[np.abs(off).argmin() :][:1]
    return float(places[np.abs(places - middle).argmin()])


def _moves(made: Course, times: Floats) -> bool:
    """Whether the references show a change over `times` beyond doubt: more than SURELY of its u."""
    change, u = made.change(times, float(times.min()))
    return bool(np.ptp(change) > SURELY * float(u.max()))


def references(outcomes: Sequence[Outcome]) -> tuple[Steady, ...]:
    """The usable reference holds, in the order of their times."""
    done = [steady(one) for one in outcomes if one.hold.purpose is Purpose.REFERENCE]
    return tuple(sorted((one for one in done if one is not None), key=lambda one: one.at_s))


# ---- speeds brought to the moment -----------------------------------------------------------------------------------


def corrected(drift: Drift, points: Sequence[Point]) -> tuple[Point, ...]:
    """The points' speeds as they would have been at the moment.

    v' = v + (exp(−Δ) − 1)·((1 − q)·v + q·v_r), Δ the change of the reference's logarithm from the moment to the hold, q
    the share. u: the instruments' own as it was, and in squares that of Δ, that of q, and how far a single reference
    lies off the course: what else moves a speed from hold to hold (the warmth that the holds before left).
    """
    if not points:
        return ()
    speed = np.array([point.value for point in points])
    change, u_change = drift.course.change(np.array([point.at_s for point in points]), drift.moment_s)
    step, by_rpm = np.expm1(-change), drift.reference_rpm - speed
    scale = speed + drift.share * by_rpm
    u_share = np.where(by_rpm < 0.0, max(drift.u_share, U_SHARE), drift.u_share)
    u = np.sqrt((u_change * scale) ** 2 + (step * by_rpm * u_share) ** 2 + (drift.course.scatter * speed) ** 2)
    return tuple(
        replace(point, value=float(value), u=math.hypot(point.u, float(more)))
        for point, value, more in zip(points, speed + step * scale, u, strict=True)
    )


def with_share(drift: Drift, points: Sequence[Point]) -> Drift:
    """The drift with the share that holds at one duty at different times show (weighted least squares with Huber
    weights; normal prior). `points`: of the falling branch, as they were read."""
    rows = _within_levels(drift, points)
    if rows is None:
        return drift
    away, lever, freedom = rows
    before = 1.0 / U_SHARE**2
    share, precision, weights = SHARE, before, np.ones_like(away)
    for _ in range(_ROUNDS):
        rest = away - share * lever
        scale = 1.4826 * float(np.median(np.abs(rest))) * math.sqrt(away.size / freedom)
        weights = np.minimum(1.0, _HUBER * scale / np.maximum(np.abs(rest), 1e-12)) if scale > 0.0 else weights
        variance = max(float(weights @ rest**2) / freedom, 1e-12)
        precision = before + float(weights @ lever**2) / variance
        share = (before * SHARE + float(weights @ (lever * away)) / variance) / precision
    # a course that is known to a tenth gives a share that is known to a tenth
    u_share = math.hypot(1.0 / math.sqrt(precision), max(abs(share), 1.0 - share) * _doubt(drift, points))
    return replace(drift, share=share, u_share=min(u_share, U_SHARE))


def _doubt(drift: Drift, points: Sequence[Point]) -> float:
    """Relative standard uncertainty of the reference's change over the points' times; infinite where there is none."""
    times = np.array([point.at_s for point in points])
    change, u = drift.course.change(times, float(times.min()))
    most = int(np.abs(change).argmax())
    return float(u[most] / abs(change[most])) if change[most] else math.inf


def _within_levels(drift: Drift, points: Sequence[Point]) -> tuple[Floats, Floats, int] | None:
    """(what is left of each speed about its level after the drift in proportion, what share 1 would add to it) in parts
    of the level's speed, and the degrees of freedom; None where too few holds were repeated."""
    levels: dict[int, list[Point]] = defaultdict(list)
    for point in points:
        levels[round(point.duty_percent / SAME_DUTY_PERCENT)].append(point)
    repeated = [level for level in levels.values() if len(level) > 1]
    freedom = sum(len(level) - 1 for level in repeated) - 1
    if freedom < LEAST_FREEDOM:
        return None
    away, lever = [], []
    for level in repeated:
        change, _ = drift.course.change(np.array([point.at_s for point in level]), drift.moment_s)
        change = np.expm1(change)
        speed = np.array([point.value for point in level])
        mean = float(speed.mean())
        change = change - change.mean()
        away.append(speed / mean - 1.0 - change)
        lever.append(change * (drift.reference_rpm / mean - 1.0))
    return np.concatenate(away), np.concatenate(lever), freedom


# ---- what thresholds may expect -------------------------------------------------------------------------------------


def expecting(
    read: Speeds, branch: Branch | None, outcomes: Sequence[Outcome], trials: Chosen, before: float
) -> Chosen:
    """The trials with what the reference holds let one expect of the threshold's movement. before: standard deviation
    of it without any reference, percent duty; a friction of rest alone may move unseen, so it is never less."""
    if read.drift is None or branch is None:
        return trials
    number = read.drift.references[0].hold
    duty = next(one.hold.duty_percent for one in outcomes if one.number == number)
    movement = expected_movement(read.drift, branch.curve, trials, duty)
    along, moment_s, u = _along(read.drift, trials.trials)
    return replace(trials, trials=along, drift_percent=math.hypot(before, movement), moment_s=moment_s, u_moment=u)


def _along(drift: Drift, trials: Sequence[Trial]) -> tuple[tuple[Trial, ...], float, float]:
    """(the trials, the moment, its u in parts of their span) with times that pass as the reference's speed changes,
    where it does beyond doubt: what moves a speed moves a threshold, and neither need move in a straight line. Forward
    in the main, as long as before."""
    times = np.array([*(trial.at_s for trial in trials), drift.moment_s])
    own = times[:-1]
    if own.size < 2 or not _moves(drift.course, own):
        return tuple(trials), drift.moment_s, 0.0
    u = float(np.median(drift.course.change(own, drift.moment_s)[1]))
    change, _ = drift.course.change(times, float(own.min()))
    if change[own.argmax()] < change[own.argmin()]:
        change = -change
    lowest = change[:-1].min()
    passed = own.min() + np.ptp(own) * (change - lowest) / np.ptp(change[:-1])
    along = (replace(trial, at_s=float(at)) for trial, at in zip(trials, passed[:-1], strict=True))
    return tuple(along), float(passed[-1]), u / float(np.ptp(change[:-1]))


def expected_movement(drift: Drift, curve: Curve, trials: Chosen, duty_percent: float) -> float:
    """How far a threshold may have moved over the span of `trials`, percent duty; 0 where nothing says so.

    Friction that rises shifts the curve along the duty, at the reference by Δv over the slope there. In parts of the
    dead band (where the curve's lowest chord meets zero) that is the part by which friction rose, and a threshold,
    which friction makes, rises by as large a part of itself. A magnet that fades moves thresholds by less.
    """
    times = [trial.at_s for trial in trials.trials]
    if len(times) < 2 or max(times) <= min(times):
        return 0.0
    change, u = drift.course.change(np.array([max(times)]), min(times))
    low, high = max(duty_percent - _AROUND, float(curve.duty[0])), min(duty_percent + _AROUND, float(curve.duty[-1]))
    slope = float(np.diff(curve.at(np.array([low, high])))[0]) / (high - low) if high > low else 0.0
    lowest = float(np.diff(curve.value[:2])[0] / np.diff(curve.duty[:2])[0])
    if slope <= 0.0 or lowest <= 0.0:
        return 0.0
    shift = drift.reference_rpm * math.hypot(float(change[0]), float(u[0])) / slope
    dead_band = max(float(curve.duty[0] - curve.value[0] / lowest), _LEAST_DEAD_BAND)
    threshold = float(np.median([trial.duty_percent for trial in trials.trials]))
    return shift * max(1.0, threshold / dead_band)


# ---- the finding ----------------------------------------------------------------------------------------------------


def drift_percent_per_hour(plan: Plan, outcomes: Sequence[Outcome], drift: Drift | None, began: WarmUps) -> Finding:
    """Mean drift of the reference speed from the first reference to the last: 100·Δ ln v / Δt."""
    assumes, flags = began
    if plan.reference is None and not any(one.hold.purpose is Purpose.REFERENCE for one in outcomes):
        return not_found(f"{NOT_ASKED} reference holds", flags=flags)
    if drift is None:
        count = len(references(outcomes))
        return not_found(f"a drift needs {LEAST} reference holds that gave a speed; there were {count}", flags=flags)
    made, hours = drift.course, drift.course.span_s / _HOUR_S
    change, u = made.change(made.at_s[-1:], float(made.at_s[0]))
    value, u_value = 100.0 * float(change[0]) / hours, 100.0 * float(u[0]) / hours
    duty = next(one.hold.duty_percent for one in outcomes if one.number == drift.references[0].hold)
    return Finding(
        value=value,
        u=u_value,
        low=value - K_TWO_SIDED * u_value,
        high=value + K_TWO_SIDED * u_value,
        coverage_probability=TWO_SIDED,
        coverage_factor=K_TWO_SIDED,
        holds=tuple(sorted(one.hold for one in drift.references)),
        method=(
            f"mean over {hours:.3g} h of the speed at {duty:.4g} % duty: straight line or spline through "
            f"{len(drift.references)} references, {_bent(made)}; one scatters by {100.0 * made.scatter:.2g} % about it"
        ),
        assumes=(
            f"speeds are brought to the moment {(drift.moment_s - float(made.at_s[0])) / _HOUR_S:.3g} h after the "
            f"first reference; {100.0 * drift.share:.0f} % (u {100.0 * drift.u_share:.0f} %) of the drift by as many "
            "rpm, the rest in proportion",
            *assumes,
        ),
        flags=flags,
    )


def _bent(made: Course) -> str:
    return f"chance that it is straight {100.0 * float(made.chances[0]):.0f} %"


WarmUps = tuple[tuple[str, ...], tuple[str, ...]]
"""How the sessions' run-ins ended, in words, and the flags of it."""
STILL_WARMING = "still_warming"


def warm_ups(plan: Plan, outcomes: Sequence[Outcome]) -> WarmUps:
    """How the run-in of each session ended, where it was to go on until the speed is steady. `outcomes`: all done."""
    run_in = plan.run_in
    if run_in is None or run_in.drift_percent_per_hour is None:
        return (), ()
    pieces: dict[int, list[Outcome]] = defaultdict(list)
    for one in outcomes:
        if one.hold.purpose is Purpose.RUN_IN:
            pieces[one.session].append(one)
    states = {session: warm_up(run_in, done) for session, done in sorted(pieces.items())}
    words = tuple(f"run-in of session {s}: {one.words(run_in.drift_percent_per_hour)}" for s, one in states.items())
    return words, () if all(one.steady for one in states.values()) else (STILL_WARMING,)
