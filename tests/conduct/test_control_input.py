"""A run on a fan with a control input: off means supply off, duty 0 is a setting, findings say what the type does."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import NamedTuple

import pytest

from sweeprig.characterise import characterise
from sweeprig.conduct.rig import RigUse, open_rig
from sweeprig.conduct.run import run
from sweeprig.conduct.states import Orders, State
from sweeprig.holds import Outcome, Purpose, Status, Verdict
from sweeprig.job import Job, document, freeze, job_hash, load, shipped
from sweeprig.job.simulated_models import SimulatedControlInput
from sweeprig.job.sweep_models import Curve, RunInStage, Stall, Start
from sweeprig.logbook import Logbook
from sweeprig.simbench import Bench, build

ABOUT = {"job_hash": "0", "simulated": True, "motor": {}, "rig": {}, "software": {}}


class Worked(NamedTuple):
    """A finished run: how it ended, its outcomes, and the bench that knows what really happened."""

    job: Job
    bench: Bench
    state: State
    outcomes: list[Outcome]

    def states_at(self, time: float) -> tuple[bool, bool]:
        """(drive on, supply on) just before a bench time, from the bench's own record."""
        before = [one.what for one in self.bench.record if one.at < time]
        drive = next((what for what in reversed(before) if what.startswith("drive")), "drive_off")
        supply = next((what for what in reversed(before) if what.startswith("supply")), "supply_off")
        return drive == "drive_on", supply == "supply_on"

    def of(self, purpose: Purpose) -> list[Outcome]:
        return [one for one in self.outcomes if one.hold.purpose is purpose]


@pytest.fixture
def worked(tmp_path: Path) -> Callable[[str], Worked]:
    """`worked(type)`: a short night with the shipped 4-wire fan as of a type."""

    def work(kind: str) -> Worked:
        job = load(shipped("four-wire"))
        true = job.motor.simulated
        assert isinstance(true, SimulatedControlInput)
        true = true.model_copy(update={"below_minimum": kind, "fail_percent": 9.0, "spread_percent": 0.5})
        short = {
            "run_in": RunInStage(duty="60 %", time="10 s"),  # type: ignore[arg-type]  # as files have it, with units
            "curve": Curve(duties=("100 %", "40 %", "20 %", "10 %", "0 %"), least="3 s", most="8 s"),  # type: ignore[arg-type]
            "stall": Stall(hold_time="8 s", step="1 %", holds=14),  # type: ignore[arg-type]
            "start": Start(start_time="5 s", rest_time="12 s", step="1 %", trials=8),  # type: ignore[arg-type]
        }
        motor = job.motor.model_copy(update={"simulated": true})
        job = job.model_copy(update={"motor": motor, "sweep": job.sweep.model_copy(update=short)})
        bench, text = build(job), document(job)
        with Logbook.create(tmp_path / "logbook.sqlite", text, job_hash(text), "test") as logbook:
            session = logbook.begin_session(bench.clock.now(), bench.clock.utc(), {})
            rig = open_rig(RigUse.of_job(job), bench.clock, bench.ports)
            try:
                ending = run(freeze(job), rig, logbook, session, lambda _: None, Orders())
            finally:
                rig.close()
            return Worked(job, bench, ending.state, logbook.outcomes())

    return work


def test_off_means_supply_off(worked: Callable[[str], Worked]) -> None:
    """Supply and input go on and off together: never is the fan fed with its input open, which would be full speed."""
    night = worked("A")
    assert night.state is State.FINISHED
    assert {one.status for one in night.outcomes} == {Status.DONE}
    fed_since, longest, drive, fed = 0.0, 0.0, False, False
    for one in night.bench.record:
        if fed and not drive:
            longest = max(longest, one.at - fed_since)
        drive = one.what == "drive_on" if one.what.startswith("drive") else drive
        fed = one.what == "supply_on" if one.what.startswith("supply") else fed
        fed_since = one.at
    assert longest < 0.05  # both are told at once, and each answers in a few milliseconds
    assert (drive, fed) == (False, False)
    (zero,) = night.of(Purpose.ZERO)
    assert night.states_at(zero.ended) == (False, False)
    for trial in night.of(Purpose.START):
        began = trial.ended - trial.exposed_s
        assert night.states_at(began - 1.0) == (False, False)
        assert night.states_at(began + 1.0) == (True, True)


def test_type_a_never_stops(worked: Callable[[str], Worked]) -> None:
    """At duty 0 it is driven and turns, and the findings say by flag and bound that it never stopped."""
    night = worked("A")
    at_zero = [one for one in night.outcomes if one.hold.duty_percent == 0.0 and one.hold.purpose is not Purpose.ZERO]
    assert {one.verdict for one in at_zero} == {Verdict.TURNING, Verdict.STARTED}
    (found,) = characterise(freeze(night.job), night.outcomes, ABOUT).conditions
    stall = found.stall_duty_percent
    assert "never_stopped" in stall.flags
    assert stall.bound == "upper"


def test_type_b_stops_at_zero_only(worked: Callable[[str], Worked]) -> None:
    """It turns at every duty tried above 0 and stops at 0, on the curve and in the trials."""
    night = worked("B")
    tried = [one for one in night.outcomes if one.hold.purpose in (Purpose.CURVE, Purpose.STALL)]
    assert {one.verdict for one in tried if one.hold.duty_percent > 0.0} == {Verdict.TURNING}
    assert {one.verdict for one in tried if one.hold.duty_percent == 0.0} == {Verdict.STOPPED}


def test_type_c_stops_near_its_duty(worked: Callable[[str], Worked]) -> None:
    """The stall duty found lies within 2 % of where this fan's current fails to commutate, 9 % (spread 0.5 %)."""
    night = worked("C")
    (found,) = characterise(freeze(night.job), night.outcomes, ABOUT).conditions
    assert found.stall_duty_percent.value == pytest.approx(9.5, abs=2.0)
    assert {one.verdict for one in night.of(Purpose.STALL)} == {Verdict.TURNING, Verdict.STOPPED}
