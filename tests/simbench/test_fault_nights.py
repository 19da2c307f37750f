"""Whole short jobs under planned faults: the same seed gives the same night, and a fault shows where it must."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from pathlib import Path

from sweeprig.conduct.states import State
from sweeprig.launch import Launched, start
from sweeprig.logbook.run_folder import LOGBOOK, TRAFFIC

FAULTS = """
[[simulated_faults]]
kind = "late_reply"
instrument = "meter"
exchange = 150
delay = "6 s"
[[simulated_faults]]
kind = "noise_before"
instrument = "scope"
exchange = 60
[[simulated_faults]]
kind = "cr_lf"
instrument = "supply"
probability = "30 %"
[[simulated_faults]]
kind = "heartbeat_loss"
instrument = "board"
exchange = 220
[[simulated_faults]]
kind = "brush_bounce"
start = "20 s"
lasts = "20 s"
"""


def night(short_job: Path, runs: Path) -> Launched:
    return start(short_job, runs)


def readings(launched: Launched) -> list[tuple[object, ...]]:
    """Every reading of the run, as the file has them."""
    with closing(sqlite3.connect(launched.path / LOGBOOK)) as file:
        return list(file.execute("SELECT * FROM readings ORDER BY rowid"))


def test_the_same_seed_gives_the_same_night(short_job: Path, tmp_path: Path) -> None:
    """Two runs of one job with faults: traffic.log equal to the byte, every reading equal; another seed's differ."""
    rig = short_job.parent / "shelter-bench.toml"
    rig.write_text(rig.read_text("utf-8") + FAULTS, "utf-8")
    first, second = night(short_job, tmp_path / "first"), night(short_job, tmp_path / "second")
    assert first.ending.state is second.ending.state is State.FINISHED
    traffic = [(one.path / TRAFFIC).read_bytes() for one in (first, second)]
    assert len(traffic[0]) > 10_000
    assert traffic[0] == traffic[1]
    assert len(readings(first)) > 100
    assert readings(first) == readings(second)
    sweep = short_job.parent / "short.toml"
    sweep.write_text(sweep.read_text("utf-8").replace("seed = 3", "seed = 4"), "utf-8")
    other = night(short_job, tmp_path / "other")
    assert (other.path / TRAFFIC).read_bytes() != traffic[0]


def test_faults_leave_the_rest_of_the_night_alone(short_job: Path, tmp_path: Path) -> None:
    """A fault that the link forgives (CR LF ends, empty lines) changes no reading of the night."""
    plain = night(short_job, tmp_path / "plain")
    rig = short_job.parent / "shelter-bench.toml"
    forgiven = "\n".join(
        f'[[simulated_faults]]\nkind = "{kind}"\ninstrument = "{name}"\nprobability = "50 %"'
        for kind in ("cr_lf", "double_terminator", "extra_terminator")
        for name in ("meter", "supply")
    )
    rig.write_text(f"{rig.read_text('utf-8')}\n{forgiven}\n", "utf-8")
    struck = night(short_job, tmp_path / "struck")
    assert len(readings(plain)) > 100
    assert readings(struck) == readings(plain)
