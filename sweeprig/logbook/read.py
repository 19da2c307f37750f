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
from sweeprig.logbook.database import ask_once, too_much
from sweeprig.logbook.values import (
    Event,
    InstrumentSeen,
    Intent,
    Session,
    as_count,
    as_number,
    as_table,
    as_text,
    as_texts,
    hold_from_json,
    load,
    outcome_from_json,
)
from sweeprig.quantities import Reading
from sweeprig.roles import Identity

Row = tuple[Any, ...]
Value = TypeVar("Value")

BEFORE_ALL = -1

LARGEST_WHOLE = 256_000_000
"""Bytes of text of one kind that are held at once: thirty long nights of outcomes."""


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
        return dict(self._decode(_head, row) for row in self._ask(schema.HEAD))

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
        return self._all(schema.READINGS_OF_HOLD, _reading, BEFORE_ALL, hold)

    def reading_rows(self) -> Iterator[list[Row]]:
        """Pages of (number, hold, session, channel, unit, value, u, at, flags, raw), as stored: see `flags_of`."""
        for page in self._pages(schema.READINGS, BEFORE_ALL):
            # one row of each set of types, and of each text of flags, stands for all: a page has a handful of either
            for row in {(row[8], *map(type, row)): row for row in page}.values():
                self._decode(_reading, row)
            yield page

    def last_times(self) -> tuple[float, float] | None:
        """(run clock, UTC) in s of the last thing written; None for a run without a session."""
        rows = self._ask(schema.LAST_TIMES)
        return self._decode(_times, rows[0]) if rows else None

    def _all(self, sql: str, decode: Callable[[Row], Value], after: int = BEFORE_ALL, *more: object) -> list[Value]:
        found, left = [], LARGEST_WHOLE
        for page in self._pages(sql, after, *more):
            left -= sum(len(value) for row in page for value in row if isinstance(value, str))
            if left < 0:
                raise too_much(self.path, LARGEST_WHOLE)
            found += [self._decode(decode, row) for row in page]
        return found

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
        except (KeyError, TypeError, ValueError, OverflowError) as error:
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
    return as_texts(load(stored)) if stored else ()


def _head(row: Row) -> tuple[str, str]:
    key, value = row
    return as_text(key), as_text(value)


def _real(value: object) -> float:
    """`value` of a column of numbers: a database also takes a text there."""
    if isinstance(value, str):
        raise TypeError("a number is wanted, not a text")
    return as_number(value)


def _times(row: Row) -> tuple[float, float]:
    at, utc = row
    return _real(at), _real(utc)


def _session(row: Row) -> Session:
    number, began, began_utc, info = row
    return Session(as_count(number), _real(began), _real(began_utc), as_table(load(info)))


def _intent(row: Row) -> Intent:
    _, session, began, began_utc, hold = row
    return Intent(hold_from_json(load(hold)), as_count(session), _real(began), _real(began_utc))


def _outcome(row: Row) -> Outcome:
    _, hold, outcome = row
    return outcome_from_json(load(outcome), hold_from_json(load(hold)))


def _event(row: Row) -> Event:
    _, session, kind, at, utc, data = row
    return Event(as_text(kind), _real(at), _real(utc), as_table(load(data)), as_count(session))


def _instrument(row: Row) -> InstrumentSeen:
    _, session, name, maker, model, serial, firmware, settings, at = row
    who = Identity(as_text(maker), as_text(model), as_text(serial), as_text(firmware))
    told = {key: as_text(value) for key, value in as_table(load(settings)).items()}
    return InstrumentSeen(as_count(session), as_text(name), who, told, _real(at))


def _reading(row: Row) -> Reading:
    _, hold, session, channel, unit, value, u, at, flags, raw = row
    as_count(hold), as_count(session)
    number = None if value is None else _real(value)
    return Reading(number, _real(u), as_text(unit), _real(at), as_text(channel), flags_of(as_text(flags)), as_text(raw))
