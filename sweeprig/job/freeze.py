"""From a job to the plan that schedule and characterise are given: conditions, duties, steps, all in stated units.

Pure: the same job gives the same plan. The clock enters only as the moment a run began.
"""

from __future__ import annotations

from datetime import UTC, datetime
from itertools import product

from sweeprig.holds import Condition
from sweeprig.job.models import Job
from sweeprig.job.motor_models import Motor
from sweeprig.job.pwm_choice import Pwm, board_ticks, frequencies
from sweeprig.job.sweep_models import Deadline, Sweep
from sweeprig.job.tap_freeze import with_taps
from sweeprig.plan import (
    CurvePlan,
    Expected,
    HeatPlan,
    KickPlan,
    LongRunPlan,
    Plan,
    ReferencePlan,
    RunIn,
    SettlePlan,
    StallPlan,
    StartPlan,
)

LOWEST_CURVE_DUTY = 2.0
"""%: where a curve given by `points` ends unless the sweep says otherwise. Below, no motor we know turns."""

STEPS = {"ladder": 0.5, "adaptive": 0.1}
"""%: multiples of which a search takes its duties, unless the sweep says otherwise."""
MOST_TRIALS = 80
UNTIL_THE_DEADLINE = 10_000
STANDARD_ERROR = {"stall": 0.25, "start": 0.5}
"""% duty. An adaptive search ends at so many trials or when its findings are known so well, unless stated."""
PARTS = (0.25, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0)
TIME_CONSTANTS = 5.0
CURVE_HOLDS = 4
"""Holds a curve point, in the mean, after which a curve with a standard error to reach ends at the latest."""
RUN_IN_PIECES = 6

UNITS_DIFFER, SPREADS_DIFFER = 0.1, 0.4
"""Scatter of the logarithm from one motor of a kind to the next: of a duty, of a spread or a time (guesses)."""


def freeze(job: Job, session: int = 1, began_utc: float | None = None) -> Plan:
    """The plan of `job`.

    session     start or resume of the run that asks, from 1
    began_utc   UTC seconds at which the run began: turns a deadline in hours into a moment. Without it such a deadline
                is not in the plan (a preview); `extra["deadline_hours"]` then has it
    """
    rig, motor, sweep = job.rig, job.motor, job.sweep
    pwm = frequencies(job)
    conditions = _conditions(sweep, pwm)
    deadline = _deadline_utc(sweep.deadline, began_utc)
    hours = sweep.deadline.hours if sweep.deadline is not None and deadline is None else None
    plan = Plan(
        seed=sweep.seed,
        conditions=conditions,
        roles=dict(rig.roles),
        duty_low_percent=sweep.duty.low,
        duty_high_percent=sweep.duty.high,
        time_constant_s=motor.longest_time_constant,
        lowest_rpm=sweep.lowest_speed,
        zero_time_s=0.0 if sweep.zero is None else sweep.zero.time,
        run_in=_run_in(sweep),
        curve=_curve(sweep),
        stall=_stall(sweep, motor.longest_time_constant),
        start=_start(sweep),
        kick=_kick(sweep),
        long_run=_long_run(sweep),
        reference=_reference(sweep),
        sharpen=sweep.sharpen,
        spend="all" if sweep.deadline is None else sweep.deadline.spend,
        settle=SettlePlan(sweep.settle.tolerance, sweep.settle.confidence),
        saturation_percent=sweep.saturation,
        voltage_at=rig.voltage_at or "across_motor",  # cross_checks: stated wherever the role is there
        current_at=rig.current_at or "supply_lead",
        switch_delay_s=rig.switch_delay or 0.0,
        duty_step_percent=_duty_steps(job, conditions),
        limits={name: (_plain(limit.at_least), _plain(limit.at_most)) for name, limit in motor.limits.items()},
        deadline_utc=deadline,
        session=session,
        by_hand=_by_hand(sweep),
        heat=HeatPlan(
            motor.locked_rotor_time, motor.cooling_time, job.limits().locked_rotor_time, motor.maximum_voltage
        ),
        expected=_expected(motor),
        remarks=tuple(one.remark for one in pwm if one.remark),
        extra={} if hours is None else {"deadline_hours": hours},
    )
    return with_taps(job, plan)


