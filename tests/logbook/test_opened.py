"""A run opened for reading: frames, findings, plots, on a finished, a running and a killed run."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest

from sweeprig import job
from sweeprig.errors import RunError
from sweeprig.holds import Approach, Condition, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.logbook import Logbook, create_run_folder
from sweeprig.opened import Run, open_run
from sweeprig.quantities import Reading
from sweeprig.report import figures
from sweeprig.roles import Identity

MakeHold = Callable[..., Hold]
MakeOutcome = Callable[..., Outcome]
MakeReadings = Callable[..., list[Reading]]

KEPT = Path(__file__).with_name("data") / "version-1"
UTC = 1_772_470_800.0


@pytest.fixture
def writing(
    tmp_path: Path, make_hold: MakeHold, make_outcome: MakeOutcome, make_readings: MakeReadings
) -> tuple[Path, Logbook]:
    """A run of the shipped demo job that is being written: two outcomes, one hold in hand. Invented numbers."""
    text = job.document(job.load(job.shipped("demo")))
    folder = create_run_folder(tmp_path, "<b>fan</b>", UTC, text)
    book = Logbook.create(folder / "logbook.sqlite", text, job.job_hash(text), "sweeprig 0")
    session = book.begin_session(0.0, UTC, {"attended": False})
    book.instrument(session, "board", Identity("SIMULATED", "board", "0", "1"), {"gate": "0.25 s"}, 1.0)
    for number, status in ((1, Status.DONE), (2, Status.DISCARDED)):
        hold = make_hold(number)
        book.event("hold_began", 30.0 * number, UTC + 30.0 * number, {"number": number})
        book.intend(hold, session, 30.0 * number, UTC + 30.0 * number)
        book.conclude(make_outcome(hold, status=status), make_readings(hold))
    book.intend(make_hold(3), session, 90.0, UTC + 90.0)
    return folder, book


@pytest.fixture
def folder(writing: tuple[Path, Logbook]) -> Path:
    """The same run, ended."""
    writing[1].close(clean=True)
    return writing[0]


def test_holds_frame(folder: Path) -> None:
    """One row an outcome, units in the column names, means and their u as columns, UTC as aware times."""
    holds = open_run(folder).holds
    assert list(holds["number"]) == [1, 2]
    assert list(holds["status"]) == ["done", "discarded"]
    assert list(holds["pwm (Hz)"]) == [1000.0, 1000.0]
    assert list(holds["duty (%)"]) == [14.5, 14.5]
    assert list(holds["exposed (s)"]) == [20.0, 20.0]
    assert holds["event before (s)"].isna().all()
    assert list(holds["board.speed (rpm)"]) == [612.5, 612.5]
    assert list(holds["u of board.speed (rpm)"]) == [1.25, 1.25]
    assert holds["began (UTC)"][0] == pd.Timestamp("2026-03-02T17:00:30Z")


def test_other_frames(folder: Path) -> None:
    """Readings, events, instruments and sessions are frames with their columns, one row each."""
    run = open_run(folder)
    names = ["hold", "session", "at (s)", "channel", "unit", "value", "u", "flags", "raw"]
    assert list(run.readings.columns) == names
    assert len(run.readings) == 12
    assert run.readings.dtypes["value"] == "float64"
    assert list(run.events.columns) == ["session", "kind", "at (s)", "at (UTC)", "data"]
    assert list(run.events["data"]) == [{"number": 1}, {"number": 2}]
    assert list(run.instruments["name"]) == ["board"]
    assert list(run.instruments["maker"]) == ["SIMULATED"]
    assert list(run.sessions["number"]) == [1]
    assert run.sessions["began (UTC)"][0] == pd.Timestamp("2026-03-02T17:00:00Z")


def test_frames_of_an_empty_run_have_their_columns(path: Path, book: Logbook) -> None:
    """A run that has only just begun has empty frames with all columns, not an error."""
    run = open_run(book.path)
    assert run.path == path.parent
    assert list(run.readings.columns)[:3] == ["hold", "session", "at (s)"]
    assert "duty (%)" in run.holds.columns
    assert len(run.holds) == len(run.readings) == len(run.events) == len(run.instruments) == 0


def test_running_run(writing: tuple[Path, Logbook], make_hold: MakeHold, make_outcome: MakeOutcome) -> None:
    """A running run shows what is committed; frames are kept until `reload`, and the writer is not hindered."""
    folder, book = writing
    with book:
        run = open_run(folder)
        assert len(run.holds) == 2
        assert [intent.hold.number for intent in run.unfinished] == [3]
        book.conclude(make_outcome(make_hold(3)), [])
        assert len(run.holds) == 2
        run.reload()
        assert len(run.holds) == 3
        assert run.unfinished == []
        assert book.close(clean=True) is True


def test_killed_run(writing: tuple[Path, Logbook], tmp_path: Path) -> None:
    """The files as a kill leaves them, write-ahead log included, open and say what is without an outcome."""
    folder, book = writing
    left = tmp_path / "left"
    shutil.copytree(folder, left, ignore=shutil.ignore_patterns("*.lock", "*-shm"))
    book.close(clean=True)
    run = open_run(left)
    assert (left / "logbook.sqlite-wal").stat().st_size > 0
    assert len(run.holds) == 2
    assert [intent.hold.number for intent in run.unfinished] == [3]
    assert "1 without an outcome" in repr(run)


def test_job_plan_and_about(folder: Path) -> None:
    """The frozen job and its plan come from job.toml, and `about` says where findings come from."""
    run = open_run(folder)
    demo = job.load(job.shipped("demo"))
    assert run.job.title == demo.title
    assert run.plan == job.freeze(demo)
    assert run.about == {
        "job_hash": job.job_hash((folder / "job.toml").read_text("utf-8")),
        "simulated": True,
        "motor": "aspirating fan A",
        "rig": "shelter bench",
        "software": "sweeprig 0",
    }


def test_kept_run_opens_with_its_job() -> None:
    """A run kept from the first release opens with job, plan and frames."""
    run = open_run(KEPT)
    assert run.job.motor.name == "aspirating fan A"
    assert len(run.plan.conditions) == 3
    assert list(run.holds["verdict"]) == ["turning", "stopped"]
    assert run.readings["value"].isna().sum() == 1


def test_findings_are_worked_out(folder: Path) -> None:
    """Without findings.json the findings come from the outcomes, under the run's own job hash and marked simulated."""
    found = open_run(folder).findings.as_json()
    assert found["simulated"] is True
    assert found["job_hash"] == open_run(folder).about["job_hash"]
    assert len(found["conditions"]) == 3


