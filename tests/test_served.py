"""The same short job through real sockets and a real pseudo-terminal, and in process: the same findings."""

from __future__ import annotations

import math
import shutil
import signal
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from sweeprig.conduct.states import State
from sweeprig.launch import start
from sweeprig.opened import Run, open_run

RATE = 12
pytestmark = pytest.mark.skipif(
    sys.platform == "win32", reason="no pseudo-terminals on Windows: served runs untested there"
)


@pytest.fixture
def served_job(
    short_job: Path, tmp_path: Path, sweeprig_process: Callable[..., subprocess.Popen[str]]
) -> Iterator[Path]:
    """A job whose rig file was written by `sweeprig simbench serve`, which goes on serving meanwhile."""
    rig = tmp_path / "served-rig.toml"
    server = sweeprig_process("simbench", "serve", short_job, "--rate", RATE, "--write", rig)
    assert server.stdout is not None
    assert server.stderr is not None
    assert "board" in server.stdout.readline()
    job = short_job.with_name("served.toml")
    shutil.copy(rig, short_job.with_name("served-rig.toml"))
    job.write_text(short_job.read_text("utf-8").replace("shelter-bench.toml", "served-rig.toml"), "utf-8")
    yield job
    server.send_signal(signal.SIGTERM)
    server.communicate(timeout=10)


def findings(run: Run) -> dict[str, dict[str, float]]:
    condition = run.findings.as_json()["conditions"][0]
    names = ("stall_duty_percent", "start_duty_percent", "top_speed_rpm", "stall_speed_rpm")
    return {name: condition[name] for name in names}


@pytest.mark.slow
@pytest.mark.timeout(110)
def test_served_and_in_process_agree(short_job: Path, served_job: Path, tmp_path: Path) -> None:
    """Unmodified adapters over TCP and a serial port give the in-process findings within their uncertainty.

    Two independent values differ by more than 4 combined standard uncertainties once in 16,000 (normal)."""
    served = start(served_job, tmp_path / "served-runs")
    inside = start(short_job, tmp_path / "runs")
    assert served.ending.state is inside.ending.state is State.FINISHED
    ours, theirs = (findings(open_run(launched.path)) for launched in (inside, served))
    for name, one in ours.items():
        other = theirs[name]
        assert abs(one["value"] - other["value"]) <= 4.0 * math.hypot(one["u"], other["u"]), name
    run = open_run(served.path)
    assert run.simulated
    kinds = {address.partition(":")[0] for address in (i.address for i in run.job.rig.instruments.values())}
    assert kinds == {"TCPIP0", "serial"}


def test_the_server_refuses_a_rate_that_would_starve_the_heartbeat(
    short_job: Path, sweeprig: Callable[..., subprocess.CompletedProcess[str]]
) -> None:
    """Rates at which heartbeat / N is below 50 ms are refused with the figure, exit code 2."""
    done = sweeprig("simbench", "serve", short_job, "--rate", 100)
    assert done.returncode == 2
    assert "lasts only 20 ms of real time" in done.stderr
    assert "up to 40" in done.stderr


def test_off_on_a_served_rig(served_job: Path, sweeprig: Callable[..., subprocess.CompletedProcess[str]]) -> None:
    """`off` takes the rig file or a job file, confirms on both actuators and proves it; exit 0."""
    for file in (served_job.with_name("served-rig.toml"), served_job):
        done = sweeprig("off", file)
        assert done.returncode == 0, done.stderr
        assert "board" in done.stdout
        assert "supply" in done.stdout
        assert "shown to be off" in done.stdout


def test_off_on_a_rig_that_is_not_there(
    short_job: Path, sweeprig: Callable[..., subprocess.CompletedProcess[str]]
) -> None:
    """A rig whose instruments do not answer cannot be shown to be off: exit 3, and the text says what to do by hand."""
    rig = short_job.parent / "shelter-bench.toml"
    text = rig.read_text("utf-8")
    for number, name in enumerate(("board", "supply", "meter", "scope")):
        text = text.replace(f'"simbench:{name}"', f'"TCPIP0::127.0.0.1::{number + 1}::SOCKET"')
    rig.write_text(text, "utf-8")
    done = sweeprig("off", rig)
    assert done.returncode == 3
    assert "by hand" in done.stderr
    assert "board" in done.stderr
    assert "supply" in done.stderr
