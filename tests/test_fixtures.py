"""The pytest fixtures that ship for users' own CI, used as a user would."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from sweeprig.job import Job
from sweeprig.opened import Run
from sweeprig.simbench import Bench


def test_a_run_in_a_users_ci(short_job: Path, sweeprig_run: Callable[[Path | str], Run]) -> None:
    """One call performs a job on the simulated bench; findings, frames and plots are there."""
    run = sweeprig_run(short_job)
    assert run.simulated
    assert len(run.holds) == len(run.outcomes) > 10
    assert run.findings.conditions[0].top_speed_rpm.found
    axes = run.plot_speed()
    assert "rpm" in axes.get_ylabel()
    assert "%" in axes.get_xlabel()


def test_a_bench_to_talk_to(sweeprig_bench: Callable[..., Bench]) -> None:
    """The bench of a shipped job answers by its ports, on its own clock."""
    bench = sweeprig_bench("demo")
    port = bench.ports["meter"]
    port.open()
    port.write(b"*IDN?\n")
    bench.clock.wait(bench.clock.now() + 1.0)
    assert port.read().startswith(b"SIMULATED,")


def test_a_job_by_name_or_path(short_job: Path, sweeprig_job: Callable[[Path | str], Job]) -> None:
    """Jobs are loaded by path, or by the name of one that ships."""
    assert sweeprig_job("demo").title != sweeprig_job(short_job).title
