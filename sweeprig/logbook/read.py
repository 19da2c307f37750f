"""Reading a logbook: pages of rows in, values out. Never writes; holds no transaction longer than one page.

`Reader` works on a finished run, on one that is being written, and on one whose writer was killed.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, TypeVar

from sweeprig.errors import RunError, Where
from sweeprig.holds import Outcome
from sweeprig.logbook import schema
from sweeprig.logbook.database import ask_once
from sweeprig.logbook.values import (
    Event,
    InstrumentSeen,
    Intent,
    Session,
    hold_from_json,
    load,
    outcome_from_json,
)
from sweeprig.quantities import Reading
from sweeprig.roles import Identity

Row = tuple[Any, ...]
Value = TypeVar("Value")

BEFORE_ALL = -1


class Contents(ABC):
    """What a logbook tells, whoever asks: the writer on its own connection, a reader page by page.

    Errors: RunError for a row that is no such value (damage), RunInUse where the file stays locked.
    """

    path: Path

    @abstractmethod
    def _ask(self, sql: str, values: tuple[object, ...] = ()) -> list[Row]:
        """All rows of one query; no transaction is open when it returns."""

    def head(self) -> dict[str, str]:
        """`job_text`, `job_hash`, `software`."""
        return dict(self._ask(schema.HEAD))

    def sessions(self) -> list[Session]:
        return self._all(schema.SESSIONS, _session)

    def intents(self) -> list[Intent]:
        """Every hold that was begun, in number order."""
        return self._all(schema.INTENTS, _intent)

    def unfinished(self) -> list[Intent]:
        """Holds begun without an outcome: the running one, or what a killed session left behind."""
        return self._all(schema.UNFINISHED, _intent)

    def outcomes(self, after: int = BEFORE_ALL) -> list[Outcome]:
        """In number order; only those with a number above `after`."""
        return self._all(schema.OUTCOMES, _outcome, after)

    def events(self) -> list[Event]:
        """In the order of writing."""
        return self._all(schema.EVENTS, _event)

    def instruments(self) -> list[InstrumentSeen]:
        """In the order of writing: the last one of a name is the present one."""
        return self._all(schema.INSTRUMENTS, _instrument)

    def readings(self, hold: int) -> list[Reading]:
        """All readings of one hold, in the order they were given."""
        rows = (row for page in self._pages(schema.READINGS_OF_HOLD, BEFORE_ALL, hold) for row in page)
        return [self._decode(_reading, row) for row in rows]

    def reading_rows(self) -> Iterator[list[Row]]:
        """Pages of (number, hold, session, channel, unit, value, u, at, flags, raw), as stored: see `flags_of`."""
        return self._pages(schema.READINGS, BEFORE_ALL)

    def last_times(self) -> tuple[float, float] | None:
        """(run clock, UTC) in s of the last thing written; None for a run without a session."""
        rows = self._ask(schema.LAST_TIMES)
        return (rows[0][0], rows[0][1]) if rows else None

    def _all(self, sql: str, decode: Callable[[Row], Value], after: int = BEFORE_ALL) -> list[Value]:
        return [self._decode(decode, row) for page in self._pages(sql, after) for row in page]

    def _pages(self, sql: str, after: int, *more: object) -> Iterator[list[Row]]:
        while True:
            page = self._ask(sql, (after, *more, schema.PAGE_ROWS))
            if page:
                yield page
            if len(page) < schema.PAGE_ROWS:
                return
            after = page[-1][0]

    def _decode(self, decode: Callable[[Row], Value], row: Row) -> Value:
        try:
            return decode(row)
        except (KeyError, TypeError, ValueError) as error:
            raise RunError(
                f"row {row[0]} of the logbook cannot be read as {decode.__name__.strip('_')}",
                value=f"{type(error).__name__}: {error}",
                where=Where(str(self.path)),
                remedy="The file was damaged or changed by another program; take a copy from before if there is one",
            ) from error


class Reader(Contents):
    """A logbook opened for reading only. Opens the file for each page and closes it again: nothing stays open."""

    def __init__(self, path: Path) -> None:
        """RunError where there is no logbook of a known format at `path`."""
        self.path = path
        self.head()

    def _ask(self, sql: str, values: tuple[object, ...] = ()) -> list[Row]:
        return ask_once(self.path, sql, values)


def flags_of(stored: str) -> tuple[str, ...]:
    """The flags of a reading from their stored text."""
    return tuple(load(stored)) if stored else ()


def _session(row: Row) -> Session:
    number, began, began_utc, info = row
    return Session(number, began, began_utc, load(info))


def _intent(row: Row) -> Intent:
    _, session, began, began_utc, hold = row
    return Intent(hold_from_json(load(hold)), session, began, began_utc)


def _outcome(row: Row) -> Outcome:
    _, hold, outcome = row
    return outcome_from_json(load(outcome), hold_from_json(load(hold)))


def _event(row: Row) -> Event:
    _, session, kind, at, utc, data = row
    return Event(kind, at, utc, load(data), session)


def _instrument(row: Row) -> InstrumentSeen:
    _, session, name, maker, model, serial, firmware, settings, at = row
    return InstrumentSeen(session, name, Identity(maker, model, serial, firmware), load(settings), at)


def _reading(row: Row) -> Reading:
    _, _, _, channel, unit, value, u, at, flags, raw = row
    return Reading(value, u, unit, at, channel, flags_of(flags), raw)
