"""The truth that belongs to a job: its simulated motor under its conditions, with the times of its sweep."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from sweeprig.errors import ConfigError
from sweeprig.job import Job, freeze
from sweeprig.job.motor_models import Motor
from sweeprig.job.simulated_models import (
    SimulatedControlInput,
    SimulatedElectronic,
    SimulatedGeared,
    SimulatedPrescribed,
)
from sweeprig.plan import Plan
from sweeprig.simbench.build import motor_truth
from sweeprig.simbench.kinds.choose import values
from sweeprig.simbench.kinds.prescribed import PrescribedTruth
from sweeprig.simbench.trials import Procedure
from sweeprig.simbench.truth import truth
from sweeprig.simbench.truth_prescribed import prescribed_truth

TRIALS = 3000
RARE_TRIALS = 300
"""Forks a rung behind the duty of long service."""


def truth_of(
    job: Job, trials: int = TRIALS, workers: int | None = None, rare_trials: int = RARE_TRIALS
) -> dict[str, Any]:
    """{"motor": parameters, "trials": n, "conditions": [{"label", "pwm_hz", …, "findings": {name: {value, u}}}]}.

    trials       a threshold, counted; of a motor with a prescribed law none are needed
    rare_trials  behind what counting cannot reach (`truth.truth`); 0 leaves that out
    ConfigError where the motor file has no [simulated] table, or the sweep no stall or start trials to take times from.
    """
    plan = freeze(job)
    if plan.stall is None or plan.start is None:
        raise ConfigError(
            "the truth needs the hold time and the start time of the sweep",
            remedy="add [stall] and [start] to the sweep file",
            topic="simbench",
        )
    if isinstance(job.motor.simulated, SimulatedPrescribed):
        motor: Any = values(PrescribedTruth, job.motor.simulated)
        trials, found = 0, [prescribed_truth(motor, one, _procedure(job, plan)) for one in plan.conditions]
    else:
        own_kind = isinstance(job.motor.simulated, (SimulatedElectronic, SimulatedControlInput, SimulatedGeared))
        motor = job.motor if own_kind else motor_truth(job)
        found = truth(
            motor,
            plan.conditions,
            procedure=_procedure(job, plan),
            runs=trials,
            workers=workers or min(2, os.cpu_count() or 1),
            rig=job.rig,
            rare_trials=rare_trials,
        )
    conditions = [
        {
            "label": condition.label(),
            "pwm_hz": condition.pwm_hz,
            "supply_v": condition.supply_v,
            "findings": _flat(one),
            "speed_curve": one["speed_curve"],
            **{name: one[name] for name in ("stop_tail", "start_tail") if name in one},
        }
        for condition, one in zip(plan.conditions, found, strict=True)
    ]
    values_of = job.motor.simulated.model_dump() if isinstance(motor, Motor) and job.motor.simulated else asdict(motor)
    return {"motor": values_of, "trials": trials, "conditions": conditions}


def _procedure(job: Job, plan: Plan) -> Procedure:
    """How the sweep does its trials."""
    assert plan.stall is not None
    assert plan.start is not None
    return Procedure(
        hold_time_s=plan.stall.hold_time_s,
        start_time_s=plan.start.start_time_s,
        rest_time_s=plan.start.rest_time_s,
        relaunch_above_percent=plan.stall.relaunch_above_percent,
        relaunch_s=plan.stall.relaunch_s,
        lowest_rpm=plan.lowest_rpm,
        pulses_per_revolution=job.motor.pulses_per_revolution,
        saturation_percent=plan.saturation_percent,
        duty_low_percent=plan.duty_low_percent,
        duty_high_percent=plan.duty_high_percent,
        current_limit_amps=job.limits().current,
        **_kick_and_service(plan),
    )


def _kick_and_service(plan: Plan) -> dict[str, Any]:
    """What the sweep says of kicks and of the long run, where it does."""
    said: dict[str, Any] = {}
    if plan.kick is not None:
        said |= {
            "kick_duties_percent": plan.kick.duties_percent, "kick_margin_percent": plan.kick.margin_percent,
            "kick_hold_s": plan.kick.hold_time_s, "kick_rest_s": plan.kick.rest_time_s,
        }  # fmt: skip
    if plan.long_run is not None:
        said |= {"service_s": plan.long_run.service_s, "service_percent": 100.0 * plan.long_run.probability}
    return said


def _flat(found: Mapping[str, Any]) -> dict[str, Any]:
    """Every true finding under its full name."""
    flat = {}
    for name, value in found.items():
        if isinstance(value, Mapping) and "value" in value:
            flat[name] = value
        elif name == "usable_range":
            flat |= {f"usable_range.{part}": one for part, one in value.items()}
    return flat
