"""What a newcomer does wrong or looks at first: slips, wrong paths, tables in narrow terminals, texts about a run."""

from __future__ import annotations

import json
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from sweeprig.cli.jobs import time_ahead
from sweeprig.conduct.states import Event
from sweeprig.errors import ConfigError, RoleMissing
from sweeprig.job import load
from sweeprig.launch import check_rig, start
from sweeprig.logbook.run_folder import FolderLock
from sweeprig.opened import open_run
from sweeprig.terminal import Lines, findings_text, status_text, table, truth_text

Command = Callable[..., subprocess.CompletedProcess[str]]
STATUS: dict[str, Any] = {
    "run": "runs/x", "motor": "fan", "rig": "bench", "simulated": False, "state": "parked", "working": False,
    "sessions": 1, "run_clock_s": 61.0, "outcomes": {"done": 2, "discarded": 1}, "in_hand": None,
    "last": {"number": 3, "purpose": "run_in", "status": "discarded", "verdict": "undecided", "reason": "off by order"},
}  # fmt: skip


def edit(path: Path, old: str, new: str) -> None:
    text = path.read_text("utf-8")
    assert old in text
    path.write_text(text.replace(old, new), "utf-8")


@pytest.fixture
def short_run(short_job: Path, tmp_path: Path) -> Path:
    """The folder of a finished short run."""
    return start(short_job, tmp_path / "runs").path


def test_preview_refuses_what_run_would_refuse(short_job: Path, sweeprig: Command) -> None:
    """A wrong option of an instrument is found by preview already: exit 2, and the option is named."""
    edit(short_job.parent / "shelter-bench.toml", 'range = "100 V", ', "")
    done = sweeprig("preview", short_job)
    assert done.returncode == 2
    assert "the option 'range' is missing" in done.stderr


def test_a_role_without_a_channel_is_refused(short_job: Path, tmp_path: Path) -> None:
    """A role that names a channel which its instrument lacks is refused before a folder is made; it lists the known."""
    edit(short_job.parent / "shelter-bench.toml", '"board.speed"', '"board.spped"')
    with pytest.raises(RoleMissing, match=r"role speed: board\.spped \(allowed: .*board\.speed") as refused:
        start(short_job, tmp_path / "runs")
    assert refused.value.remedy is not None
    assert not (tmp_path / "runs").exists()


def test_a_simbench_address_without_an_instrument_is_refused(short_job: Path) -> None:
    """`simbench:NAME` with no instrument of that name is refused with the names there are."""
    edit(short_job.parent / "shelter-bench.toml", '"simbench:meter"', '"simbench:metre"')
    with pytest.raises(ConfigError, match=r"address of meter: simbench:metre \(allowed: .*simbench:meter"):
        check_rig(load(short_job))


def test_a_deadline_in_hours_counts_on_the_benchs_clock(short_job: Path, tmp_path: Path) -> None:
    """A simulated run with a deadline 36 s after its start ends there, although the computer's date is another one."""
    with (short_job.parent / "short.toml").open("a", encoding="utf-8") as file:
        file.write("[deadline]\nhours = 0.01\n")
    launched = start(short_job, tmp_path / "runs")
    assert "deadline" in launched.ending.reason


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("preview", "demoo"), 'Did you mean "demo"?'),
        (("manual", "kick_99_s"), "The word stands in: "),
        (("status", "none"), "there is no such run folder"),
        (("simbench", "serve", "demo", "--write", "none/rig.toml"), "the file cannot be written"),
        (("simbench", "serve", "demo", "--record", "none/record.jsonl"), "the file cannot be written"),
    ],
)
def test_slips_are_answered_with_what_to_do(
    arguments: tuple[str, ...], said: str, tmp_path: Path, sweeprig: Command
) -> None:
    """A mistyped job, topic, run or file name: exit 2 or 3, one sentence, no traceback."""
    done = sweeprig(*arguments, cwd=tmp_path)
    assert done.returncode in (2, 3)
    assert said in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1


def test_a_part_of_the_wrong_kind_is_named(short_job: Path) -> None:
    """A motor file where the rig is wanted is called that, at the job's own line, instead of 27 missing keys."""
    edit(short_job, 'rig = "shelter-bench.toml"', 'rig = "aspirator-fan.toml"')
    with pytest.raises(ConfigError, match=r"job\.toml:2, rig: this is a motor file, and a rig file is wanted"):
        load(short_job)


def test_any_file_of_a_run_names_it_and_runs_near_are_listed(short_run: Path, sweeprig: Command) -> None:
    """status and resume take a file of the run for the run; a folder of runs is answered with the runs in it."""
    for command in ("status", "resume"):
        assert sweeprig(command, short_run / "logbook.sqlite").returncode == 0
    done = sweeprig("status", short_run.parent)
    assert done.returncode == 3
    assert short_run.name in done.stderr
    done = sweeprig("status", Path(__file__))
    assert "this is a file, and a run folder is wanted" in done.stderr


def test_fit_writes_no_report_and_says_so(short_run: Path, sweeprig: Command) -> None:
    """`fit --json` gives null for the report that it does not write."""
    assert json.loads(sweeprig("fit", short_run, "--json").stdout)["report"] is None


