"""Released formats stay readable. The data are own earlier output, made by `make_version_1.py`, kept as is."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.holds import Hold, Outcome
from sweeprig.logbook import Logbook, Reader, values

DATA = Path(__file__).with_name("data")
VERSIONS = ["version-1"]


@pytest.fixture(params=VERSIONS)
def kept(request: pytest.FixtureRequest) -> Path:
    return DATA / str(request.param)


def test_kept_run_reads_as_it_always_did(kept: Path) -> None:
    """Every value of a kept run reads exactly as the release read it that wrote it; looking changes no file."""
    before = {file.name: file.stat().st_mtime_ns for file in kept.iterdir()}
    expected = json.loads((kept / "expected.json").read_text("utf-8"))
    reader = Reader(kept / "logbook.sqlite")
    told = {
        "head": reader.head(),
        "sessions": reader.sessions(),
        "outcomes": [values.outcome_to_json(outcome) for outcome in reader.outcomes()],
        "unfinished": [[values.hold_to_json(hold), *times] for hold, *times in reader.unfinished()],
        "readings": {str(n): [values.reading_to_json(one) for one in reader.readings(n)] for n in (1, 2, 3)},
        "events": reader.events(),
        "instruments": reader.instruments(),
        "last_times": reader.last_times(),
    }
    assert values.load(values.dump(told)) == expected
    assert {file.name: file.stat().st_mtime_ns for file in kept.iterdir()} == before


def test_kept_run_can_be_resumed(
    kept: Path, tmp_path: Path, make_outcome: Callable[..., Outcome], make_hold: Callable[..., Hold]
) -> None:
    """A kept run can be opened for writing, its abandoned hold concluded, and go on with a new session."""
    copy = Path(shutil.copy(kept / "logbook.sqlite", tmp_path))
    with Logbook.open(copy) as book:
        session = book.begin_session(300.0, 400.0, {})
        ((abandoned, *_),) = book.unfinished()
        book.conclude(make_outcome(abandoned, session=1), [])
        book.intend(make_hold(4), session, 301.0, 401.0)
    reader = Reader(copy)
    assert [outcome.number for outcome in reader.outcomes()] == [1, 2, 3]
    assert [(intent.hold.number, intent.session) for intent in reader.unfinished()] == [(4, 2)]
