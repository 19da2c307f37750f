"""How the logbook's file is opened, and what SQLite's errors mean to a person. No tables and no values here.

The file is opened through SQLite and in no other way: opening and closing it otherwise drops the locks of this process.
A logbook may come from a stranger: it must have exactly our tables, and what one query may bring is bounded.
"""

from __future__ import annotations

import re
import sqlite3
from collections.abc import Iterator
from contextlib import closing, contextmanager
from functools import cache
from pathlib import Path
from typing import Any

from sweeprig.errors import DiskFull, RunError, RunInUse, Where
from sweeprig.logbook.run_folder import runs_near
from sweeprig.logbook.schema import APPLICATION, BUSY_MS, FORMAT, TABLES

MOST_NAMED = 3
"""Runs that an error text names, newest first."""

LARGEST_VALUE = 32_000_000
"""Bytes of one value or row: twice the largest reply of an instrument, which is kept as it came."""

LARGEST_PAGE = 64_000_000
"""Bytes of text that one query may bring: a page of readings has about one million."""

_MOST_PARTS = 50
_SUPER_JOURNAL = bytes.fromhex("d9d505f920a163d7")

_LOCKED = (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED)
_NOT_WRITTEN = (sqlite3.SQLITE_READONLY, sqlite3.SQLITE_IOERR, sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_PERM)
_NOT_SOUND = (sqlite3.SQLITE_NOTADB, sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_TOOBIG)
_NEEDS_RECOVERY = (sqlite3.SQLITE_READONLY, sqlite3.SQLITE_CANTOPEN)
_RESUMABLE = "Nothing that was committed is lost"


@contextmanager
def mapped(path: Path, *, writing: bool) -> Iterator[None]:
    """The one place where SQLite's errors become ours: DiskFull, RunInUse or RunError, the cause kept."""
    try:
        yield
    except sqlite3.Error as error:
        raise meaning(error, path, writing=writing) from error


def meaning(error: sqlite3.Error, path: Path, *, writing: bool) -> RunError:
    """What `error` means for the logbook at `path`."""
    code = primary_code(error)
    where = Where(str(path))
    if code in _LOCKED:
        remedy = "Wait until the other process has ended, or end it, then resume"
        return RunInUse(f"the logbook stayed locked for {BUSY_MS} ms", value=str(error), where=where, remedy=remedy)
    if code in _NOT_SOUND:
        remedy = "Check that this is the logbook of a run; take a copy from before if there is one"
        return RunError("this is not a sound logbook", value=str(error), where=where, remedy=remedy)
    if code == sqlite3.SQLITE_FULL:
        remedy = f"{_RESUMABLE}: make room on the disk, then resume the run"
        return DiskFull("the logbook cannot grow, the disk is full", where=where, remedy=remedy)
    if writing and code in _NOT_WRITTEN:
        remedy = f"{_RESUMABLE}: see that the disk has room, is sound and may be written, then resume the run"
        return DiskFull("the logbook cannot be written", value=str(error), where=where, remedy=remedy)
    if code in _NEEDS_RECOVERY:
        remedy = "Copy the whole run folder to a place where you may write, and open it there"
        return RunError("the logbook cannot be opened", value=str(error), where=where, remedy=remedy)
    return RunError("the logbook cannot be used", value=str(error), where=where, remedy=_RESUMABLE)


def primary_code(error: sqlite3.Error) -> int:
    """SQLite's primary result code; 1 (a general error) where the library gives none."""
    return getattr(error, "sqlite_errorcode", sqlite3.SQLITE_ERROR) & 0xFF


def connect(path: Path, mode: str) -> sqlite3.Connection:
    """A connection in autocommit. `mode`: `ro`, `rw` (the file must be there) or `rwc` (made if need be)."""
    refuse_super_journal(path)
    uri = f"{path.absolute().as_uri()}?mode={mode}"
    connection = sqlite3.connect(uri, uri=True, isolation_level=None, timeout=BUSY_MS / 1000.0)
    connection.setlimit(sqlite3.SQLITE_LIMIT_LENGTH, LARGEST_VALUE)
    connection.setlimit(sqlite3.SQLITE_LIMIT_ATTACHED, 0)
    connection.execute("PRAGMA trusted_schema = OFF")  # what a schema says runs no function with side effects
    connection.execute("PRAGMA cell_size_check = ON")  # a page that lies about its cells is damage, found at once
    return connection


def refuse_super_journal(path: Path) -> None:
    """RunError where a rollback journal names a journal of several databases.

    The library would delete the file of that name, wherever it lies, on opening; a logbook never has such a journal.
    """
    journal = path.with_name(path.name + "-journal")
    if not journal.is_file():
        return
    try:
        with journal.open("rb") as file:
            file.seek(-len(_SUPER_JOURNAL), 2)
            named = file.read() == _SUPER_JOURNAL
    except OSError:
        return  # gone, or too short to name anything
    if named:
        what, remedy = "this journal belongs to no logbook", "Delete it, if the run came from somebody else"
        raise RunError(what, where=Where(str(journal)), remedy=remedy)


