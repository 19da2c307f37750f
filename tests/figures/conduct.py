"""Harness overhead a hold, and reading side by side over real sockets and a pseudo-terminal."""

from __future__ import annotations

import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from sweeprig.clock import SystemClock
from sweeprig.conduct import run as conduct_run
from sweeprig.conduct.perform import Performed, Performer
from sweeprig.conduct.rig import RigUse, configure, open_rig
from sweeprig.holds import Hold
from sweeprig.job import load, shipped
from sweeprig.launch import start
from sweeprig.roles import Window


def overhead_ms() -> tuple[float, int]:
    """Mean wall time of a hold outside `perform` and outside the decision: both commits, events, bookkeeping."""
    spent: list[float] = []
    whole, performing = conduct_run._Session._one, Performer.perform
    inside = [0.0]

    def timed_perform(self: Performer, hold: Hold, done: Performed) -> None:
        began = time.perf_counter()
        try:
            performing(self, hold, done)
        finally:
            inside[0] = time.perf_counter() - began

    def timed_one(self: Any, hold: Hold) -> Any:
        inside[0] = 0.0
        began = time.perf_counter()
        ending = whole(self, hold)
        spent.append(time.perf_counter() - began - inside[0])
        return ending

    conduct_run._Session._one, Performer.perform = timed_one, timed_perform  # type: ignore[method-assign]  # timing only
    try:
        with tempfile.TemporaryDirectory() as folder:
            start(load(shipped("demo")), Path(folder))
    finally:
        conduct_run._Session._one, Performer.perform = whole, performing  # type: ignore[method-assign]  # put back
    return statistics.mean(spent) * 1000.0, len(spent)


def together_ratio(cycles: int) -> tuple[float, dict[str, float]]:
    """All instruments read side by side over the slowest one alone, wall time, over served real links in real time."""
    with tempfile.TemporaryDirectory() as folder:
        rig_file = Path(folder) / "rig.toml"
        command = [sys.executable, "-c", "from sweeprig.cli import main; main()", "simbench", "serve",
                   str(shipped("demo")), "--rate", "1", "--write", str(rig_file)]  # fmt: skip
        server = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
        try:
            assert server.stdout is not None
            server.stdout.readline()
            job_file = Path(folder) / "job.toml"
            demo = shipped("demo").parent
            job_file.write_text(
                f'title = "served"\nrig = "rig.toml"\nmotor = "{demo}/motors/aspirator-fan.toml"\n'
                f'sweep = "{demo}/sweeps/evening.toml"\n',
                encoding="utf-8",
            )
            return _ratio(job_file, cycles)
        finally:
            server.terminate()
            server.wait(10)
            if server.stdout is not None:
                server.stdout.close()


def _ratio(job_file: Path, cycles: int) -> tuple[float, dict[str, float]]:
    rig = open_rig(RigUse.of_job(load(job_file)), SystemClock())
    try:
        configure(rig)
        names = [name for name in rig.adapters if name != "scope"]

        def timed(some: list[str]) -> float:
            began = time.perf_counter()
            rig.read(some, Window(1.0), lambda: None)
            return time.perf_counter() - began

        alone = {name: statistics.median(timed([name]) for _ in range(cycles)) for name in names}
        both = statistics.median(timed(names) for _ in range(cycles))
        return both / max(alone.values()), alone
    finally:
        rig.close()


def figures(full: bool) -> Iterator[dict[str, Any]]:
    ms, holds = overhead_ms()
    yield {"figure": "hold_overhead_ms", "value": round(ms, 2), "target": "<= 2", "meets": ms <= 2.0, "n": holds}
    cycles = 20 if full else 7
    ratio, alone = together_ratio(cycles)
    yield {
        "figure": "together_ratio", "value": round(ratio, 3), "target": "<= 1.05", "meets": ratio <= 1.05, "n": cycles,
        "alone_s": {name: round(value, 3) for name, value in alone.items()},
    }  # fmt: skip
