"""The truth of a whole job: which way it is found, by the kind of the simulated motor."""

from __future__ import annotations

import json

import numpy as np
import pytest

from sweeprig.holds import Condition
from sweeprig.job import load, shipped
from sweeprig.job.simulated_models import SimulatedPrescribed
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.motor_truth import DetailedTruth, MotorTruth
from sweeprig.simbench.rare_trials import stop_rate_in_service
from sweeprig.simbench.trials import Procedure, Task
from sweeprig.simbench.truth_of_job import truth_of
from sweeprig.simbench.truth_rare import long_run

LAW = SimulatedPrescribed(
    kind="prescribed",
    law="exponential",
    stall_duty_percent=14.0,
    stall_spread_percent=0.4,
    hold_time_s=20.0,
    start_duty_percent=22.0,
    start_spread_percent=0.6,
    top_rpm=5000.0,
    time_constant_s=0.2,
    full_amps=0.5,
)


def test_a_prescribed_law_needs_no_trials() -> None:
    """A job whose motor has a prescribed law gets its truth by formula, JSON-able, for every condition, u = 0."""
    job = load(shipped("demo"))
    job = job.model_copy(update={"motor": job.motor.model_copy(update={"simulated": LAW})})
    found = truth_of(job)
    assert json.loads(json.dumps(found)) == found
    assert found["trials"] == 0
    assert found["motor"]["law"] == "exponential"
    for condition in found["conditions"]:
        findings = condition["findings"]
        assert findings["stall_duty_percent"]["u"] == 0.0
        assert findings["stall_duty_percent"]["value"] < findings["sustain_99_duty_percent"]["value"]
        assert findings["sustain_99_duty_percent"]["value"] < findings["long_run_duty_percent"]["value"]
        assert findings["usable_range.low_duty_percent"] == findings["sustain_99_duty_percent"]


def test_other_mechanics_have_no_long_run_duty() -> None:
    """Of a motor with cogging the splitting does not know the whole state: no value, and the reason."""
    plain = MotorTruth(11.6, 0.0105, 0.0255, 5.6e-6, 6e-8, 2e-6, 1.2e-3, 26.0, 4.6e-3, 5.0, 0.12, 0.7, 12.0, 240.0)
    values = {name: getattr(plain, name) for name in MotorTruth.__dataclass_fields__}
    motor = DetailedTruth(**values, cogging=Cogging(amplitude_nm=1e-3, steps_per_revolution=6))
    task = Task(motor, Condition(25e3, 12.0), Procedure(), "stall", 0.0, 10, (1,))
    found, tail = long_run(task, 17.0, 0.5, map)
    assert found == tail == {"value": None, "reason": "no_rare_event_method_for_this_plant"}


@pytest.mark.slow
def test_long_run_duty_is_where_the_rate_is_what_24_hours_allow() -> None:
    """At the duty found, fresh splitting with other seeds gives the rate that 24 h at 99 % allow.

    The wanted rate is −ln 0.99 / 86,400 s (definitions). Within four standard errors of both, where the error of the
    duty counts by the law's slope between the ends of the tail. Fixed seed.
    """
    motor = MotorTruth(11.6, 0.0105, 0.0255, 5.6e-6, 6e-8, 2e-6, 1.2e-3, 26.0, 4.6e-3, 5.0, 0.12, 0.7, 0.0, 1.0)
    procedure = Procedure(hold_time_s=20.0, run_in=(60.0, 3.0))
    task = Task(motor, Condition(25e3, 12.0), procedure, "stall", 0.0, 40, (41,))
    found, tail = long_run(task, 16.5, 0.5, map)
    assert 16.5 < found["value"] < 25.0
    assert 0.0 < found["u"] < 1.0
    assert len(tail["chance"]) == len(tail["duty_percent"])
    fresh = stop_rate_in_service(Task(motor, task.condition, procedure, "stall", found["value"], 100, (42,)), 4)
    wanted = -np.log(0.99) / 86_400.0
    per_percent = 12.0 / (found["value"] - 16.5)
    assert abs(np.log(fresh.value / wanted)) < 4.0 * np.hypot(fresh.u_log, per_percent * found["u"])