def test_lost_holds_are_told_at_the_end(short_job: Path, tmp_path: Path, sweeprig: Command) -> None:
    """A night that lost holds says how many, also when it ended well."""
    edit(short_job.parent / "short.toml", 'duty = "60 %"', 'duty = "5 %"')  # the run-in never turns
    done = sweeprig("run", short_job, "--runs", tmp_path / "runs")
    assert "3 discarded of " in done.stderr


def test_status_says_how_to_go_on() -> None:
    """A stopped run's last hold has its reason after a colon, and the command to go on; a worked-on one has not."""
    text = status_text(STATUS)
    assert "1 session, 1 min 01 s on the run clock; holds: 2 done, 1 discarded" in text
    assert "last hold: 3, run in; discarded: off by order" in text
    assert "Go on with: sweeprig resume runs/x" in text
    assert "sweeprig resume" not in status_text(STATUS | {"working": True})
    assert "sweeprig resume" not in status_text(STATUS | {"state": "finished"})
    assert "Find the cause" in status_text(STATUS | {"state": "tripped"})


def test_a_held_lock_is_seen(tmp_path: Path) -> None:
    """`held` is true while somebody has the lock, false before and after, and makes no file."""
    lock = FolderLock(tmp_path)
    assert not lock.held()
    assert list(tmp_path.iterdir()) == []
    with FolderLock(tmp_path):
        assert lock.held()
    assert not lock.held()


def test_wide_tables_stand_in_even_blocks() -> None:
    """Six columns that do not fit side by side stand three and three, nothing folded, no blanks at line ends."""
    columns = ["finding", *(f"condition {number}" for number in range(1, 7))]
    text = table(columns, [["Stall duty (%)", *(["13.29 ± 0.11"] * 6)]], 80)
    heads = [line for line in text.splitlines() if "condition" in line]
    assert [line.count("condition") for line in heads] == [3, 3]
    assert text.count("Stall duty (%)") == 2
    assert max(len(line) for line in text.splitlines()) <= 80
    assert all(line == line.rstrip() for line in text.splitlines())
    assert table(columns, [["Stall duty (%)", *(["13.29 ± 0.11"] * 6)]], 150).count("Stall duty (%)") == 1


def test_units_stand_in_brackets() -> None:
    """Units stand in brackets after the name, so that '99 %' in a name is not read as a second unit."""
    condition = {
        "pwm_hz": 300.0,
        "start_99_duty_percent": {"value": 8.4, "u": 0.5, "low": 7.8, "high": 9.9, "coverage_factor": 1.9},
    }
    text = findings_text({"motor": "[bold]m", "rig": "r", "simulated": True, "conditions": [condition], "limits": []})
    assert "Start duty, 99 % (%)" in text
    assert text.startswith(
        "[bold]m on r\nSIMULATED: no real motor was moved; these numbers describe an invented one.\n"
    )


def test_truth_speaks_like_the_findings() -> None:
    """The truth's tables use the findings' names, units and condition labels."""
    conditions = [
        {"label": "x", "pwm_hz": hz, "supply_v": 12.0, "findings": {"usable_range.turndown": {"value": 8.8, "u": 0.05}}}
        for hz in (300.0, 25_000.0)
    ]
    text = truth_text({"motor": {"inertia_kg_m2": 7.6e-6, "law": "cosine"}, "trials": 9, "conditions": conditions})
    assert "inertia (kg m²)" in text
    assert "cosine" in text
    assert "Turndown" in text
    assert "25 kHz" in text


def test_a_links_trouble_names_the_instrument() -> None:
    """A link's event is one sentence: the instrument, a colon, what happened."""
    event = Event("link", 1.0, {"instrument": "meter", "what": "the link is back"})
    assert Lines(10.0).sentence(event) == "  meter: the link is back"


def test_time_left_names_the_deadline_when_the_prediction_is_used_up() -> None:
    """First what was predicted, then what is left to the deadline, and neither below nothing."""
    lines = Lines(100.0, 300.0)
    lines(Event("session", 1000.0, {"session": 1, "simulated": True}))
    assert lines.left(1040.0) == "about 1 min 00 s left"
    assert lines.left(1180.0) == "longer than predicted; 2 min 00 s to the deadline"
    assert lines.left(1300.0) == "longer than predicted"
    assert Lines(0.0).left(5.0) == "longer than predicted"


def test_a_resume_has_less_ahead_of_it_than_the_whole_night(short_run: Path) -> None:
    """What earlier sessions did is taken off the prediction, the opening not: that is done again."""
    earlier = open_run(short_run)
    whole, _ = time_ahead(earlier.job, ())
    rest, _ = time_ahead(earlier.job, earlier.outcomes)
    opening = sum(o.ended - o.began for o in earlier.outcomes if o.hold.purpose in ("zero", "run_in", "rest"))
    everything = sum(o.ended - o.began for o in earlier.outcomes)
    assert whole - rest == pytest.approx(everything - opening)
    assert everything > opening > 0.0
