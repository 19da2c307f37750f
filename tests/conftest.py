"""Shared by all rooms' tests: a short job on the demo's rig and motor, and how to run the installed command."""

from __future__ import annotations

import importlib.util
import os
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from sweeprig.job import shipped

SHORT_SWEEP = """
name = "short"
pwm = ["1 kHz"]
supply = ["12 V"]
duty = { low = "0 %", high = "100 %" }
lowest_speed = "60 rpm"
seed = 3
[zero]
time = "2 s"
[run_in]
duty = "60 %"
time = "10 s"
[curve]
duties = ["100 %", "60 %", "30 %", "20 %", "16 %", "14 %", "12 %"]
least = "2 s"
most = "8 s"
[stall]
search = "ladder"
hold_time = "8 s"
step = "1 %"
holds = 5
relaunch_above = "12 %"
relaunch_time = "3 s"
[start]
search = "ladder"
start_time = "5 s"
rest_time = "2 s"
step = "1 %"
trials = 5
[settle]
tolerance = "2 %"
"""


@pytest.fixture
def short_job(tmp_path: Path) -> Path:
    """A job of a few simulated minutes in files of its own, free to be edited by the test."""
    demo = shipped("demo").parent
    folder = tmp_path / "job"
    folder.mkdir()
    for part in ("rigs/shelter-bench.toml", "motors/aspirator-fan.toml"):
        shutil.copy(demo / part, folder)
    (folder / "short.toml").write_text(SHORT_SWEEP, encoding="utf-8")
    job = folder / "job.toml"
    job.write_text(
        'title = "short"\nrig = "shelter-bench.toml"\nmotor = "aspirator-fan.toml"\nsweep = "short.toml"\n', "utf-8"
    )
    return job


@pytest.fixture(scope="session")
def reference() -> Callable[[str], Any]:
    """`reference("circuits")`: a reference of the figures' folder, by its path, for neither folder is a package."""

    def loaded(name: str) -> Any:
        known = f"reference_{name}"
        if known not in sys.modules:
            spec = importlib.util.spec_from_file_location(known, Path(__file__).parent / "figures" / f"{name}.py")
            assert spec is not None
            assert spec.loader is not None
            module = importlib.util.module_from_spec(spec)
            sys.modules[known] = module  # dataclasses look their module up
            spec.loader.exec_module(module)
        return sys.modules[known]

    return loaded


def command_path() -> str:
    """The installed `sweeprig` of this interpreter."""
    found = shutil.which("sweeprig", path=str(Path(sys.executable).parent)) or shutil.which("sweeprig")
    assert found is not None, "the package is not installed"
    return found


@pytest.fixture
def sweeprig() -> Callable[..., subprocess.CompletedProcess[str]]:
    """`sweeprig("run", path, …)`: run the installed command to its end; text of both streams, exit code."""

    def called(*arguments: object, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
        line = [command_path(), *(str(argument) for argument in arguments)]
        return subprocess.run(line, capture_output=True, text=True, cwd=cwd, timeout=100, check=False,
                              env={**os.environ, "COLUMNS": "120"})  # fmt: skip

    return called


@pytest.fixture
def sweeprig_process() -> Callable[..., subprocess.Popen[str]]:
    """`sweeprig_process("simbench", "serve", …)`: start the installed command and hand over its process."""

    def started(*arguments: object, cwd: Path | None = None) -> subprocess.Popen[str]:
        line = [command_path(), *(str(argument) for argument in arguments)]
        return subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, cwd=cwd)

    return started
