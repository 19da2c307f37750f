"""Run-in and reference holds on the simulated bench: what their outcomes say, and how long the run-in takes."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from sweeprig.holds import Outcome, Purpose
from sweeprig.launch import start
from sweeprig.opened import Run, open_run
from sweeprig.steady import STEADY_SPEED, drift_rate, steady


def performed(job: Path, sweep: dict[str, str], motor: dict[str, float]) -> Run:
    """The short job with lines of its sweep (`key = value` after a table's name) and of its simulated motor changed."""
    text = (job.parent / "short.toml").read_text("utf-8")
    for table, lines in sweep.items():
        if f"[{table}]" in text:
            text = re.sub(rf"\[{table}\]\n[^\[]*", f"[{table}]\n{lines}\n", text)
        else:
            text += f"[{table}]\n{lines}\n"
    (job.parent / "short.toml").write_text(text, "utf-8")
    path = job.parent / "aspirator-fan.toml"
    text = path.read_text("utf-8")
    for key, value in motor.items():
        text = re.sub(rf"(?m)^{key} = .*$", f"{key} = {value}", text)
    path.write_text(text, "utf-8")
    return open_run(start(job, job.parent / "runs").path)


def of(run: Run, purpose: Purpose) -> list[Outcome]:
    return [one for one in run.outcomes if one.hold.purpose is purpose]


WARM_UP = {"run_in": 'duty = "60 %"\ntime = "30 s"\ndrift_per_hour = "10 %"\nlongest = "10 min"'}
CALM = {"running_friction_spread_percent": 1.0}


def test_a_winding_that_warms_for_long_gets_a_longer_warm_up(short_job: Path) -> None:
    """100 K/W warm the winding by some 15 K within minutes, which slows the rotor by 2 %: the run-in goes on until the
    speed drifts by less than 10 %/h, which for exp(−t/60 s) is after about two minutes; and not to its longest."""
    run = performed(short_job, WARM_UP, CALM | {"thermal_resistance_k_per_w": 100.0, "thermal_time_constant_s": 60.0})
    pieces = of(run, Purpose.RUN_IN)
    assert 4 <= len(pieces) <= 10
    speeds = [one.speed_rpm for piece in pieces if (one := steady(piece)) is not None]
    assert speeds[0] > 1.008 * speeds[-1]
    last = [one for piece in pieces[-2:] if (one := steady(piece)) is not None]
    assert abs(drift_rate(last)[0]) < 10.0


def test_a_steady_motor_is_warmed_up_shortly(short_job: Path) -> None:
    """The same motor with a winding that hardly warms: two pieces show that it is steady."""
    run = performed(short_job, WARM_UP, CALM | {"thermal_resistance_k_per_w": 1.0, "thermal_time_constant_s": 60.0})
    assert len(of(run, Purpose.RUN_IN)) == 2


def test_reference_holds_have_the_speed_of_their_last_half(short_job: Path) -> None:
    """One right after the run-in and one at the end; the mean of the readings of the second half (own sum over the
    logbook's readings), with the u of that mean alone, below the one that has the tachometer's accuracy in it."""
    run = performed(short_job, {"reference": 'duty = "60 %"\nevery = "60 s"\ntime = "16 s"'}, {})
    found = of(run, Purpose.REFERENCE)
    assert len(found) >= 4
    assert run.outcomes[-1] is found[-1]
    rows = run.readings[run.readings.channel == "board.speed"]
    assert [str(one.hold.purpose) for one in run.outcomes[:3]] == ["zero", "run_in", "reference"]
    for one in found:
        compared, mean = one.means[STEADY_SPEED], one.means["board.speed"]
        assert compared.value == pytest.approx(mean.value)
        assert 0.0 < compared.u <= mean.u
        read = [float(value) for value in rows[rows.hold == one.number].value]
        # windows of 1 s; 13 s are left after five time constants, half of them count
        assert compared.value in [pytest.approx(sum(read[-last:]) / last, rel=1e-9) for last in (6, 7)]
    drift = run.findings.conditions[0].finding("drift_percent_per_hour")
    assert drift.found
    assert set(drift.holds) == {one.number for one in found}
