"""Processes that are killed while they write, and a second process that wants the same run."""

from __future__ import annotations

import os
import random
import signal
import sqlite3
import subprocess
import sys
from collections import Counter
from contextlib import closing
from pathlib import Path

import pytest

from sweeprig.errors import RunInUse
from sweeprig.holds import Status
from sweeprig.logbook import Logbook, Reader

WRITER = Path(__file__).with_name("writer_process.py")
READINGS_A_HOLD = 40
KILLS = 6

needs_sigkill = pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="needs SIGKILL and fork")


def start(*words: str) -> subprocess.Popen[str]:
    command = [sys.executable, str(WRITER), *words]
    return subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)


def killed_after(path: Path, lines: int) -> list[str]:
    """What a writer announced that was killed after its n-th line."""
    with start("loop", str(path)) as writer:
        assert writer.stdout is not None
        said = [writer.stdout.readline() for _ in range(lines)]
        writer.kill()
        return [*said, *writer.stdout.readlines()]


@needs_sigkill
@pytest.mark.slow
def test_nothing_committed_is_lost_by_kill_9(path: Path) -> None:
    """Row D3: After each of many kills all that was announced is there, whole, once, and at most one hold is
    unfinished."""
    drawn = random.Random(20260302)
    announced: list[str] = []
    for _ in range(KILLS):
        announced += killed_after(path, drawn.randint(1, 24))
        reader = Reader(path)
        outcomes = {outcome.number: outcome for outcome in reader.outcomes()}
        begun = {intent.hold.number for intent in reader.intents()}
        readings = Counter(row[1] for page in reader.reading_rows() for row in page)
        concluded = {int(line.split()[1]) for line in announced if line.startswith("concluded") and line[-1] == "\n"}
        assert {number for number, outcome in outcomes.items() if outcome.status is Status.DONE} >= concluded
        assert begun >= {int(line.split()[1]) for line in announced if line[-1] == "\n"}
        assert begun - outcomes.keys() == {intent.hold.number for intent in reader.unfinished()}
        assert len(reader.unfinished()) <= 1
        assert readings == {n: READINGS_A_HOLD for n, outcome in outcomes.items() if outcome.status is Status.DONE}
    assert sorted(begun) == list(range(1, len(begun) + 1))
    with Logbook.open(path) as book:
        assert len(book.unfinished()) <= 1
    with closing(sqlite3.connect(path)) as connection:
        assert connection.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
        assert connection.execute("PRAGMA foreign_key_check").fetchall() == []


@needs_sigkill
@pytest.mark.slow
def test_kill_at_every_statement(path: Path) -> None:
    """Killed before any SQL statement of two holds, a run has whole outcomes only and at most one unfinished hold."""
    Logbook.create(path, "", "", "").close(clean=True)
    statements = 36
    run = subprocess.run(
        [sys.executable, str(WRITER), "at", str(path), str(statements)], capture_output=True, text=True, check=True
    )
    ends = [line.split()[1] for line in run.stdout.splitlines()]
    assert len(ends) == statements
    assert ends[0] == "-9"
    assert ends[-1] == "0"  # the last ones come to the end: every statement had its kill
    seen = set()
    for number in range(1, statements + 1):
        reader = Reader(path.with_name(str(number)) / path.name)
        outcomes, unfinished = reader.outcomes(), reader.unfinished()
        assert all(len(reader.readings(outcome.number)) == 3 for outcome in outcomes)
        assert len(unfinished) <= 1
        assert [intent.hold.number for intent in unfinished] in ([], [len(outcomes) + 1])
        seen.add((len(outcomes), len(unfinished)))
    assert seen == {(0, 0), (0, 1), (1, 0), (1, 1), (2, 0)}


def test_second_process_is_refused_and_told_who_has_it(path: Path) -> None:
    """Row D4: While one process writes, another gets RunInUse with the holder's process and host, and may go on
    afterwards."""
    Logbook.create(path, "", "", "").close(clean=True)
    with start("hold", str(path)) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        with pytest.raises(RunInUse, match=f"in use: held by process {holder.pid} on .*Wait until it has ended"):
            Logbook.open(path)
        holder.communicate("")
    with Logbook.open(path) as book:
        assert book.sessions() == []


@needs_sigkill
def test_lock_ends_with_its_process(path: Path) -> None:
    """A holder killed with -9 leaves its name behind but not its lock."""
    Logbook.create(path, "", "", "").close(clean=True)
    with start("hold", str(path)) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        os.kill(holder.pid, signal.SIGKILL)
    assert path.with_name("logbook.holder").exists()
    with Logbook.open(path) as book:
        assert book.begin_session(0.0, 0.0, {}) == 1
