"""pytest fixtures for users' own CI: a simulated bench, and a finished run on it. pytest finds them by an entry point.

Nothing heavy is imported before a fixture is used.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from sweeprig.job import Job
    from sweeprig.opened import Run
    from sweeprig.simbench import Bench


@pytest.fixture
def sweeprig_job() -> Callable[[Path | str], Job]:
    """`sweeprig_job(path_or_shipped_name)` loads a job: a path, or the name of a job that ships with sweeprig."""
    from sweeprig.job import load, shipped

    def loaded(name: Path | str) -> Job:
        path = Path(name)
        return load(path if path.suffix == ".toml" else shipped(str(name)))

    return loaded


@pytest.fixture
def sweeprig_bench(sweeprig_job: Callable[[Path | str], Job]) -> Callable[..., Bench]:
    """`sweeprig_bench(path_or_shipped_name, session=1)` is a simulated bench: `.clock`, `.ports`, `.record`."""

    def built(name: Path | str, session: int = 1) -> Bench:
        from sweeprig.simbench import build

        return build(sweeprig_job(name), session=session)

    return built


@pytest.fixture
def sweeprig_run(tmp_path: Path, sweeprig_job: Callable[[Path | str], Job]) -> Callable[[Path | str], Run]:
    """`sweeprig_run(path_or_shipped_name)` performs the job on the simulated bench and opens the run."""

    def performed(name: Path | str) -> Run:
        from sweeprig.launch import start
        from sweeprig.opened import open_run

        return open_run(start(sweeprig_job(name), tmp_path / "runs").path)

    return performed
