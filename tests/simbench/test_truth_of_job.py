"""The truth of a whole job: which way it is found, by the kind of the simulated motor."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest

from sweeprig.holds import Condition
from sweeprig.job import freeze, load, shipped
from sweeprig.job.simulated_models import SimulatedPrescribed
from sweeprig.simbench import truth_rare
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.motor_truth import DetailedTruth, MotorTruth
from sweeprig.simbench.rare import Rate
from sweeprig.simbench.rare_chain import chain_rate_in_service
from sweeprig.simbench.trials import Procedure, Task, perform
from sweeprig.simbench.truth_of_job import truth_of
from sweeprig.simbench.truth_rare import failure_to_start, long_run

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


def test_what_is_out_of_reach_says_how_many_trials_would_do(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where splitting may make next to no steps, a motor with cogging gets no long-run duty and no tail, but the trials
    that counting would take: (1 − p)/(p·0.5²) services of 24 h at p = 1 %.
    """
    monkeypatch.setattr(truth_rare, "MOST_STEPS", 100.0)
    plain = MotorTruth(11.6, 0.0105, 0.0255, 5.6e-6, 6e-8, 2e-6, 1.2e-3, 26.0, 4.6e-3, 5.0, 0.12, 0.7, 12.0, 1.0)
    values = {name: getattr(plain, name) for name in MotorTruth.__dataclass_fields__}
    motor = DetailedTruth(**values, cogging=Cogging(amplitude_nm=1e-3, steps_per_revolution=6))
    procedure = Procedure(hold_time_s=1.0, run_in=(60.0, 3.0))
    task = Task(motor, Condition(25e3, 12.0), procedure, "stall", 0.0, 10, (1,))
    found, tail = long_run(task, 30.0, 0.5, map)
    assert found == {"value": None, "reason": "not_affordable", "trials_needed": 396, "trial_s": 86_400.0}
    assert tail["chance"] == tail["u_log"] == tail["trials_needed"] == [None] * 6


def test_long_run_duty_is_where_the_rate_is_what_24_hours_allow() -> None:
    """At the duty found, the chain with another seed gives the rate that 24 h at 99 % allow; the tail leads up to it.

    The wanted rate is −ln 0.99 / 86,400 s (definitions); own earlier output besides: the chain itself is checked
    against counting and splitting in `test_rare_chain`.
    Within four standard errors of both, where the error of the duty counts
    by the slope of the tail's end. Fixed seed.
    """
    motor = MotorTruth(11.6, 0.0105, 0.0255, 5.6e-6, 6e-8, 2e-6, 1.2e-3, 26.0, 4.6e-3, 5.0, 0.12, 0.7, 0.0, 1.0)
    procedure = Procedure(hold_time_s=20.0, run_in=(60.0, 3.0))
    task = Task(motor, Condition(25e3, 12.0), procedure, "stall", 0.0, 40, (41,))
    found, tail = long_run(task, 16.5, 0.5, map)
    assert 16.5 < found["value"] < 25.0
    assert 0.0 < found["u"] < 0.2
    assert max(tail["u_log"]) < 0.5
    assert tail["trials_needed"][-1] > 1e5
    fresh = chain_rate_in_service(Task(motor, task.condition, procedure, "stall", found["value"], 1, (42,)))
    wanted = -np.log(0.99) / 86_400.0
    chances, duties = tail["chance"], tail["duty_percent"]
    per_percent = np.log(chances[-2] / chances[-1]) / (duties[-1] - duties[-2])
    assert abs(np.log(fresh.value / wanted)) < 4.0 * np.hypot(max(fresh.u_log, 0.05), per_percent * found["u"])


def test_a_splitting_that_few_ancestors_carry_counts_as_out_of_reach(monkeypatch: pytest.MonkeyPatch) -> None:
    """A rate whose own u_log is above 1 is not stated: so deep, with so few forks, it is mostly much too low."""
    motor = MotorTruth(11.6, 0.0105, 0.0255, 5.6e-6, 6e-8, 2e-6, 1.2e-3, 26.0, 4.6e-3, 5.0, 0.12, 0.7, 0.0, 1.0)
    task = Task(motor, Condition(25e3, 12.0), Procedure(run_in=(60.0, 3.0)), "stall", 20.0, 1, (1,))
    monkeypatch.setattr(truth_rare, "by_chain", lambda _: False)
    for stated, kept in ((1.2, False), (0.8, True)):
        monkeypatch.setattr(truth_rare, "stop_rate_in_service", lambda *_, u=stated: Rate(1e-7, u))
        assert (truth_rare.service_rate(task).value > 0.0) is kept


@pytest.mark.parametrize("name", ["electronic", "stirrer", "four-wire"])
def test_trials_know_motors_of_every_kind(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """A motor of a kind of its own starts at full duty, does not stop in a hold there, and never starts unsupplied."""
    job = load(shipped(name))
    condition = freeze(job).conditions[0]
    monkeypatch.setattr(truth_rare, "START_TRIALS", 100)
    procedure = Procedure(hold_time_s=2.0, start_time_s=6.0, rest_time_s=1.0, relaunch_s=1.0, run_in=(100.0, 3.0))
    task = Task(job.motor, condition, procedure, "start", 100.0, 2, (1,), job.rig)
    assert perform(task).events == 2
    assert perform(replace(task, kind="stall")).events == 0
    assert failure_to_start(replace(task, condition=replace(condition, supply_v=0.0))).value == 1.0
