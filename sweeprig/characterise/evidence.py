"""Which holds say what: outcomes become trials for the laws and points for the curves, at the duty that really was.

The rules of selection live here, and only here. No statistics.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from sweeprig.characterise.tap_duties import duty_of_taps, known_map
from sweeprig.characterise.voltage import mean_motor_voltage
from sweeprig.exposures import LEAST_TIME_CONSTANTS, SHORTEST_GAP_S, exposure, turned_before
from sweeprig.holds import Approach, Condition, Outcome, Purpose, Verdict
from sweeprig.laws import Trial
from sweeprig.plan import Plan
from sweeprig.taps import TapMap

NORMAL_99 = 2.576
"""Normal quantile of 0.995: 99 % of a normal quantity lie within so many standard deviations."""


@dataclass(frozen=True, slots=True)
class Duties:
    """Duty of each hold by its number, percent; u is common to all (accuracy), so it does not average away.

    taps   of a drive by taps: between two of them nothing was tried, nor can it be set
    """

    of: Mapping[int, float]
    u: float
    assumes: str
    flags: tuple[str, ...]
    taps: TapMap | None = None


@dataclass(frozen=True, slots=True)
class Point:
    """One hold's settled value at its duty. u: of this mean, accuracy in it. weight: seconds exposed. at_s: the middle
    of the hold, run clock."""

    hold: int
    duty_percent: float
    value: float
    u: float
    weight: float
    flags: tuple[str, ...] = ()
    at_s: float = 0.0


@dataclass(frozen=True, slots=True)
class Chosen:
    """Trials of one kind with what the choice leans on.

    drift_percent   scale of what the threshold may have moved over the span of the trials, percent duty,
                    as the reference holds let one expect; None: nothing is known, the kind's own prior is taken
    moment_s        on the scale of the trials' times: what is found holds for it; None: for the mean of their times
    u_moment        its standard uncertainty, in parts of their span
    """

    trials: tuple[Trial, ...]
    assumes: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()
    drift_percent: float | None = None
    moment_s: float | None = None
    u_moment: float = 0.0


def commanded_duty(plan: Plan, outcome: Outcome) -> float:
    """The quantised duty that the drive reported, else the hold's own, percent."""
    reading = outcome.means.get(f"{plan.roles.get('drive', 'drive')}.duty_set")
    return outcome.hold.expected_percent if reading is None or reading.value is None else reading.value


def duties(plan: Plan, condition: Condition, outcomes: Sequence[Outcome]) -> Duties:
    """The duty of each hold: measured where the rig measures it, else commanded.

    A drive repeats its duty far better than an instrument reads it, so the readings at one setting are taken together
    (median); settings never read (a rotor stopped before the first reading) take the offset between measured and
    commanded of their neighbours. Mixing the two bare would shift some trials by the switch delay and not others.
    """
    commanded = {o.number: round(commanded_duty(plan, o), 9) for o in outcomes}
    channel = plan.roles.get("duty")
    if plan.taps is not None:
        known = known_map(plan, plan.taps, outcomes)
        of, u, flags = duty_of_taps(plan, known, outcomes)
        return Duties(commanded | of, u, f"duty of each tap as measured by {channel}", flags, known)
    read = [
        (commanded[o.number], reading.value, reading.u)
        for o in outcomes
        if channel is not None and (reading := o.means.get(channel)) is not None and reading.value is not None
    ]
    if not read:
        return _commanded_only(plan, condition, commanded)
    by_setting: dict[float, list[float]] = defaultdict(list)
    for setting, value, _ in read:
        by_setting[setting].append(value - setting)
    settings = sorted(by_setting)
    offsets = [float(np.median(by_setting[s])) for s in settings]
    measured = {
        # a switch that never switches has no delay
        number: duty + float(np.interp(duty, settings, offsets)) if 0.0 < duty < 100.0 else duty
        for number, duty in commanded.items()
    }
    return Duties(measured, float(np.median([u for *_, u in read])), f"duty as measured by {channel}", ())


