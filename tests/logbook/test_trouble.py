"""Full disks, locks, foreign files: what the database says, and what a person reads."""

from __future__ import annotations

import re
import shutil
import sqlite3
import sys
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, closing, contextmanager
from pathlib import Path

import pytest

from sweeprig.errors import DiskFull, RunError, RunInUse
from sweeprig.holds import Hold, Outcome
from sweeprig.logbook import Logbook, Reader
from sweeprig.logbook.database import mapped, meaning
from sweeprig.quantities import Reading

MakeHold = Callable[..., Hold]
MakeOutcome = Callable[..., Outcome]
MakeReadings = Callable[..., list[Reading]]

# SQLite's primary result codes 1 to 26: https://www.sqlite.org/rescode.html (certified: the library's own constants)
CODES = {
    value: name
    for name, value in vars(sqlite3).items()
    if name.startswith("SQLITE_") and isinstance(value, int) and 1 <= value <= 26
    and re.fullmatch(r"SQLITE_(ERROR|INTERNAL|PERM|ABORT|BUSY|LOCKED|NOMEM|READONLY|INTERRUPT|IOERR|CORRUPT|NOTFOUND|"
                     r"FULL|CANTOPEN|PROTOCOL|EMPTY|SCHEMA|TOOBIG|CONSTRAINT|MISMATCH|MISUSE|NOLFS|AUTH|FORMAT|RANGE|"
                     r"NOTADB)", name)
}  # fmt: skip


def error_with(code: int) -> sqlite3.Error:
    error = sqlite3.OperationalError("as the library says")
    error.sqlite_errorcode = code
    return error


@pytest.mark.parametrize("code", sorted(CODES))
def test_every_database_error_is_one_of_ours(code: int) -> None:
    """Every result code of the database library, extended ones too, becomes a RunError with file and cause kept."""
    with pytest.raises(RunError) as caught, mapped(Path("run/logbook.sqlite"), writing=True):
        raise error_with(code | 3 << 8)
    assert isinstance(caught.value.__cause__, sqlite3.Error)
    assert str(caught.value).startswith("run/logbook.sqlite: ") or sys.platform == "win32"
    assert caught.value.remedy


@pytest.mark.parametrize(
    ("name", "writing", "kind"),
    [
        ("FULL", True, DiskFull),
        ("READONLY", True, DiskFull),
        ("IOERR", True, DiskFull),
        ("CANTOPEN", True, DiskFull),
        ("BUSY", True, RunInUse),
        ("LOCKED", False, RunInUse),
        ("NOTADB", False, RunError),
        ("READONLY", False, RunError),
        ("IOERR", False, RunError),
    ],
)
def test_errors_have_their_class(name: str, writing: bool, kind: type[RunError]) -> None:
    """A write that fails is DiskFull, a lock is RunInUse, and a reader never says that a disk is full by mistake."""
    code = {text: value for value, text in CODES.items()}[f"SQLITE_{name}"]
    assert type(meaning(error_with(code), Path("x"), writing=writing)) is kind


@contextmanager
def pages_limited(book: Logbook, more: int) -> Iterator[None]:
    """The database may grow by `more` pages only."""
    ask = book._connection.execute
    pages = ask("PRAGMA page_count").fetchone()[0]
    ask(f"PRAGMA max_page_count = {pages + more}")
    yield
    ask("PRAGMA max_page_count = 1000000")


@contextmanager
def file_size_limited(_: Logbook, more: int) -> Iterator[None]:
    """No file of this process may grow beyond `more` bytes: writes fail as on a broken or full disk."""
    import resource

    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (more, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))


LIMITS = [
    pytest.param(pages_limited, 4, "the disk is full", id="no more pages"),
    pytest.param(
        file_size_limited,
        100_000,
        "cannot be written: disk I/O error",
        id="no more bytes",
        marks=pytest.mark.skipif(sys.platform == "win32", reason="needs a limit of the file size"),
    ),
]


