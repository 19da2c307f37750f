"""Tables for spreadsheets: units in the header, numbers as numbers, no formulas."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.errors import RunError
from sweeprig.holds import Hold, Outcome, Status
from sweeprig.logbook import Logbook, Reader, export
from sweeprig.quantities import Reading

MakeHold = Callable[..., Hold]
MakeOutcome = Callable[..., Outcome]
MakeReadings = Callable[..., list[Reading]]


def rows_of(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.mark.parametrize(
    "text", ["=1+1", "+cmd", "-cmd", "@SUM(A1)", "\t=1", "\r=1", "\n=1", "-1+1", "+1.0,2", "＝1", "-"]
)
def test_formula_is_defused(text: str) -> None:
    """Text that a spreadsheet would run gets a leading apostrophe."""
    assert export.cell(text) == f"'{text}"


@pytest.mark.parametrize("value", ["-1.5E+03", "+0.1", "plain", "", "a=b", "9.9E37", -1.5, 3, None, True, 1e-300])
def test_the_harmless_stays(value: object) -> None:
    """Numbers, also as an instrument's raw text, and harmless text are left alone."""
    assert export.cell(value) == value


@given(st.text())
def test_no_text_starts_a_formula(text: str) -> None:
    """No text whatever comes out as something that starts like a formula, unless it is a plain number."""
    cell = export.cell(text)
    assert isinstance(cell, str)
    assert cell.lstrip("'") == text.lstrip("'")
    assert not cell.startswith(("=", "@", "\t", "\r")), cell
    assert not cell.startswith(("+", "-")) or float(cell) is not None


def test_holds_table(book: Logbook, tmp_path: Path, make_hold: MakeHold, make_outcome: MakeOutcome) -> None:
    """The table of holds has units in its header, all digits, UTC in ISO form, and hostile text defused."""
    first, second = make_hold(1, why="=HYPERLINK(x)"), make_hold(2, duty_percent=0.1 + 0.2)
    means = {
        "board.speed": Reading(612.5, 1.25, "rpm", 54.0, "board.speed"),
        "=meter.volts": Reading(None, 0.5, "V", 54.0, "=meter.volts", ("no_data:overload",)),
    }
    for hold, changes in ((first, {"means": means}), (second, {"status": Status.DISCARDED, "flags": ("a", "b")})):
        book.intend(hold, 1, 0.0, 0.0)
        book.conclude(make_outcome(hold, **changes), [])
    holds, _ = export.export_csv(book, tmp_path / "out")
    one, two = rows_of(holds)
    assert one["duty (%)"] == "14.5"
    assert float(two["duty (%)"]) == 0.1 + 0.2
    assert one["pwm (Hz)"] == "1000.0"
    assert one["began (UTC)"] == "2026-03-02T17:00:30.000Z"
    assert one["why"] == "'=HYPERLINK(x)"
    assert one["lead"] == "26.5 % for 4 s"
    assert (one["event after (s)"], one["event before (s)"]) == ("20.0", "")
    assert (one["board.speed (rpm)"], one["u of board.speed (rpm)"]) == ("612.5", "1.25")
    assert (one["'=meter.volts (V)"], one["u of =meter.volts (V)"]) == ("", "")
    assert two["'=meter.volts (V)"] == ""
    assert (two["status"], two["flags"]) == ("discarded", "a b")


def test_readings_table(
    book: Logbook, tmp_path: Path, make_hold: MakeHold, make_outcome: MakeOutcome, make_readings: MakeReadings
) -> None:
    """The table of readings gives every reading with its unit, no data as an empty field with the reason, raw kept."""
    hold = make_hold(1)
    book.intend(hold, 1, 0.0, 0.0)
    empty = Reading(None, 0.0, "V", 1.0, "meter.volts", ("no_data:overload", "late"), "=9.9E37")
    book.conclude(make_outcome(hold), [*make_readings(hold), empty])
    _, readings = export.export_csv(book, tmp_path)
    rows = rows_of(readings)
    assert tuple(rows[0]) == ("hold", "session", "at (s)", "channel", "unit", "value", "u", "flags", "raw")
    assert [float(row["value"]) for row in rows[:-1]] == [reading.value for reading in make_readings(hold)]
    assert rows[0]["raw"] == "+6.1200E+02"
    assert list(rows[-1].values()) == [
        "1", "1", "1.0", "meter.volts", "V", "", "0.0", "no_data:overload late", "'=9.9E37",
    ]  # fmt: skip


def test_empty_run_has_headers(path: Path, book: Logbook) -> None:
    """A run without a hold gives tables with a header and no rows."""
    file = io.StringIO()
    export.write_holds(Reader(path).outcomes(), file)
    export.write_readings(book, file)
    header, second = file.getvalue().splitlines()
    assert header.startswith("number,session,status,verdict,purpose,approach,pwm (Hz),supply (V)")
    assert second == "hold,session,at (s),channel,unit,value,u,flags,raw"


def test_export_into_a_file_is_refused(tmp_path: Path, book: Logbook) -> None:
    """A target that is no folder is a RunError with its path."""
    (tmp_path / "out").write_text("")
    with pytest.raises(RunError, match="out: this folder cannot be used"):
        export.export_csv(book, tmp_path / "out")