def _expected(motor: Motor) -> Expected:
    """What the motor file expects, with the scatter from one motor of a kind to the next."""
    stated = motor.expected.model_dump(exclude_none=True)
    if not stated:
        return Expected()
    duties = {f"{name}_percent": (value, UNITS_DIFFER) for name, value in stated.items() if name.endswith("_duty")}
    spreads = {f"{name}_percent": (value, SPREADS_DIFFER) for name, value in stated.items() if name.endswith("_spread")}
    names = {"kick_time": "kick_s", "settling_time": "settle_s", "coast_time": "coast_s"}
    times = {names[name]: (value, SPREADS_DIFFER) for name, value in stated.items() if name in names}
    places = {name.replace("_duty_", "_"): value for name, value in duties.items()}
    return Expected(**{**places, **spreads, **times}, source="the motor file")


def _plain(limit: float | None) -> float | None:
    """A limit without the unit that it remembers for being written again."""
    return None if limit is None else float(limit)


def with_deadline(job: Job, began_utc: float) -> Job:
    """The job with a deadline in hours fixed as a moment in UTC: what is written into the run folder at its start."""
    moment = _deadline_utc(job.sweep.deadline, began_utc)
    if moment is None:
        return job
    # whole seconds: a deadline is no finer, and TOML dates keep no more than six digits of a second
    deadline = Deadline() if job.sweep.deadline is None else job.sweep.deadline
    fixed = deadline.model_copy(update={"until": datetime.fromtimestamp(round(moment), UTC), "hours": None})
    return job.model_copy(update={"sweep": job.sweep.model_copy(update={"deadline": fixed})})


def board_step_percent(pwm_hz: float) -> float:
    """One timer tick in percent of the period, for the board at `pwm_hz` (drivers/firmware/README.md)."""
    return 100.0 / board_ticks(pwm_hz)[1]


def curve_duties(points: int, low: float, high: float) -> tuple[float, ...]:
    """`points` duties from `high` down to `low`, %, spaced quadratically: the curve bends most at low duty.

    duty_i = low + (high − low)·((points − 1 − i)/(points − 1))², rounded to 0.0001 %.
    """
    last = points - 1
    return tuple(round(low + (high - low) * ((last - i) / last) ** 2, 4) for i in range(points))


def curve_low(sweep: Sweep) -> float:
    """%: the lowest duty of a curve given by `points`."""
    stated = None if sweep.curve is None else sweep.curve.lowest
    return max(sweep.duty.low, LOWEST_CURVE_DUTY) if stated is None else stated


def _conditions(sweep: Sweep, pwm: tuple[Pwm, ...]) -> tuple[Condition, ...]:
    """The product of the axes; PWM frequency changes fastest, load (by a person) slowest."""
    axes = product(sweep.load, sweep.direction, sweep.supply, pwm)
    return tuple(Condition(one.used_hz, supply, direction, load) for load, direction, supply, one in axes)


def _by_hand(sweep: Sweep) -> tuple[str, ...]:
    """Axes with several values that nothing but a person can set, slowest first."""
    return tuple(name for name in ("load", "direction") if len(getattr(sweep, name)) > 1)


def _duty_steps(job: Job, conditions: tuple[Condition, ...]) -> tuple[float, ...]:
    """One drive step for each condition: as stated, else the board's; empty where it is not known."""
    if job.rig.drive_step is not None:
        return (job.rig.drive_step,) * len(conditions)
    drive = job.rig.instruments.get(job.rig.roles.get("drive", ""))
    if drive is None or drive.adapter != "board":
        return ()
    return tuple(board_step_percent(condition.pwm_hz) for condition in conditions)


