"""A logbook.sqlite made by a stranger: it runs nothing, writes nothing, fills no memory, and is refused by name.

Whatever stands in it, reading gives values or an error of the tree of `errors.py`. The mechanisms (views, triggers,
journals) are the database library's own; forms from its documentation, from memory.
"""

from __future__ import annotations

import json
import sqlite3
import struct
import sys
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from sweeprig.errors import RunError, SweeprigError
from sweeprig.logbook import Logbook, Reader, database, read
from sweeprig.opened import open_run
from sweeprig.report.page import render
from sweeprig.terminal import status_text

ENDLESS = "WITH RECURSIVE n(i) AS (SELECT 1 UNION ALL SELECT i + 1 FROM n) SELECT 'k' || i AS key, 'v' AS value FROM n"
SCHEMES = {
    "a view without end": ("DROP TABLE run", f"CREATE VIEW run AS {ENDLESS}"),
    "a view beside": ("CREATE VIEW more AS SELECT 1",),
    "a trigger": (
        "CREATE TRIGGER t AFTER INSERT ON sessions BEGIN UPDATE outcomes SET outcome = 'changed'; DELETE FROM run; END",
    ),
    "a computed column": ("ALTER TABLE events ADD COLUMN more TEXT AS (hex(zeroblob(100000000)))",),
    "an index of an expression": ("CREATE INDEX i ON events (upper(data))",),
    "a virtual table": ("CREATE VIRTUAL TABLE words USING fts5(text)",),
    "a table beside": ("CREATE TABLE notes (text TEXT)",),
    "a missing table": ("DROP TABLE instruments",),
    "a column more": ("ALTER TABLE sessions ADD COLUMN host TEXT",),
}
DEEP = "[" * 50_000 + "]" * 50_000
HOLD: dict[str, Any] = {
    "number": 1,
    "purpose": "run_in",
    "approach": "rising",
    "condition": {
        "pwm_hz": 1000.0,
        "supply_v": 12.0,
        "direction": "forward",
        "load": "free air",
        "thermal": "warm",
        "freewheel": "slow_decay",
    },
    "duty_percent": 60.0,
    "least_s": 240.0,
    "most_s": 240.0,
    "ends_when": "time",
    "roles": [],
    "why": "",
    "lead": [],
    "tap": None,
}
MEAN = {"value": 3310.25, "u": 0.5, "unit": "rpm", "at": 244.0, "channel": "board.speed", "flags": [], "raw": ""}
OUTCOME: dict[str, Any] = {
    "number": 1,
    "session": 1,
    "status": "done",
    "verdict": "turning",
    "began": 4.0,
    "ended": 244.0,
    "began_utc": 1772470804.0,
    "ended_utc": 1772471044.0,
    "exposed_s": 240.0,
    "event_between_s": [240.0, None],
    "restarts": 0,
    "means": {"board.speed": MEAN},
    "flags": [],
    "reason": "",
}


def hold(**changes: object) -> str:
    return json.dumps(HOLD | changes)


def outcome(**changes: object) -> str:
    return json.dumps(OUTCOME | changes)


@pytest.mark.parametrize("scheme", SCHEMES.values(), ids=SCHEMES)
def test_other_tables_are_refused(spoil: Callable[..., Path], scheme: tuple[str, ...]) -> None:
    """A view, trigger, computed column, virtual table, or any table unlike ours: refused before a row is read."""
    folder = spoil(*scheme)
    with pytest.raises(RunError, match="other tables than a run writes"):
        Reader(folder / "logbook.sqlite")


def test_a_trigger_never_fires(spoil: Callable[..., Path]) -> None:
    """Opened for writing, a logbook with a trigger is refused, and nothing in it has changed."""
    folder = spoil(*SCHEMES["a trigger"])
    before = (folder / "logbook.sqlite").read_bytes()
    with pytest.raises(RunError, match="other tables than a run writes"):
        Logbook.open(folder / "logbook.sqlite")
    assert (folder / "logbook.sqlite").read_bytes() == before


