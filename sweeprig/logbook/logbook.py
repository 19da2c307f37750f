"""The logbook of one run, opened for writing. The only writer; one process holds it at a time.

Intent before the drive moves, outcome with its readings in one transaction, both on disk before the call returns.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING

from sweeprig.errors import RunError, Where
from sweeprig.holds import Hold, Outcome
from sweeprig.logbook import run_folder, schema
from sweeprig.logbook.database import bounded, connect, mapped, open_for_writing, primary_code, require
from sweeprig.logbook.read import Contents, Row
from sweeprig.logbook.values import Event, dump, hold_from_json, hold_to_json, load, outcome_to_json, sound
from sweeprig.quantities import Reading
from sweeprig.roles import Identity

if TYPE_CHECKING:
    from types import TracebackType

    from sweeprig.logbook.traffic import TrafficLog

QUEUE_EVENTS = 1_000
"""Events that may wait for the next commit; more are committed at once, so that a long wait holds no memory."""

_INSERT_READING = "INSERT INTO readings (hold, session, channel, value, u, at, flags, raw) VALUES (?,?,?,?,?,?,?,?)"


class Logbook(Contents):
    """Made by `Logbook.create` or `Logbook.open`; every write either is on disk when it returns, or raises.

    Errors: DiskFull (the file could not be written: nothing of this call is kept, and it may be repeated), RunInUse
    (another process has it), RunError (not a logbook, or a write that its rules forbid).
    """

    def __init__(self, path: Path, lock: run_folder.FolderLock, traffic: TrafficLog | None) -> None:
        self.path = path
        self.traffic = traffic
        self._lock = lock
        self._connection = open_for_writing(path)
        self._queue: list[Event] = []
        self._closed = False
        self._channels: dict[tuple[str, str], int] = {
            (channel, unit): number for number, channel, unit in self._ask("SELECT number, channel, unit FROM channels")
        }
        self._session: int = self._ask("SELECT coalesce(max(number), 0) FROM sessions")[0][0]

    @classmethod
    def create(
        cls, path: Path, job_text: str, job_hash: str, software: str, *, traffic: TrafficLog | None = None
    ) -> Logbook:
        """A new logbook at `path`, which must not exist. It appears whole: a kill leaves none or an empty one."""
        run_folder.refuse_network(path.parent)
        lock = run_folder.FolderLock(path.parent, "logbook").acquire()
        try:
            if path.exists():
                remedy = "Resume this run, or start a new one in its own folder"
                raise RunError("there is a logbook already", where=Where(str(path)), remedy=remedy)
            _build(path, {"job_text": job_text, "job_hash": job_hash, "software": software})
            return cls(path, lock, traffic)
        except BaseException:
            lock.release()
            raise

    @classmethod
    def open(cls, path: Path, *, traffic: TrafficLog | None = None) -> Logbook:
        """An existing logbook, also one whose writer was killed: what it had committed is there."""
        require(path)
        run_folder.refuse_network(path.parent)
        lock = run_folder.FolderLock(path.parent, "logbook").acquire()
        try:
            return cls(path, lock, traffic)
        except BaseException:
            lock.release()
            raise

    def begin_session(self, began: float, began_utc: float, info: Mapping[str, object]) -> int:
        """Note a start or resume (run clock s, UTC s); its number: 1, 2, …"""
        number = self._session + 1
        with self._transaction() as connection:
            row = (number, began, began_utc, dump(info))
            connection.execute("INSERT INTO sessions (number, began, began_utc, info) VALUES (?,?,?,?)", row)
        self._session = number
        return number

    def intend(self, hold: Hold, session: int, began: float, began_utc: float) -> None:
        """Commit that `hold` is about to begin: to be called before the drive moves. RunError for a used number."""
        with self._transaction() as connection:
            if connection.execute("SELECT 1 FROM holds WHERE number = ?", (hold.number,)).fetchone():
                raise self._refused(f"hold {hold.number} was begun already", "Each hold has a number of its own")
            self._require_session(session)
            row = (hold.number, session, began, began_utc, dump(hold_to_json(hold)))
            connection.execute("INSERT INTO holds (number, session, began, began_utc, hold) VALUES (?,?,?,?,?)", row)

    def conclude(self, outcome: Outcome, readings: Sequence[Reading], events: Sequence[Event] = ()) -> None:
        """Commit an outcome, all its readings and the events that wait, in one transaction.

        RunError for a hold that was never intended, that differs from the intended one, or that has an outcome.
        """
        fresh: dict[tuple[str, str], int] = {}
        with self._transaction(events) as connection:
            self._require_concludable(connection, outcome)
            row = (outcome.number, outcome.ended, outcome.ended_utc, dump(outcome_to_json(outcome, with_hold=False)))
            connection.execute("INSERT INTO outcomes (number, ended, ended_utc, outcome) VALUES (?,?,?,?)", row)
            rows = self._reading_rows(outcome.number, outcome.session, readings, fresh)
            new = [(number, channel, unit) for (channel, unit), number in fresh.items()]
            connection.executemany("INSERT INTO channels (number, channel, unit) VALUES (?,?,?)", new)
            connection.executemany(_INSERT_READING, rows)
        self._channels.update(fresh)

    def event(self, kind: str, at: float, utc: float, data: Mapping[str, object], *, now: bool = False) -> None:
        """Note something that happened (run clock s, UTC s): written with the next commit, or at once with `now`."""
        self._queue.append(Event(kind, at, utc, dict(data), self._session))
        if now or len(self._queue) >= QUEUE_EVENTS:
            with self._transaction():
                pass

    def instrument(self, session: int, name: str, identity: Identity, settings: Mapping[str, str], at: float) -> None:
        """Commit who answers under `name` of the rig file in this session, and its settings."""
        who = (identity.maker, identity.model, identity.serial, identity.firmware)
        row = (session, _text(name), *(_text(part) for part in who), dump(settings), at)
        with self._transaction() as connection:
            self._require_session(session)
            columns = "session, name, maker, model, serial, firmware, settings, at"
            connection.execute(f"INSERT INTO instruments ({columns}) VALUES (?,?,?,?,?,?,?,?)", row)

    def close(self, clean: bool) -> bool:
        """Write what waits and let go; True where the run is now one file.

        `clean`: checkpoint and leave the write-ahead log, so that one file holds all. A reader that is just looking
        prevents that; then nothing is lost and the next clean end does it. Not clean: never raises.
        """
        if self._closed:
            return False
        self._closed = True
        try:
            if self._queue:
                with self._transaction():
                    pass
            return clean and self._become_one_file()
        except RunError:
            if clean:
                raise
            return False  # something went wrong before this, and that is what shall be told
        finally:
            self._connection.close()
            self._lock.release()

    def __enter__(self) -> Logbook:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, tb: TracebackType | None) -> None:
        self.close(clean=error is None)

    def _ask(self, sql: str, values: tuple[object, ...] = ()) -> list[Row]:
        with mapped(self.path, writing=True):
            return bounded(self._connection.execute(sql, values), self.path)

    @contextmanager
    def _transaction(self, events: Sequence[Event] = ()) -> Iterator[sqlite3.Connection]:
        """What is written inside is kept whole or not at all; the waiting events go with it."""
        connection = self._connection
        with mapped(self.path, writing=True):
            connection.execute("BEGIN IMMEDIATE")
            try:
                yield connection
                self._write_events(connection, events)
                connection.execute("COMMIT")
            except BaseException:
                with suppress(sqlite3.Error):  # after some errors SQLite has rolled back by itself
                    connection.execute("ROLLBACK")
                raise
        self._queue.clear()
        if self.traffic is not None:
            self.traffic.flush()

    def _write_events(self, connection: sqlite3.Connection, events: Sequence[Event]) -> None:
        rows = [
            (event.session or self._session, _text(event.kind), event.at, event.utc, dump(event.data))
            for event in (*self._queue, *events)
        ]
        connection.executemany("INSERT INTO events (session, kind, at, utc, data) VALUES (?,?,?,?,?)", rows)

    def _reading_rows(
        self, number: int, session: int, readings: Sequence[Reading], fresh: dict[tuple[str, str], int]
    ) -> list[tuple[object, ...]]:
        """Rows for the readings table; channels that are new get a number and go into `fresh`."""
        known = self._channels
        rows: list[tuple[object, ...]] = []
        for given in readings:
            value, u = given.value, given.u
            odd = u != u or (value is not None and value - value != 0.0)  # NaN or infinite, without a call
            reading = sound(given) if odd else given
            name = (_text(reading.channel), _text(reading.unit))
            channel = known.get(name) or fresh.setdefault(name, len(known) + len(fresh) + 1)
            flags = dump(reading.flags) if reading.flags else ""
            row = (number, session, channel, reading.value, reading.u, reading.at, flags, _text(reading.raw))
            rows.append(row)
        return rows

    def _require_concludable(self, connection: sqlite3.Connection, outcome: Outcome) -> None:
        number = outcome.number
        found = connection.execute("SELECT hold FROM holds WHERE number = ?", (number,)).fetchone()
        if found is None:
            raise self._refused(f"hold {number} was never begun", "Intend a hold before it is performed")
        if hold_from_json(load(found[0])) != outcome.hold:
            remedy = "An outcome carries the hold as it was intended; what was done otherwise belongs in its flags"
            raise self._refused(f"the outcome of hold {number} is for another hold than the intended one", remedy)
        if connection.execute("SELECT 1 FROM outcomes WHERE number = ?", (number,)).fetchone():
            raise self._refused(f"hold {number} has an outcome already", "Each hold has exactly one outcome")
        self._require_session(outcome.session)

    def _require_session(self, session: int) -> None:
        if not 1 <= session <= self._session:
            allowed = f"1 to {self._session}" if self._session else "none yet"
            raise self._refused(f"there is no session {session} (sessions: {allowed})", "Begin a session first")

    def _refused(self, what: str, remedy: str) -> RunError:
        return RunError(what, where=Where(str(self.path)), remedy=remedy)

    def _become_one_file(self) -> bool:
        with mapped(self.path, writing=True):
            try:
                self._connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
                return bool(self._connection.execute("PRAGMA journal_mode = DELETE").fetchone()[0] == "delete")
            except sqlite3.OperationalError as error:
                if primary_code(error) not in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
                    raise
                return False


def _build(path: Path, head: Mapping[str, str]) -> None:
    """Make the file beside its place and move it there: whoever sees a logbook sees a whole one."""
    beside = path.with_name(path.name + ".new")
    for left_over in (beside, beside.with_name(beside.name + "-journal")):
        left_over.unlink(missing_ok=True)
    with mapped(path, writing=True), closing(connect(beside, "rwc")) as connection:
        connection.execute("PRAGMA synchronous = FULL")
        connection.executescript(f"BEGIN;{schema.TABLES}")
        rows = [(key, _text(text)) for key, text in head.items()]
        connection.executemany("INSERT INTO run (key, value) VALUES (?,?)", rows)
        connection.execute("COMMIT")
    run_folder.put_in_place(beside, path)


def _text(text: str) -> str:
    """Text that SQLite takes: a lone surrogate, as broken bytes leave it, is written as its escape."""
    return text if text.isascii() else text.encode("utf-8", "backslashreplace").decode("utf-8")