def _curve(sweep: Sweep) -> CurvePlan | None:
    curve = sweep.curve
    if curve is None:
        return None
    if curve.duties is not None:
        duties = tuple(sorted(curve.duties, reverse=True))
    else:
        duties = curve_duties(curve.points or 0, curve_low(sweep), sweep.duty.high)
    most = CURVE_HOLDS * len(duties) if curve.holds is None else curve.holds
    return CurvePlan(duties, curve.least, curve.most, curve.standard_error, most)


def _stall(sweep: Sweep, time_constant_s: float) -> StallPlan | None:
    stall = sweep.stall
    if stall is None:
        return None
    return StallPlan(
        stall.search,
        stall.hold_time,
        STEPS[stall.search] if stall.step is None else stall.step,
        _most_trials(sweep) if stall.holds is None else stall.holds,
        stall.relaunch_above,
        stall.relaunch_time,
        STANDARD_ERROR["stall"] if stall.standard_error is None else stall.standard_error,
        exposure_times(stall.hold_time, stall.longest, time_constant_s),
    )


def _most_trials(sweep: Sweep) -> int:
    """Of an adaptive search that the sweep leaves open: with a deadline it is the time that ends it."""
    spends = sweep.deadline is not None and sweep.deadline.spend == "all"
    return UNTIL_THE_DEADLINE if spends else MOST_TRIALS


def exposure_times(hold_time_s: float, longest_s: float | None, time_constant_s: float) -> tuple[float, ...]:
    """The lengths of exposure that an adaptive search chooses from, s, shortest first: parts and multiples of the hold
    time, none shorter than five time constants, none longer than `longest_s` (None: twice the hold time)."""
    longest = 2.0 * hold_time_s if longest_s is None else longest_s
    shortest = TIME_CONSTANTS * time_constant_s
    times = [part * hold_time_s for part in PARTS]
    return tuple(time_s for time_s in times if shortest <= time_s <= longest) or (hold_time_s,)


def _start(sweep: Sweep) -> StartPlan | None:
    start = sweep.start
    if start is None:
        return None
    return StartPlan(
        start.search,
        start.start_time,
        start.rest_time,
        STEPS[start.search] if start.step is None else start.step,
        _most_trials(sweep) if start.trials is None else start.trials,
        STANDARD_ERROR["start"] if start.standard_error is None else start.standard_error,
    )


def _kick(sweep: Sweep) -> KickPlan | None:
    kick = sweep.kick
    if kick is None:
        return None
    return KickPlan(
        duties_percent=(sweep.duty.high,) if kick.duties is None else kick.duties,
        margin_percent=kick.margin,
        shortest_s=kick.shortest,
        longest_s=kick.longest,
        hold_time_s=kick.hold_time,
        rest_time_s=kick.rest_time,
        trials=kick.trials,
        standard_error=kick.standard_error / 100.0,
    )


def _long_run(sweep: Sweep) -> LongRunPlan | None:
    long = sweep.long_run
    return None if long is None else LongRunPlan(long.service, long.hold_time, long.holds, long.probability / 100.0)


def _run_in(sweep: Sweep) -> RunIn | None:
    stage = sweep.run_in
    if stage is None:
        return None
    if stage.drift_per_hour is None:
        return RunIn(stage.duty, stage.time)
    longest = RUN_IN_PIECES * stage.time if stage.longest is None else stage.longest
    return RunIn(stage.duty, stage.time, stage.drift_per_hour, longest)


def _reference(sweep: Sweep) -> ReferencePlan | None:
    reference = sweep.reference
    return None if reference is None else ReferencePlan(reference.duty, reference.every, reference.time)


def _deadline_utc(deadline: Deadline | None, began_utc: float | None) -> float | None:
    if deadline is None:
        return None
    if deadline.until is not None:
        return deadline.until.timestamp()
    if began_utc is None or deadline.hours is None:
        return None
    return began_utc + 3600.0 * deadline.hours