@pytest.mark.parametrize(("limited", "more", "text"), LIMITS)
def test_full_disk_loses_nothing_that_was_committed(
    book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome, make_readings: MakeReadings,
    limited: Callable[[Logbook, int], AbstractContextManager[None]], more: int, text: str,
) -> None:  # fmt: skip
    """A full disk raises DiskFull with path and advice, keeps all earlier commits, and the same call works later."""
    first, second = make_hold(1), make_hold(2)
    book.intend(first, 1, 0.0, 0.0)
    book.conclude(make_outcome(first), make_readings(first))
    book.intend(second, 1, 30.0, 30.0)
    many = make_readings(second, 5_000)
    with limited(book, more), pytest.raises(DiskFull, match=text) as caught:
        book.conclude(make_outcome(second), many)
    assert str(book.path) in str(caught.value)
    assert "then resume the run" in str(caught.value)
    assert isinstance(caught.value, OSError)
    assert book.outcomes() == [make_outcome(first)]
    assert [intent.hold.number for intent in book.unfinished()] == [2]
    book.conclude(make_outcome(second), many)
    assert len(book.readings(2)) == 5_000


def test_full_disk_at_the_end_still_lets_go(path: Path, book: Logbook) -> None:
    """A clean end that cannot be written says so, and still closes the file and gives back the lock."""
    for index in range(900):
        book.event("notice", 0.0, 0.0, {"text": "x" * 200, "index": index})
    with pages_limited(book, 1), pytest.raises(DiskFull):
        book.event("notice", 0.0, 0.0, {}, now=True)
    book._connection.execute("PRAGMA max_page_count = 1")
    with pytest.raises(DiskFull):
        book.close(clean=True)
    with Logbook.open(path) as again:
        assert again.events() == []


def test_foreign_lock_is_run_in_use(path: Path, book: Logbook, make_hold: MakeHold) -> None:
    """A lock held by another program beyond the wait is RunInUse; when it is gone the same call works."""
    with closing(sqlite3.connect(path, isolation_level=None)) as other:
        other.execute("BEGIN IMMEDIATE")
        with pytest.raises(RunInUse, match="stayed locked for 500 ms"):
            book.intend(make_hold(1), 1, 0.0, 0.0)
        other.execute("ROLLBACK")
    book.intend(make_hold(1), 1, 0.0, 0.0)
    assert len(book.unfinished()) == 1


def set_pragma(path: Path, pragma: str) -> None:
    with closing(sqlite3.connect(path)) as connection:
        connection.execute(f"PRAGMA {pragma}")


@pytest.mark.parametrize("opening", [Reader, Logbook.open])
def test_newer_format_is_refused(path: Path, book: Logbook, opening: Callable[[Path], object]) -> None:
    """A logbook of an unknown format is not touched; the text names both formats and what to do."""
    book.close(clean=True)
    set_pragma(path, "user_version = 2")
    text = r"format is unknown to this release: 2 \(allowed: 1\)\. It was written by a newer release"
    with pytest.raises(RunError, match=text):
        opening(path)


@pytest.mark.parametrize("opening", [Reader, Logbook.open])
def test_foreign_database_is_refused(path: Path, opening: Callable[[Path], object]) -> None:
    """A database that is no logbook is refused and left as it was."""
    set_pragma(path, "user_version = 1")
    before = path.read_bytes()
    with pytest.raises(RunError, match="not a logbook"):
        opening(path)
    assert path.read_bytes() == before


@pytest.mark.parametrize("opening", [Reader, Logbook.open])
def test_text_file_is_refused(path: Path, opening: Callable[[Path], object]) -> None:
    """A file that is no database at all is refused with a clear text."""
    path.write_text("this is no database\n" * 100)
    with pytest.raises(RunError, match="not a sound logbook"):
        opening(path)


@pytest.mark.parametrize("opening", [Reader, Logbook.open])
def test_missing_file_is_refused_and_not_made(path: Path, opening: Callable[[Path], object]) -> None:
    """Opening what is not there creates nothing."""
    with pytest.raises(RunError, match="there is no logbook here"):
        opening(path)
    assert list(path.parent.iterdir()) == []


