"""A short sweep on a drive by taps through real sockets and a real pseudo-terminal."""

from __future__ import annotations

import shutil
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.conduct.states import State
from sweeprig.holds import Purpose, Status
from sweeprig.job import load, shipped
from sweeprig.launch import start
from sweeprig.opened import open_run
from sweeprig.simbench.build import pwm_timer

RATE = 12
SWEEP = """
name = "taps, served"
pwm = ["timer"]
supply = ["12 V"]
lowest_speed = "60 rpm"
seed = 3
[zero]
time = "2 s"
[run_in]
duty = "60 %"
time = "5 s"
[curve]
duties = ["98 %", "60 %", "30 %"]
least = "2 s"
most = "6 s"
[stall]
search = "ladder"
hold_time = "5 s"
holds = 4
relaunch_above = "12 %"
relaunch_time = "3 s"
[start]
search = "ladder"
start_time = "3 s"
rest_time = "1 s"
trials = 4
[settle]
tolerance = "1 %"
"""


@pytest.mark.slow
@pytest.mark.timeout(110)
@pytest.mark.skipif(sys.platform == "win32", reason="no pseudo-terminals on Windows: served runs untested there")
def test_taps_over_real_links(tmp_path: Path, sweeprig_process: Callable[..., subprocess.Popen[str]]) -> None:
    """Every done hold was at its tap, and the scope read there what the parts give with their stated error of 8 %
    (own formula: end over ends and potentiometer)."""
    shutil.copytree(shipped("timer").parent, tmp_path / "configs")
    (tmp_path / "configs/sweeps/timer.toml").write_text(SWEEP, encoding="utf-8")
    job, rig = tmp_path / "configs/timer.toml", tmp_path / "configs/rigs/timer-bench.toml"
    written = tmp_path / "served.toml"
    server = sweeprig_process("simbench", "serve", job, "--rate", RATE, "--write", written)
    assert server.stdout is not None
    assert "board" in server.stdout.readline()
    shutil.copy(written, rig)
    launched = start(job, tmp_path / "runs")
    server.send_signal(signal.SIGTERM)
    server.communicate(timeout=10)
    assert launched.ending.state is State.FINISHED
    parts = pwm_timer(load(job))
    assert parts is not None
    potentiometer = 1.08 * parts.potentiometer_ohm
    held = [
        outcome for outcome in open_run(launched.path).outcomes if outcome.hold.tap and outcome.status is Status.DONE
    ]
    assert {Purpose.TAP_MAP, Purpose.CURVE, Purpose.STALL} <= {outcome.hold.purpose for outcome in held}
    for outcome in held:
        assert outcome.hold.tap is not None
        part = parts.end_ohm + potentiometer * outcome.hold.tap / 255
        duty = outcome.means["scope.duty"].value
        assert duty == pytest.approx(100.0 * part / (2.0 * parts.end_ohm + potentiometer), abs=0.2)