def test_readers_may_do_nothing_but_read(run_folder: Path) -> None:
    """A reader's connection trusts no schema, checks cells, loads no extension, attaches nothing and cannot write."""
    with closing(database.connect(run_folder / "logbook.sqlite", "rw")) as connection:
        asked = {
            name: connection.execute(f"PRAGMA {name}").fetchone()[0] for name in ("trusted_schema", "cell_size_check")
        }
        assert asked == {"trusted_schema": 0, "cell_size_check": 1}
        with pytest.raises(sqlite3.OperationalError, match=r"not authorized|no such function"):
            connection.execute("SELECT load_extension('libm.so.6')")
        with pytest.raises(sqlite3.OperationalError, match="too many attached databases"):
            connection.execute("ATTACH ? AS other", (str(run_folder / "other.sqlite"),))
    with pytest.raises(RunError, match=r"read-only|readonly|query_only"):
        database.ask_once(run_folder / "logbook.sqlite", "DELETE FROM run", ())
    assert not (run_folder / "other.sqlite").exists()


def test_a_journal_deletes_no_other_file(run_folder: Path, tmp_path: Path) -> None:
    """A rollback journal that names a file of the user's is refused, and that file stays; without it all is read."""
    precious = tmp_path / "precious.txt"
    precious.write_text("kept", "utf-8")
    journal = run_folder / "logbook.sqlite-journal"
    journal.write_bytes(journal_naming(precious, (run_folder / "logbook.sqlite").stat().st_size // 4096))
    for way in (lambda: Reader(run_folder / "logbook.sqlite"), lambda: Logbook.open(run_folder / "logbook.sqlite")):
        with pytest.raises(RunError, match="this journal belongs to no logbook"):
            way()
    assert precious.read_text("utf-8") == "kept"
    journal.unlink()
    assert Reader(run_folder / "logbook.sqlite").outcomes()


def journal_naming(other: Path, pages: int) -> bytes:
    """An empty rollback journal that is hot and claims to be part of a transaction whose journal is `other`."""
    magic, name = bytes.fromhex("d9d505f920a163d7"), str(other).encode()
    head = (magic + struct.pack(">IIIII", 0, 0, pages, 512, 4096)).ljust(512, b"\0")
    return head + struct.pack(">I", 1) + name + struct.pack(">II", len(name), sum(name) & 0xFFFFFFFF) + magic


CELLS: dict[str, tuple[str, object]] = {
    "JSON nested without end": ("UPDATE events SET data = ?", DEEP),
    "a session nested without end": ("UPDATE sessions SET info = ?", DEEP),
    "JSON of many megabytes": ("UPDATE events SET data = ?", '{"a": [' + "[]," * 700_000 + "[]]}"),
    "no JSON": ("UPDATE holds SET hold = ?", "import os"),
    "NaN as JSON has it not": ("UPDATE outcomes SET outcome = ? WHERE number = 1", outcome(exposed_s=float("nan"))),
    "NaN as a text": ("UPDATE outcomes SET outcome = ? WHERE number = 1", outcome(began="nan")),
    "a list for an object": ("UPDATE outcomes SET outcome = ? WHERE number = 1", "[1]"),
    "means as a list": ("UPDATE outcomes SET outcome = ? WHERE number = 1", outcome(means=[1])),
    "flags as a number": ("UPDATE outcomes SET outcome = ? WHERE number = 1", outcome(flags=7)),
    "a reason that is a table": ("UPDATE outcomes SET outcome = ? WHERE number = 1", outcome(reason={"a": 1})),
    "an unknown status": ("UPDATE outcomes SET outcome = ? WHERE number = 1", outcome(status="hacked")),
    "a number of thousands of digits": (
        "UPDATE outcomes SET outcome = ? WHERE number = 1",
        outcome(restarts=0).replace('"restarts": 0', '"restarts": ' + "9" * 5000),
    ),
    "a float of hundreds of digits": (
        "UPDATE outcomes SET outcome = ? WHERE number = 1",
        outcome().replace('"ended": 244.0', '"ended": ' + "9" * 400),
    ),
    "a direction that is a list": (
        "UPDATE holds SET hold = ? WHERE number = 1",
        hold(condition=HOLD["condition"] | {"direction": ["x"]}),
    ),
    "bytes for a text": ("UPDATE instruments SET maker = ?", b"\xff\x00"),
    "a text that is no text": ("UPDATE run SET value = CAST(? AS TEXT) WHERE key = 'job_hash'", b"\xff\xfe"),
    "a text for a time": ("UPDATE sessions SET began = ?", "yesterday"),
    "flags that are no JSON": ("UPDATE readings SET flags = ?", "<script>"),
    "a text for a value": ("UPDATE readings SET value = ?", "a lot"),
    "bytes for a raw text": ("UPDATE readings SET raw = ?", b"\x00\xff"),
}


@pytest.mark.parametrize(("sql", "value"), CELLS.values(), ids=CELLS)
def test_a_cell_that_is_no_such_value_is_named(
    spoil: Callable[..., Path], read_all: Callable[[Path], dict[str, SweeprigError]], sql: str, value: object
) -> None:
    """A cell that is not what it should be: whoever reads it gets a RunError with the file, and no other error."""
    errors = read_all(spoil((sql, (value,))))
    assert errors
    assert {type(error) for error in errors.values()} == {RunError}
    assert all("logbook.sqlite" in str(error) and len(str(error)) < 1_000 for error in errors.values())


UNLIKELY = {
    "a negative PWM frequency": ("holds", hold(condition=HOLD["condition"] | {"pwm_hz": -1.0})),
    "no PWM frequency": ("holds", hold(condition=HOLD["condition"] | {"pwm_hz": 0.0})),
    "an infinite supply": ("holds", hold(condition=HOLD["condition"] | {"supply_v": "inf"})),
    "a negative duty": ("holds", hold(duty_percent=-5.0)),
    "a duty above all": ("holds", hold(duty_percent=101.0)),
    "a time before the calendar": ("outcomes", outcome(began_utc=-1e30)),
    "a time behind the calendar": ("outcomes", outcome(ended_utc=1e18)),
    "an endless exposure": ("outcomes", outcome(exposed_s="inf")),
    "negative restarts": ("outcomes", outcome(restarts=-3)),
    "a speed beyond use": ("outcomes", outcome(means={"board.speed": MEAN | {"value": 1e300}})),
    "a negative uncertainty": ("outcomes", outcome(means={"board.speed": MEAN | {"u": -1.0}})),
    "a reason of megabytes": ("outcomes", outcome(reason="x" * 900_000)),
    "flags by the thousand": ("outcomes", outcome(flags=["x"] * 5_000)),
}


@pytest.mark.parametrize(("table", "text"), UNLIKELY.values(), ids=UNLIKELY)
def test_no_findings_from_what_no_run_writes(spoil: Callable[..., Path], table: str, text: str) -> None:
    """Values of the right kind that no run writes are kept out of findings and report, by hold, field and range."""
    folder = spoil((f"UPDATE {table} SET {table[:-1]} = ? WHERE number = 1", (text,)))
    with pytest.raises(RunError, match=r"hold 1: .*(is not what a run writes|too long|too much)"):
        _ = open_run(folder).findings


def test_a_value_that_is_not_finite_is_no_data(spoil: Callable[..., Path]) -> None:
    """An infinite speed in a mean is read as no data with its reason, never as a number."""
    folder = spoil(
        ("UPDATE outcomes SET outcome = ? WHERE number = 1", (outcome(means={"b": MEAN | {"value": "inf"}}),))
    )
    mean = open_run(folder).outcomes[0].means["b"]
    assert (mean.value, mean.flags) == (None, ("no_data:not_finite",))


@pytest.mark.skipif(sys.platform != "linux", reason="address space is limited by a Linux call")
@pytest.mark.parametrize(
    "filling",
    [
        "UPDATE run SET value = hex(zeroblob(100000000)) WHERE key = 'job_text'",
        "INSERT INTO events (session, kind, at, utc, data) WITH RECURSIVE n(i) AS (SELECT 1 UNION ALL SELECT i + 1 FROM"
        " n WHERE i < 200) SELECT 1, hex(zeroblob(450000)), 0.0, 0.0, '{}' FROM n",
    ],
    ids=["one text of 200 MB", "180 MB of events"],
)
def test_texts_without_end_fill_no_memory(
    spoil: Callable[..., Path], limited: Callable[..., str], filling: str
) -> None:
    """In a process that may have 400 MB, a logbook of some hundred megabytes of text is refused, not read."""
    folder = spoil("PRAGMA synchronous = OFF", filling)
    code = "from sweeprig.logbook import Reader; from pathlib import Path; r = Reader(Path(given[0])); r.events()"
    said = limited(400_000_000, code, folder / "logbook.sqlite")
    assert said.startswith("RunError")
    assert "more text than a run writes" in said or "not a sound logbook" in said


def test_all_pages_together_are_bounded(run_folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The bound holds over the pages together, and just below it everything is read."""
    reader = Reader(run_folder / "logbook.sqlite")
    text = sum(len(value) for row in reader._ask("SELECT kind, data FROM events") for value in row)
    monkeypatch.setattr(read, "LARGEST_WHOLE", text)
    assert reader.events()
    monkeypatch.setattr(read, "LARGEST_WHOLE", text - 1)
    with pytest.raises(RunError, match="more text than a run writes"):
        reader.events()


COLUMNS = [
    ("run", "value"), ("sessions", "began"), ("sessions", "info"), ("holds", "hold"), ("holds", "began_utc"),
    ("outcomes", "outcome"), ("channels", "channel"), ("channels", "unit"), ("readings", "value"), ("readings", "u"),
    ("readings", "at"), ("readings", "flags"), ("readings", "raw"), ("events", "kind"), ("events", "data"),
    ("events", "utc"), ("instruments", "maker"), ("instruments", "settings"), ("instruments", "at"),
]  # fmt: skip
LEAVES = (
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(max_size=20)
    | st.sampled_from(["inf", "nan", "-inf", "done", "\x1b[31m", "\0"])
)
JSON = st.recursive(
    LEAVES, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4)
)


@st.composite
def spoilt_objects(draw: st.DrawFn) -> str:
    """A hold or an outcome with one of its fields, or of the fields below it, replaced by anything."""
    table = json.loads(draw(st.sampled_from([hold(), outcome()])))
    inner = draw(st.sampled_from([table] + [value for value in table.values() if isinstance(value, dict)]))
    inner[draw(st.sampled_from(sorted(inner)))] = draw(JSON)
    return json.dumps(table)


CELL = (
    st.none()
    | st.floats()
    | st.integers(-(2**63), 2**63 - 1)
    | st.binary(max_size=20)
    | JSON.map(json.dumps)
    | st.text(st.characters(exclude_categories=["Cs"]), max_size=20)
    | spoilt_objects()
)


@settings(max_examples=80, derandomize=True, deadline=None, suppress_health_check=list(HealthCheck))
@given(place=st.sampled_from(COLUMNS), value=CELL)
def test_any_cell_may_hold_anything(
    spoil: Callable[..., Path],
    read_all: Callable[[Path], dict[str, SweeprigError]],
    place: tuple[str, str],
    value: object,
) -> None:
    """80 seeded spoilt cells: every way of reading gives values or a RunError, and nothing else ever escapes."""
    table, column = place
    folder = spoil("SAVEPOINT before")
    kept = (folder / "logbook.sqlite").read_bytes()
    try:
        spoil((f"UPDATE OR IGNORE {table} SET {column} = ?", (value,)))
        errors = read_all(folder)
    finally:
        (folder / "logbook.sqlite").write_bytes(kept)
    assert {type(error) for error in errors.values()} <= {RunError}


def test_the_report_of_a_spoilt_run_is_refused_or_whole(spoil: Callable[..., Path]) -> None:
    """A run whose outcomes cannot be believed gives no report; the same run as it was kept gives a whole page."""
    folder = spoil()
    assert render(open_run(folder)).rstrip().endswith("</html>")
    spoil(("UPDATE outcomes SET outcome = ? WHERE number = 1", (outcome(began_utc=1e300),)))
    with pytest.raises(RunError, match="began_utc is not what a run writes"):
        render(open_run(folder))


def test_a_text_moves_no_cursor(spoil: Callable[..., Path]) -> None:
    """Escape sequences in state, reason and purpose of a run do nothing in the terminal that shows its status."""
    folder = spoil(
        ("UPDATE outcomes SET outcome = json_set(outcome, '$.reason', ?)", ("\x1b[2Jgone",)),
        ("UPDATE holds SET hold = json_set(hold, '$.why', ?)", ("\x9b2J\rgone",)),
        ("UPDATE events SET kind = 'state', data = ?", (json.dumps({"state": "\x1b]0;title\x07"}),)),
    )
    shown = status_text(open_run(folder).status())
    assert "gone" in shown
    assert shown.replace("\n", "").isprintable()