def _commanded_only(plan: Plan, condition: Condition, commanded: Mapping[int, float]) -> Duties:
    bound_percent = plan.switch_delay_s * condition.pwm_hz * 100.0
    flags = ("duty_commanded",) if bound_percent < 0.1 else ("duty_commanded", "duty_not_measured")
    return Duties(
        commanded,
        bound_percent / math.sqrt(3.0),
        f"duty as commanded, wrong by at most {bound_percent:.3g} % (switch delay × PWM frequency)",
        flags,
    )


def stall_trials(plan: Plan, known: Duties, outcomes: Sequence[Outcome], turned_before: frozenset[int]) -> Chosen:
    """Exposures for the stall law: stall holds and long holds from above, and falling curve holds that qualify.

    A curve hold is the same exposure to the same hazard when it was meant to last at least five time constants and the
    rotor is known to have turned when it began; a rotor that already stood cannot stop, and counting it would invent a
    quick stop. Whether it qualifies never depends on how it ended.
    """
    if plan.stall is None:
        return Chosen(())
    trials, flags, curves, undecided = [], set(known.flags), 0, 0
    for outcome in outcomes:
        if outcome.hold.approach is not Approach.FALLING or not _is_exposure(plan, outcome, turned_before):
            continue
        if outcome.verdict not in (Verdict.TURNING, Verdict.STOPPED) and not _turned_for_long(plan, outcome):
            flags.add(f"{outcome.verdict.value}_left_out")
            continue
        undecided += outcome.verdict is Verdict.UNDECIDED
        if outcome.restarts:
            flags.add("self_restart")
        curves += outcome.hold.purpose is Purpose.CURVE
        survived, failed = exposure(outcome, plan.time_constant_s)
        if survived <= 0.0 and failed is None:
            # nothing was exposed, so nothing can be said
            continue
        whole = plan.stall.hold_time_s
        width = None if failed is None else failed / whole
        trials.append(Trial(outcome.number, known.of[outcome.number], survived / whole, width, _middle(outcome)))
    assumes = [
        known.assumes,
        "hazard constant in time within a hold; a stop within five time constants happened by then",
    ]
    if curves:
        assumes.append(f"{curves} holds of the falling curve count as exposures (one step down, rotor seen turning)")
    if undecided:
        assumes.append(f"{undecided} undecided holds count as survived up to the last edge seen, and no further")
    return Chosen(tuple(trials), tuple(assumes), tuple(sorted(flags)))


def _turned_for_long(plan: Plan, outcome: Outcome) -> bool:
    """Whether an undecided hold shows the rotor turning beyond the time it takes to come down to the duty.

    What became of it afterwards is not known, and nothing is claimed of it: the exposure ends at the last edge seen
    for certain. To leave the hold out would throw away a survival, and more of them near the threshold than elsewhere.
    """
    coming_down = LEAST_TIME_CONSTANTS * plan.time_constant_s
    return outcome.verdict is Verdict.UNDECIDED and not outcome.restarts and outcome.event_between_s[0] > coming_down


def _middle(outcome: Outcome) -> float:
    return (outcome.began + outcome.ended) / 2.0


def _is_exposure(plan: Plan, outcome: Outcome, turned_before: frozenset[int]) -> bool:
    if outcome.hold.purpose in (Purpose.STALL, Purpose.LONG):
        return True
    if outcome.hold.purpose is not Purpose.CURVE:
        return False
    return outcome.hold.least_s >= LEAST_TIME_CONSTANTS * plan.time_constant_s and outcome.number in turned_before


def turning_before(outcomes: Sequence[Outcome]) -> frozenset[int]:
    """Numbers of the holds at whose beginning the rotor is known to have turned: the hold before it, in the same
    session, ended with it turning, or its own lead drove it."""
    known, last = set(), None
    for outcome in sorted(outcomes, key=lambda o: o.number):
        if turned_before(outcome, last):
            known.add(outcome.number)
        last = outcome
    return frozenset(known)


