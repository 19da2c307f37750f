"""What the tests with hostile files share: a small kept run to spoil, and every way of reading a run."""

from __future__ import annotations

import os
import shutil
import sqlite3
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path

import pytest

from sweeprig.errors import SweeprigError
from sweeprig.logbook import Reader
from sweeprig.logbook.export import export_csv
from sweeprig.opened import open_run

KEPT = Path(__file__).parents[1] / "logbook" / "data" / "version-1"
LIMITED = """
import resource, sys
resource.setrlimit(resource.RLIMIT_AS, (int(sys.argv[1]), int(sys.argv[1])))
from sweeprig.errors import SweeprigError
try:
    exec(sys.argv[2], {"given": sys.argv[3:]})
except SweeprigError as error:
    print(type(error).__name__ + ": " + str(error))
else:
    print("no error")
"""


@pytest.fixture
def run_folder(tmp_path: Path) -> Path:
    """A run folder of its own with job.toml and logbook.sqlite, as a release wrote it."""
    folder = tmp_path / "20260302t170000z-fan"
    folder.mkdir()
    for name in ("job.toml", "logbook.sqlite"):
        shutil.copy(KEPT / name, folder)
    return folder


@contextmanager
def changed(folder: Path) -> Iterator[sqlite3.Connection]:
    """The logbook of `folder`, open for a stranger's statements."""
    with closing(sqlite3.connect(folder / "logbook.sqlite", isolation_level=None)) as connection:
        connection.execute("PRAGMA writable_schema = ON")
        yield connection


@pytest.fixture
def spoil(run_folder: Path) -> Callable[..., Path]:
    """`spoil(sql, …)`: carry out a stranger's statements on the logbook; the run folder."""

    def spoilt(*statements: str | tuple[str, tuple[object, ...]]) -> Path:
        with changed(run_folder) as connection:
            for statement in statements:
                sql, values = statement if isinstance(statement, tuple) else (statement, ())
                connection.execute(sql, values)
        return run_folder

    return spoilt


def readings_of(folder: Path) -> dict[str, Callable[[], object]]:
    """Every way of reading a run but the report, by its name."""
    book = folder / "logbook.sqlite"
    ways: dict[str, Callable[[], object]] = {
        name: lambda name=name: getattr(Reader(book), name)()  # type: ignore[misc]
        for name in ("head", "sessions", "intents", "unfinished", "outcomes", "events", "instruments", "last_times")
    }
    ways |= {
        name: lambda name=name: getattr(open_run(folder), name)  # type: ignore[misc]
        for name in ("holds", "readings", "events", "instruments", "sessions", "about", "findings")
    }
    ways["readings of a hold"] = lambda: Reader(book).readings(1)
    ways["status"] = lambda: open_run(folder).status()
    ways["table"] = lambda: open_run(folder)._repr_html_()
    ways["export"] = lambda: export_csv(Reader(book), folder.parent / "csv")
    return ways


@pytest.fixture
def read_all() -> Callable[[Path], dict[str, SweeprigError]]:
    """`read_all(folder)`: read the run in every way; the errors of ours by way. Any other error comes out."""

    def read(folder: Path) -> dict[str, SweeprigError]:
        errors: dict[str, SweeprigError] = {}
        for name, way in readings_of(folder).items():
            try:
                way()
            except SweeprigError as error:
                errors[name] = error
        return errors

    return read


@pytest.fixture
def limited() -> Callable[..., str]:
    """`limited(bytes, code, *given)`: run code in a process with so much address space; its error of ours, or none."""

    def ran(most: int, code: str, *given: object) -> str:
        line = [sys.executable, "-c", LIMITED, str(most), code, *map(str, given)]
        single = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}  # each of its threads takes address space
        done = subprocess.run(line, capture_output=True, text=True, timeout=100, check=False, env=single)
        assert done.returncode == 0, done.stderr[-2000:]
        return done.stdout.strip()

    return ran