def test_findings_come_from_the_file(folder: Path) -> None:
    """With findings.json the findings are the ones in it."""
    found = open_run(folder).findings.as_json() | {"motor": "as written in the file"}
    (folder / "findings.json").write_text(json.dumps(found), "utf-8")
    assert open_run(folder).findings.as_json()["motor"] == "as written in the file"


@pytest.mark.parametrize("text", ["{", "[]", "{}", '{"version": 1}'])
def test_unreadable_findings_are_named(folder: Path, text: str) -> None:
    """A findings.json that cannot be read is an error of ours that names the file and says what to do."""
    (folder / "findings.json").write_text(text, "utf-8")
    with pytest.raises(RunError, match=r"findings\.json: the findings .* Delete it"):
        _ = open_run(folder).findings


def test_missing_job_is_named(folder: Path) -> None:
    """A run without its job.toml says so; the logbook still opens and keeps the text."""
    (folder / "job.toml").unlink()
    run = open_run(str(folder))
    assert len(run.outcomes) == 2
    assert run.contents.head()["job_text"].startswith("title")
    with pytest.raises(RunError, match=r"job\.toml: the run's job\.toml is gone"):
        _ = run.job


def test_folder_without_a_run_is_refused(tmp_path: Path) -> None:
    """A folder that is no run is refused at once and stays empty."""
    with pytest.raises(RunError, match="there is no logbook here"):
        open_run(tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_html_is_short_and_escaped(folder: Path) -> None:
    """The notebook's table counts the holds by purpose and status, says SIMULATED, and escapes names."""
    odd = folder.rename(folder.with_name("a<script>b"))
    shown = open_run(odd)._repr_html_()
    assert "SIMULATED a&lt;script&gt;b: 2 holds in 1 sessions, 1 without an outcome" in shown
    assert "<tr><td>stall</td><td>discarded</td><td>1</td></tr>" in shown
    assert "<script>" not in shown


@pytest.mark.parametrize(
    ("method", "figure"),
    [
        (Run.plot_speed, "speed_curve"),
        (Run.plot_thresholds, "thresholds"),
        (Run.plot_voltages, "voltages"),
        (Run.plot_timeline, "timeline"),
    ],
)
def test_plots_are_the_reports(
    monkeypatch: pytest.MonkeyPatch, folder: Path, method: Callable[[Run, object], object], figure: str
) -> None:
    """Each plot hands the run and the axes to the report's figure of that name and returns its axes."""
    monkeypatch.setattr(figures, figure, lambda run, ax: (run, ax, "drawn"))
    run = open_run(folder)
    assert method(run, "axes given") == (run, "axes given", "drawn")


def test_timeline_is_drawn(folder: Path) -> None:
    """A plot without given axes makes its own."""
    axes = open_run(folder).plot_timeline()
    assert axes.get_xlabel()


def test_condition_columns_follow_the_hold(path: Path, book: Logbook, make_hold: MakeHold) -> None:
    """Every part of the setting stands in its own column."""
    condition = Condition(25_000.0, 10.8, "reverse", "duct B", "cold", "fast_decay")
    hold = make_hold(
        1,
        condition=condition,
        purpose=Purpose.KICK,
        approach=Approach.FROM_REST,
        tap=7,
        lead=((0.0, 5.0), (100.0, 0.2)),
    )
    book.intend(hold, 1, 0.0, UTC)
    book.conclude(Outcome(1, hold, 1, Status.DONE, Verdict.STARTED, 0.0, 1.0, UTC, UTC + 1.0), [])
    row = open_run(path).holds.iloc[0]
    assert [row[name] for name in ("pwm (Hz)", "supply (V)", "direction", "load", "thermal", "freewheel")] == [
        25_000.0, 10.8, "reverse", "duct B", "cold", "fast_decay",
    ]  # fmt: skip
    assert (row["purpose"], row["approach"], row["tap"]) == ("kick", "from_rest", 7)
    assert row["lead"] == "0 % for 5 s; 100 % for 0.2 s"
