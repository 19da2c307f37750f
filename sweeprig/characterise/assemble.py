"""characterise(): all findings of a run from its plan and outcomes. Chooses, calls, puts together; computes nothing.

Only holds with status `done` are data.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import partial

from sweeprig.characterise import usable
from sweeprig.characterise.curve import Curve, fit_curve, lowest_sure_duty
from sweeprig.characterise.disturbed import lapse_finding
from sweeprig.characterise.duties_found import STALL, START, TAIL, start_stall_hysteresis, threshold
from sweeprig.characterise.evidence import (
    Chosen,
    Duties,
    Point,
    duties,
    stall_trials,
    start_trials,
    turning_before,
    voltage_points,
)
from sweeprig.characterise.findings import ConditionFindings, Findings, SpeedCurve, not_found
from sweeprig.characterise.kick import kicks
from sweeprig.characterise.limits import judge_all
from sweeprig.characterise.long_run import long_run
from sweeprig.characterise.speed_drift import WarmUps, drift_percent_per_hour, expecting, speeds, warm_ups
from sweeprig.characterise.tap_duties import doubts
from sweeprig.errors import ConfigError
from sweeprig.holds import Approach, Condition, Outcome, Status
from sweeprig.plan import Plan

ABOUT = ("job_hash", "simulated", "motor", "rig", "software")
_NOT_YET = "this version does not work it out"


def characterise(plan: Plan, outcomes: Sequence[Outcome], about: Mapping[str, object]) -> Findings:
    """Findings of every condition of the plan, and of any other that has done holds.

    about: job_hash (text), simulated (bool), motor, rig, software (JSON values). ConfigError when one is missing.
    """
    missing = [key for key in ABOUT if key not in about]
    if missing:
        raise ConfigError("findings need to know what they are about", value=f"no {', '.join(missing)}")
    done = [outcome for outcome in outcomes if outcome.status is Status.DONE]
    turned, began = turning_before(outcomes), warm_ups(plan, done)
    others = sorted({o.hold.condition for o in done} - set(plan.conditions))
    conditions = tuple(
        of_condition(plan, condition, [o for o in done if o.hold.condition == condition], turned, began)
        for condition in (*plan.conditions, *others)
    )
    return Findings(
        job_hash=str(about["job_hash"]),
        simulated=bool(about["simulated"]),
        motor=about["motor"],
        rig=about["rig"],
        software=about["software"],
        conditions=conditions,
        limits=judge_all(plan, conditions),
        suspicions=doubts(plan, outcomes),
        advice=tuple({"note": remark} for remark in plan.remarks),
    )


def of_condition(
    plan: Plan, condition: Condition, done: Sequence[Outcome], turned: frozenset[int], began: WarmUps
) -> ConditionFindings:
    """Findings of one condition from its done holds. turned: numbers of holds that began with the rotor turning; began:
    how the sessions' run-ins ended."""
    known = duties(plan, condition, done)
    exposures = stall_trials(plan, known, done, turned)
    read = speeds(plan, known, done, exposures)
    falling, rising = read.falling, read.rising
    speed = _branch(falling, rising, exposures, monotone=True)
    expected = partial(expecting, read, speed, done)
    stall = threshold(STALL, expected(exposures, STALL.prior.median_percent), known.u, known.taps)
    started = expected(start_trials(known, done), START.prior.median_percent)
    start = threshold(START, started, known.u, known.taps)
    volts_of = partial(voltage_points, plan, condition, known, done)
    volts = _branch(volts_of(Approach.FALLING), volts_of(Approach.RISING), exposures, monotone=False)
    within = usable.usable_range(speed, stall, start, plan.saturation_percent, known.u)
    top_speed = usable.top_speed(speed)
    if _top_is_missing(plan, speed):
        top_speed, within = usable.without_top(top_speed, within)
    service = long_run(plan, known, exposures, done)
    highest, second, third = kicks(plan, done)
    return ConditionFindings(
        condition=condition,
        hold_time_s=None if plan.stall is None else plan.stall.hold_time_s,
        start_time_s=None if plan.start is None else plan.start.start_time_s,
        rest_time_s=None if plan.start is None else plan.start.rest_time_s,
        stall_duty_percent=stall.finding(0.5),
        sustain_99_duty_percent=stall.finding(TAIL),
        start_duty_percent=start.finding(0.5),
        start_99_duty_percent=start.finding(TAIL),
        cold_start_duty_percent=not_found(_NOT_YET),
        long_run_duty_percent=service.duty,
        long_run_extrapolation_factor=service.factor,
        long_run_model_free_percent=service.model_free,
        long_run_binary_duty_percent=service.binary,
        start_stall_hysteresis_percent=start_stall_hysteresis(start, stall),
        kick_99_s=highest.pulse,
        kick_99_second_s=second.pulse,
        kick_99_third_s=third.pulse,
        kick_charge_amp_seconds=highest.charge,
        kick_charge_second_amp_seconds=second.charge,
        kick_charge_third_amp_seconds=third.charge,
        stall_speed_rpm=usable.at_stall(speed, stall, "speed"),
        stall_voltage_volts=usable.at_stall(volts, stall, "mean motor voltage"),
        lowest_reliable_speed_rpm=within.low_speed_rpm,
        top_speed_rpm=top_speed,
        linearity_percent=usable.linearity(speed, within),
        curve_hysteresis_rpm=usable.curve_hysteresis(speed, rising),
        resolution_rpm_per_step=usable.resolution(speed, within, _step(plan, condition), known.taps),
        repeatability_rpm=usable.repeatability(falling),
        drift_percent_per_hour=drift_percent_per_hour(plan, done, read.drift, began),
        lapse=lapse_finding(stall.fitted, stall.evidence),
        coast_time_s=not_found(_NOT_YET),
        usable_range=within,
        speed_curve=_speed_curve(speed, fit_curve(rising, monotone=True, other=falling), known),
    )


def _branch(
    falling: Sequence[Point], rising: Sequence[Point], exposures: Chosen, *, monotone: bool
) -> usable.Branch | None:
    curve = fit_curve(falling, monotone=monotone, other=rising)
    if curve is None:
        return None
    stops = [trial.duty_percent for trial in exposures.trials if trial.failed is not None]
    return usable.Branch(curve, lowest_sure_duty([float(d) for d in curve.duty], stops))


def _top_is_missing(plan: Plan, speed: usable.Branch | None) -> bool:
    """The highest duty that the sweep asks for gave no speed: the highest one that did is nearer to the next below."""
    if speed is None or plan.curve is None or len(plan.curve.duties_percent) < 2:
        return False
    below, top = sorted(plan.curve.duties_percent)[-2:]
    return float(speed.curve.duty[-1]) < (below + top) / 2.0


def _step(plan: Plan, condition: Condition) -> float | None:
    steps = dict(zip(plan.conditions, plan.duty_step_percent, strict=False))
    return steps.get(condition)


def _speed_curve(falling: usable.Branch | None, rising: Curve | None, known: Duties) -> SpeedCurve:
    """Fitted speeds at the measured duties of both branches; the accuracy of duty is carried over by the slope."""
    shown = SpeedCurve()
    for branch, curve in (("falling", None if falling is None else falling.curve), ("rising", rising)):
        if curve is None:
            continue
        u = curve.u_with_duty(known.u)
        shown = SpeedCurve(
            (*shown.duty_percent, *(float(d) for d in curve.duty)),
            (*shown.speed_rpm, *(float(v) for v in curve.value)),
            (*shown.u_rpm, *(float(one) for one in u)),
            (*shown.branch, *(branch for _ in curve.duty)),
        )
    return shown