def start_trials(known: Duties, outcomes: Sequence[Outcome]) -> Chosen:
    """Start attempts from rest: each one success or one failure."""
    trials, flags = [], set(known.flags)
    for outcome in outcomes:
        if outcome.hold.purpose is not Purpose.START or outcome.hold.approach is not Approach.FROM_REST:
            continue
        if outcome.verdict is Verdict.STARTED:
            trials.append(Trial(outcome.number, known.of[outcome.number], 1.0, None, _middle(outcome)))
        elif outcome.verdict is Verdict.DID_NOT_START:
            trials.append(Trial(outcome.number, known.of[outcome.number], 0.0, 1.0, _middle(outcome)))
        else:
            flags.add(f"{outcome.verdict.value}_left_out")
    return Chosen(tuple(trials), (known.assumes, "trials independent of each other"), tuple(sorted(flags)))


def speed_points(
    plan: Plan, known: Duties, outcomes: Sequence[Outcome], branch: Approach, *, creeping: bool = True
) -> tuple[Point, ...]:
    """Settled speeds on one branch, rpm: of curve holds, and on the falling branch of stall holds too.

    "Settled" promises the final value to the sweep's tolerance with 99 % confidence, no more: what creeps on (a winding
    that goes on warming) may be so far off, alike in every hold. u of that: tolerance / 2.576 (JCGM 100:2008, 4.3.4).
    creeping: it is in u; False where reference holds show how much speeds move.
    """
    channel, points = plan.roles.get("speed"), []
    creep = plan.settle.tolerance_percent / 100.0 / NORMAL_99 if creeping else 0.0
    for outcome in _settled(plan, outcomes, branch):
        reading = None if channel is None else outcome.means.get(channel)
        if reading is not None and reading.value is not None:
            u = math.hypot(reading.u, creep * reading.value)
            duty, weight, at_s = known.of[outcome.number], _weight(plan, outcome), _middle(outcome)
            points.append(Point(outcome.number, duty, reading.value, u, weight, at_s=at_s))
    return tuple(points)


def voltage_points(
    plan: Plan, condition: Condition, known: Duties, outcomes: Sequence[Outcome], branch: Approach
) -> tuple[Point, ...]:
    """Mean motor voltages of the turning motor on one branch, V."""
    points = []
    for outcome in _settled(plan, outcomes, branch):
        volts = mean_motor_voltage(plan, condition, outcome.means)
        if volts is not None:
            duty, weight = known.of[outcome.number], _weight(plan, outcome)
            points.append(Point(outcome.number, duty, volts.volts, volts.u, weight, volts.flags))
    return tuple(points)


def _settled(plan: Plan, outcomes: Sequence[Outcome], branch: Approach) -> list[Outcome]:
    """Holds of the branch whose means are of a turning rotor. One that stopped counts for the time before, if that
    was long enough to settle: its readings are of a rotor that had not yet begun to stop."""
    least = LEAST_TIME_CONSTANTS * plan.time_constant_s
    purposes = (Purpose.CURVE, Purpose.STALL, Purpose.LONG) if branch is Approach.FALLING else (Purpose.CURVE,)
    return [
        o
        for o in outcomes
        if o.hold.approach is branch
        and o.hold.purpose in purposes
        and (o.verdict is Verdict.TURNING or (o.verdict is Verdict.STOPPED and o.hold.purpose is not Purpose.CURVE))
        and (o.verdict is Verdict.TURNING or exposure(o, plan.time_constant_s)[0] >= least)
        and not o.restarts
    ]


def _weight(plan: Plan, outcome: Outcome) -> float:
    """Seconds the rotor turned at the duty; the whole hold where the exposure was not timed."""
    return exposure(outcome, plan.time_constant_s)[0] or max(outcome.ended - outcome.began, SHORTEST_GAP_S)