def open_for_writing(path: Path) -> sqlite3.Connection:
    """The logbook with write-ahead log and full synchronisation. RunError, RunInUse or DiskFull where that fails."""
    require(path)
    with mapped(path, writing=True):
        connection = connect(path, "rw")
        try:
            check_format(connection, path)
            journal = connection.execute("PRAGMA journal_mode = WAL").fetchone()[0]
            if journal != "wal":
                what = "this disk cannot hold a logbook that is read while it is written"
                raise RunError(what, where=Where(str(path)), remedy="Run on a local disk, and copy afterwards")
            connection.execute("PRAGMA synchronous = FULL")
            connection.execute("PRAGMA fullfsync = ON")  # macOS only: its fsync alone leaves data in the disk's cache
            connection.execute("PRAGMA foreign_keys = ON")
        except BaseException:
            connection.close()
            raise
    return connection


def ask_once(path: Path, sql: str, values: tuple[object, ...]) -> list[tuple[object, ...]]:
    """The rows of one query, on a read-only connection that is closed before this returns.

    A connection that stays open would keep the writer from ending the run as one file.
    """
    require(path)
    with mapped(path, writing=False):
        try:
            return _ask(path, "ro", sql, values)
        except sqlite3.Error as error:
            if primary_code(error) not in _NEEDS_RECOVERY:
                raise
        # Killed in the middle of a rollback journal: only a connection that may write can put that right.
        return _ask(path, "rw", sql, values)


def _ask(path: Path, mode: str, sql: str, values: tuple[object, ...]) -> list[tuple[object, ...]]:
    with closing(connect(path, mode)) as connection:
        connection.execute("PRAGMA query_only = ON")
        check_format(connection, path)
        return bounded(connection.execute(sql, values), path)


def bounded(rows: sqlite3.Cursor, path: Path) -> list[tuple[Any, ...]]:
    """All rows of one query. RunError where they hold more text than a page of a logbook can."""
    taken, left = [], LARGEST_PAGE
    for row in rows:
        left -= sum(len(value) for value in row if isinstance(value, str | bytes))
        if left < 0:
            raise too_much(path, LARGEST_PAGE)
        taken.append(row)
    return taken


def too_much(path: Path, most: int) -> RunError:
    what, remedy = "the logbook holds more text than a run writes", "Check that this is the logbook of a run"
    return RunError(what, value=f"more than {most:,} bytes", where=Where(str(path)), remedy=remedy)


def check_format(connection: sqlite3.Connection, path: Path) -> None:
    """RunError unless the file is a logbook of the format that this release reads."""
    application = connection.execute("PRAGMA application_id").fetchone()[0]
    found = connection.execute("PRAGMA user_version").fetchone()[0]
    where = Where(str(path))
    if application != APPLICATION:
        remedy = "Name a run folder, or the logbook.sqlite in it"
        raise RunError("this database is not a logbook", where=where, remedy=remedy)
    if found != FORMAT:
        newer = "It was written by a newer release: install that one to read it"
        remedy = newer if found > FORMAT else "It is damaged, or was changed by another program"
        raise RunError(
            "the logbook's format is unknown to this release",
            value=str(found),
            allowed=str(FORMAT),
            where=where,
            remedy=remedy,
        )
    if _schema_of(connection) != _tables():
        remedy = "It is damaged, or was made by another program: what its tables do cannot be known"
        raise RunError("this logbook has other tables than a run writes", where=where, remedy=remedy)


def _schema_of(connection: sqlite3.Connection) -> set[tuple[str, str, str]]:
    """(kind, name, definition without comments and blanks) of all there is: tables, indices, views, triggers."""
    found = set()
    for kind, name, sql in connection.execute("SELECT type, name, sql FROM sqlite_master"):
        found.add((kind, name, re.sub(r"--[^\n]*|\s+", "", sql or "")))
        if len(found) > _MOST_PARTS:
            break
    return found


@cache
def _tables() -> set[tuple[str, str, str]]:
    """What a logbook has."""
    with closing(sqlite3.connect(":memory:")) as made:
        made.executescript(TABLES)
        return _schema_of(made)


def require(path: Path) -> None:
    """RunError where there is no file at `path`; the runs that lie near are named."""
    if path.is_file():
        return
    folder = path.parent
    if folder.is_dir():
        what, where = "there is no logbook here", path
    elif folder.exists():
        what, where = "this is a file, and a run folder is wanted", folder
    else:
        what, where = "there is no such run folder", folder
    remedy = "Name a run folder; a run that ended before its first hold has no logbook: start it anew"
    near = runs_near(folder)
    if near is not None:
        place, names = near
        more = f" and {len(names) - MOST_NAMED} older" if len(names) > MOST_NAMED else ""
        remedy = f"Name a run folder; in {place} lie: {', '.join(names[:MOST_NAMED])}{more}"
    raise RunError(what, where=Where(str(where)), remedy=remedy, topic="resume")
