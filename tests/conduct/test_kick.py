"""Kick and long holds performed on the simulated bench: how long the pulse really was, and what counts as started."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import pytest

from sweeprig.conduct.kick import Pulse
from sweeprig.exposures import KICK_AMPS, KICK_PULSE, kick_of
from sweeprig.holds import Approach, Condition, Decision, EndsWhen, Finished, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.job import load, shipped
from sweeprig.launch import start
from sweeprig.opened import open_run
from sweeprig.plan import Plan
from sweeprig.quantities import Reading
from sweeprig.simbench.kinds.prescribed import PrescribedMotor

AT = Condition(1000.0, 12.0)
ROLES = ("speed", "current", "motor_voltage")
RUN = 16.0
CERTAIN = {"kick_s": 0.1, "kick_spread": 0.001, "stall_duty_percent": 10.0}
"""A motor that wants just 0.1 s at full duty, and then turns on at the run duty."""


def kick_hold(pulse_s: float, kick: float = 100.0, run: float = RUN) -> Hold:
    lead = ((0.0, 1.0), (kick, pulse_s))
    return Hold(0, Purpose.KICK, Approach.FROM_REST, AT, run, 4.0, 4.0, EndsWhen.STOPPED, ROLES, "kick", lead)


def long_hold(duty: float, seconds: float) -> Hold:
    lead = ((100.0, 1.0), (duty + 12.0, 4.0))
    return Hold(0, Purpose.LONG, Approach.FALLING, AT, duty, 0.0, seconds, EndsWhen.STOPPED, ROLES, "long", lead)


def performed(
    holds: Sequence[Hold], tmp_path: Path, monkeypatch: pytest.MonkeyPatch, **motor: float
) -> tuple[list[Outcome], list[tuple[float, float, bool]]]:
    """(outcomes of the holds, what the motor's drive signal really did: moment, duty, on)."""
    seen: list[tuple[float, float, bool]] = []
    set_drive = PrescribedMotor.set_drive

    def watched(self: PrescribedMotor, pwm_hz: float, duty_percent: float, on: bool) -> None:
        if (duty_percent, on) != (self.duty_percent, self.drive_on):
            seen.append((self.now, duty_percent, on))
        set_drive(self, pwm_hz, duty_percent, on)

    def scripted(plan: Plan, outcomes: Sequence[Outcome], now: float) -> Decision:
        del plan, now
        number = len(outcomes)
        return replace(holds[number], number=number + 1) if number < len(holds) else Finished("scripted")

    monkeypatch.setattr(PrescribedMotor, "set_drive", watched)
    monkeypatch.setattr("sweeprig.conduct.run.next_hold", scripted)
    job = load(shipped("prescribed"))
    assert job.motor.simulated is not None
    job = job.model_copy(update={
        "motor": job.motor.model_copy(update={"simulated": job.motor.simulated.model_copy(update=motor)}),
        "sweep": job.sweep.model_copy(update={"pwm": (1000.0,)}),
    })  # fmt: skip
    return open_run(start(job, tmp_path).path).outcomes, seen


def pulses(seen: Sequence[tuple[float, float, bool]], run: float = RUN) -> list[float]:
    """True lengths of the pulses: from a drive that goes on to the step to the run duty."""
    found, began = [], math.nan
    for (_, _, was_on), (at, duty, on) in pairwise(seen):
        if on and not was_on:
            began = at
        elif on and duty == pytest.approx(run, abs=0.1):
            found.append(at - began)
    return found


LENGTHS = (0.02, 0.06, 0.15, 0.38, 0.7, 1.5)


def test_pulse_is_timed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Pulses from 20 ms to 1.5 s come within 5 ms of what was asked for, and the outcome tells their true length within
    three of its u, which is no more than 5 ms (the simulated links answer within milliseconds)."""
    outcomes, seen = performed([kick_hold(seconds) for seconds in LENGTHS], tmp_path, monkeypatch, **CERTAIN)
    assert [outcome.status for outcome in outcomes] == [Status.DONE] * len(LENGTHS)
    true = pulses(seen)
    assert true == pytest.approx(LENGTHS, abs=5e-3)
    for seconds, outcome in zip(true, outcomes, strict=True):
        timed = outcome.means[KICK_PULSE]
        assert timed.unit == "s"
        assert timed.value == pytest.approx(seconds, abs=3.0 * timed.u)
        assert 0.0 < timed.u <= 5e-3


def test_what_counts_as_started(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A pulse shorter than the motor wants does not start it, a longer one does; after a failure the drive is off."""
    outcomes, _ = performed([kick_hold(seconds) for seconds in LENGTHS], tmp_path, monkeypatch, **CERTAIN)
    failed, went = Verdict.DID_NOT_START, Verdict.STARTED
    assert [outcome.verdict for outcome in outcomes] == [failed, failed, went, went, went, went]


def test_start_that_does_not_last_is_none(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A rotor that the pulse started but that stops within the hold time at the run duty was not started."""
    outcomes, _ = performed([kick_hold(1.0, run=8.0)], tmp_path, monkeypatch, **CERTAIN)
    assert [outcome.verdict for outcome in outcomes] == [Verdict.DID_NOT_START]


def test_current_within_the_pulse(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Pulses long enough for a reading tell their mean current (at full duty 0.35 A by the motor's own definition);
    shorter ones tell none."""
    outcomes, _ = performed([kick_hold(seconds) for seconds in LENGTHS], tmp_path, monkeypatch, **CERTAIN)
    assert [KICK_AMPS in outcome.means for outcome in outcomes] == [False, False, False, False, True, True]
    for outcome in outcomes[4:]:
        amps = outcome.means[KICK_AMPS]
        assert amps.value == pytest.approx(0.35, rel=0.02)
        assert amps.u < 0.01


def test_long_hold(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A long hold is one exposure on the falling approach: it turns for all of its time, or tells when it stopped."""
    outcomes, _ = performed([long_hold(16.0, 120.0), long_hold(9.0, 120.0)], tmp_path, monkeypatch, **CERTAIN)
    assert [outcome.verdict for outcome in outcomes] == [Verdict.TURNING, Verdict.STOPPED]
    assert outcomes[0].event_between_s[0] == pytest.approx(120.0, abs=1.0)
    assert outcomes[1].event_between_s[1] is not None


def test_the_exchanges_are_the_uncertainty() -> None:
    """A pulse between two exchanges of 12 and 24 ms is known as two rectangles: u² = (12² + 24²)/12 ms²; its length is
    that between their middles (JCGM 100:2008, 4.3.7)."""
    pulse = Pulse((1.000, 1.012), 0.024)
    assert pulse.until(0.1) == pytest.approx(1.006 + 0.1 - 0.012)
    timed = pulse.readings((1.094, 1.118))[KICK_PULSE]
    assert timed.value == pytest.approx(0.1)
    assert timed.u == pytest.approx(math.sqrt((0.012**2 + 0.024**2) / 12.0))


def test_kick_of_outcomes() -> None:
    """What a hold's kick was: as it was timed, else as it was asked for; nothing for a hold without one."""
    asked = Outcome(1, kick_hold(0.2, 80.0), 1, Status.DONE, Verdict.STARTED, 0.0, 1.0, 0.0, 1.0)
    timed = replace(asked, means={KICK_PULSE: Reading(0.21, 0.003, "s", 0.0, KICK_PULSE)})
    none = replace(asked, hold=replace(asked.hold, lead=((0.0, 1.0),)))
    assert kick_of(asked) == (80.0, 0.2, 0.0)
    assert kick_of(timed) == (80.0, 0.21, 0.003)
    assert kick_of(none) is None