def test_damaged_row_is_named(path: Path, book: Logbook, make_hold: MakeHold) -> None:
    """A row that is no hold any more is reported with its number, not as a KeyError."""
    book.intend(make_hold(6), 1, 0.0, 0.0)
    book.close(clean=True)
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("UPDATE holds SET hold = '{}'")
    with pytest.raises(RunError, match="row 6 of the logbook cannot be read as intent: KeyError"):
        Reader(path).unfinished()


def test_reader_does_not_hinder_the_writer(
    path: Path, book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome, make_readings: MakeReadings
) -> None:
    """A reader in the middle of a page sees the state before, the writer commits meanwhile, nobody waits."""
    hold = make_hold(1)
    book.intend(hold, 1, 0.0, 0.0)
    with closing(sqlite3.connect(f"{path.as_uri()}?mode=ro", uri=True, isolation_level=None, timeout=0)) as page:
        page.execute("BEGIN")
        assert page.execute("SELECT count(*) FROM outcomes").fetchone() == (0,)
        book.conclude(make_outcome(hold), make_readings(hold))
        assert page.execute("SELECT count(*) FROM outcomes").fetchone() == (0,)
        assert Reader(path).outcomes() == [make_outcome(hold)]
        assert book.close(clean=True) is False  # the page holds the write-ahead log
    assert Reader(path).readings(1) == make_readings(hold)
    with Logbook.open(path) as again:
        assert again.close(clean=True) is True


def test_reader_leaves_nothing_open(path: Path, book: Logbook) -> None:
    """A reader that has read does not keep the writer from ending the run as one file."""
    reader = Reader(path)
    assert len(reader.sessions()) == 1
    pages = reader.reading_rows()
    assert list(pages) == []
    assert book.close(clean=True) is True


def test_reader_of_a_half_written_transaction(path: Path, book: Logbook) -> None:
    """What is not committed is not seen."""
    book._connection.execute("BEGIN IMMEDIATE")
    book._connection.execute("INSERT INTO sessions VALUES (2, 0.0, 0.0, '{}')")
    assert [session.number for session in Reader(path).sessions()] == [1]
    book._connection.execute("ROLLBACK")


def test_killed_between_the_journals_is_read(path: Path, tmp_path: Path, book: Logbook) -> None:
    """A copy with a hot rollback journal, as a kill during the clean end leaves it, reads as before that change."""
    book.close(clean=True)
    copied = tmp_path / "copied" / path.name
    copied.parent.mkdir()
    with closing(sqlite3.connect(path, isolation_level=None)) as half:
        half.execute("PRAGMA cache_size = 1")
        half.execute("BEGIN IMMEDIATE")
        half.execute("UPDATE sessions SET began = 77.0")
        half.executemany("INSERT INTO run VALUES (?, ?)", [(str(index), "x" * 900) for index in range(400)])
        for name in (path.name, f"{path.name}-journal"):
            shutil.copy(path.with_name(name), copied.with_name(name))
        half.execute("ROLLBACK")
    reader = Reader(copied)
    assert [session.began for session in reader.sessions()] == [0.0]
    assert set(reader.head()) == {"job_text", "job_hash", "software"}


def test_pages_are_bounded(
    monkeypatch: pytest.MonkeyPatch, path: Path, book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome,
    make_readings: MakeReadings,
) -> None:  # fmt: skip
    """More rows than a page come in several transactions, each once and in order, also when they fill pages exactly."""
    monkeypatch.setattr("sweeprig.logbook.schema.PAGE_ROWS", 5)
    for number in range(1, 4):
        hold = make_hold(number)
        book.intend(hold, 1, 0.0, 0.0)
        book.conclude(make_outcome(hold), make_readings(hold, 5))
    pages = [[row[0] for row in page] for page in Reader(path).reading_rows()]
    assert pages == [[1, 2, 3, 4, 5], [6, 7, 8, 9, 10], [11, 12, 13, 14, 15]]
    assert Reader(path).readings(2) == make_readings(make_hold(2), 5)
