"""A run as tables: the columns of holds and readings with their units, and CSV files of them.

Text that a spreadsheet would run as a formula is defused; numbers stay numbers, with all their digits.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Mapping, Sequence
from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import TextIO

from sweeprig.holds import Hold, Outcome
from sweeprig.logbook.read import Contents, Row, flags_of
from sweeprig.logbook.run_folder import os_errors_at

HOLDS = "holds.csv"
READINGS = "readings.csv"
READING_COLUMNS = ("hold", "session", "at (s)", "channel", "unit", "value", "u", "flags", "raw")
"""`value` and `u` (standard uncertainty) are in the unit that stands beside them: channels differ from row to row."""

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")  # full-width: East Asian spreadsheets
_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)

Columns = dict[str, list[object]]


def hold_columns(outcomes: Sequence[Outcome]) -> Columns:
    """Column name with unit → one value an outcome; then `channel (unit)` and `u of channel (unit)` of every mean.

    UTC columns hold aware datetimes; None where there is nothing.
    """
    columns: Columns = {
        "number": [outcome.number for outcome in outcomes],
        "session": [outcome.session for outcome in outcomes],
        "status": [outcome.status.value for outcome in outcomes],
        "verdict": [outcome.verdict.value for outcome in outcomes],
        **_setting_columns([outcome.hold for outcome in outcomes]),
        "exposed (s)": [outcome.exposed_s for outcome in outcomes],
        "event after (s)": [outcome.event_between_s[0] for outcome in outcomes],
        "event before (s)": [outcome.event_between_s[1] for outcome in outcomes],
        "restarts": [outcome.restarts for outcome in outcomes],
        "began (s)": [outcome.began for outcome in outcomes],
        "ended (s)": [outcome.ended for outcome in outcomes],
        "began (UTC)": [_utc(outcome.began_utc) for outcome in outcomes],
        "ended (UTC)": [_utc(outcome.ended_utc) for outcome in outcomes],
        "flags": [" ".join(outcome.flags) for outcome in outcomes],
        "reason": [outcome.reason for outcome in outcomes],
        "why": [outcome.hold.why for outcome in outcomes],
    }
    return columns | _mean_columns(outcomes)


def reading_lines(pages: Iterator[list[Row]]) -> Iterator[tuple[object, ...]]:
    """One line of READING_COLUMNS a reading, from `Contents.reading_rows()`."""
    for page in pages:
        for _, hold, session, channel, unit, value, u, at, flags, raw in page:
            yield hold, session, at, channel, unit, value, u, " ".join(flags_of(flags)), raw


def write_holds(outcomes: Sequence[Outcome], file: TextIO) -> None:
    """CSV (RFC 4180) of `hold_columns`; open `file` with newline=""."""
    columns = hold_columns(outcomes)
    _write(file, tuple(columns), zip(*columns.values(), strict=True))


def write_readings(contents: Contents, file: TextIO) -> None:
    """CSV (RFC 4180) of every reading; open `file` with newline=""."""
    _write(file, READING_COLUMNS, reading_lines(contents.reading_rows()))


def export_csv(contents: Contents, folder: Path) -> list[Path]:
    """`holds.csv` and `readings.csv` in `folder`, replacing older ones; their paths. DiskFull, RunError."""
    holds, readings = folder / HOLDS, folder / READINGS
    with os_errors_at(folder):
        folder.mkdir(parents=True, exist_ok=True)
        with _fresh(holds) as file:
            write_holds(contents.outcomes(), file)
        with _fresh(readings) as file:
            write_readings(contents, file)
    return [holds, readings]


def _fresh(path: Path) -> TextIO:
    """A new file for the CSV writer: a link under that name is replaced, never followed."""
    path.unlink(missing_ok=True)
    return path.open("x", encoding="utf-8", newline="")


def cell(value: object) -> object:
    """`value` as the CSV writer is given it: numbers untouched, UTC as ISO 8601, formula-like text defused."""
    if isinstance(value, datetime):
        return value.isoformat(timespec="milliseconds").replace("+00:00", "Z")
    if isinstance(value, str) and value.startswith(_FORMULA_STARTS) and _NUMBER.fullmatch(value) is None:
        return f"'{value}"
    return value


def _write(file: TextIO, names: Sequence[str], lines: Iterator[tuple[object, ...]]) -> None:
    writer = csv.writer(file)
    writer.writerow([cell(name) for name in names])
    writer.writerows([cell(value) for value in line] for line in lines)


def _setting_columns(holds: Sequence[Hold]) -> Columns:
    return {
        "purpose": [hold.purpose.value for hold in holds],
        "approach": [hold.approach.value for hold in holds],
        "pwm (Hz)": [hold.condition.pwm_hz for hold in holds],
        "supply (V)": [hold.condition.supply_v for hold in holds],
        "direction": [hold.condition.direction for hold in holds],
        "load": [hold.condition.load for hold in holds],
        "thermal": [hold.condition.thermal for hold in holds],
        "freewheel": [hold.condition.freewheel for hold in holds],
        "duty (%)": [hold.duty_percent for hold in holds],
        "tap": [hold.tap for hold in holds],
        "lead": ["; ".join(f"{duty:g} % for {seconds:g} s" for duty, seconds in hold.lead) for hold in holds],
        "least (s)": [hold.least_s for hold in holds],
        "most (s)": [hold.most_s for hold in holds],
        "ends when": [hold.ends_when.value for hold in holds],
    }


def _mean_columns(outcomes: Sequence[Outcome]) -> Columns:
    means: list[Mapping[str, tuple[float | None, float]]] = [
        {f"{channel} ({mean.unit})": (mean.value, mean.u) for channel, mean in outcome.means.items()}
        for outcome in outcomes
    ]
    columns: Columns = {}
    for name in dict.fromkeys(name for row in means for name in row):
        found = [row.get(name, (None, 0.0)) for row in means]
        columns[name] = [value for value, _ in found]
        columns[f"u of {name}"] = [None if value is None else u for value, u in found]
    return columns


def _utc(seconds: float) -> datetime | None:
    with suppress(ValueError, OverflowError, OSError):
        return datetime.fromtimestamp(seconds, UTC)
    return None
