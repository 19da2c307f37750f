"""The truth that belongs to a job: its simulated motor under its conditions, with the times of its sweep."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from sweeprig.errors import ConfigError
from sweeprig.job import Job, freeze
from sweeprig.simbench.build import motor_truth
from sweeprig.simbench.truth import truth

TRIALS = 3000


def truth_of(job: Job, trials: int = TRIALS, workers: int | None = None) -> dict[str, Any]:
    """{"motor": parameters, "trials": n, "conditions": [{"label", "pwm_hz", …, "findings": {name: {value, u}}}]}.

    ConfigError where the motor file has no [simulated] table, or the sweep no stall or start trials to take times from.
    """
    plan = freeze(job)
    if plan.stall is None or plan.start is None:
        raise ConfigError(
            "the truth needs the hold time and the start time of the sweep",
            remedy="add [stall] and [start] to the sweep file",
            topic="simbench",
        )
    motor = motor_truth(job)
    found = truth(
        motor,
        plan.conditions,
        hold_time_s=plan.stall.hold_time_s,
        start_time_s=plan.start.start_time_s,
        rest_time_s=plan.start.rest_time_s,
        relaunch=(plan.stall.relaunch_above_percent, plan.stall.relaunch_s),
        lowest_rpm=plan.lowest_rpm,
        pulses_per_revolution=job.motor.pulses_per_revolution,
        saturation_percent=plan.saturation_percent,
        duty_range=(plan.duty_low_percent, plan.duty_high_percent),
        current_limit_amps=job.limits().current,
        runs=trials,
        workers=workers or min(2, os.cpu_count() or 1),
    )
    conditions = [
        {
            "label": condition.label(),
            "pwm_hz": condition.pwm_hz,
            "supply_v": condition.supply_v,
            "findings": _flat(one),
            "speed_curve": one["speed_curve"],
        }
        for condition, one in zip(plan.conditions, found, strict=True)
    ]
    return {"motor": asdict(motor), "trials": trials, "conditions": conditions}


def _flat(found: Mapping[str, Any]) -> dict[str, Any]:
    """Every true finding under its full name."""
    flat = {}
    for name, value in found.items():
        if isinstance(value, Mapping) and "value" in value:
            flat[name] = value
        elif name == "usable_range":
            flat |= {f"usable_range.{part}": one for part, one in value.items()}
    return flat
