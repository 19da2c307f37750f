"""What a rig that is left alone needs: each point in words, with yes or no, in `preview` and as a refusal of a run."""

from __future__ import annotations

import json
import re
import subprocess
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import pytest

from sweeprig.conduct.unattended import points, refusals
from sweeprig.job import Job, load, shipped
from sweeprig.schedule.preview import Preview
from sweeprig.terminal import preview_text

NOON = datetime(2026, 3, 2, 12, 0, tzinfo=UTC).timestamp()
Edit = Callable[..., Job]


@pytest.fixture
def real(short_job: Path) -> Edit:
    """`real((file, old, new), …)`: the short job as on real links, acknowledged, with these changes."""

    def edited(*changes: tuple[str, str, str]) -> Job:
        rig = short_job.parent / "shelter-bench.toml"
        text = rig.read_text("utf-8")
        for port, name in enumerate(("board", "supply", "meter", "scope"), 5001):
            text = text.replace(f'"simbench:{name}"', f'"TCPIP::127.0.0.1::{port}::SOCKET"')
        rig.write_text(f'cautions_acknowledged = "A. Bench, 2026-03-01"\n{text}', "utf-8")
        for file, old, new in changes:
            path = short_job.parent / file
            assert old in path.read_text("utf-8"), old
            path.write_text(path.read_text("utf-8").replace(old, new), "utf-8")
        return load(short_job)

    return edited


RIG, MOTOR, SWEEP = "shelter-bench.toml", "aspirator-fan.toml", "short.toml"


def test_a_rig_that_may_be_left_alone(real: Edit) -> None:
    """The demo's rig on real links with its cautions acknowledged: every point is met, nothing is refused."""
    job = real()
    assert not job.rig.in_process
    assert [point.met for point in points(job, NOON)] == [True] * 6
    assert refusals(job, NOON) == []


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ([(MOTOR, 'rotor_time = "30 s"', 'rotor_time = "8 s"')], r"locked rotor for 8\.5 s.* of 8 s"),
        ([(RIG, 'current = "supply.amps"\n', ""), (RIG, 'supply = "supply"\n', "")], "notice an over-current"),
        ([(RIG, 'heartbeat = "2 s"', 'heartbeat = "0.5 s"')], r"heartbeat of 0\.5 s.*0\.6 s \(three polls\)"),
        ([(RIG, 'cautions_acknowledged = "A. Bench, 2026-03-01"\n', "")], "nobody has acknowledged.*manual safety"),
        ([(SWEEP, 'lowest_speed = "60 rpm"', 'lowest_speed = "60 rpm"\nload = ["free air", "filter"]')],
         "several values of load"),
        ([(SWEEP, "[zero]", "[deadline]\nuntil = 2026-03-02T11:59:00Z\n[zero]")], "2026-03-02 11:59 UTC, has passed"),
    ],
)  # fmt: skip
def test_what_refuses(real: Edit, changes: list[tuple[str, str, str]], says: str) -> None:
    """Each point that is not met refuses in a sentence with its figure; a deadline that lies ahead does not."""
    job = real(*changes)
    refused = refusals(job, NOON)
    assert len(refused) >= 1
    assert any(re.search(says, sentence) for sentence in refused)
    unmet = [point for point in points(job, NOON) if not point.met]
    assert [point.why for point in unmet] == refused
    ahead = NOON - 3600.0
    assert len(refusals(job, ahead)) == len(refused) - ("has passed" in says)


@pytest.mark.parametrize(("locked", "refused"), [("6 s", True), ("9 s", False)])
def test_a_drive_without_a_heartbeat(real: Edit, monkeypatch: pytest.MonkeyPatch, locked: str, refused: bool) -> None:
    """A program that hangs is ended after 5 s and the rig switched off within 2 s more: below the locked-rotor time
    that may do without a heartbeat."""
    job = real((MOTOR, 'rotor_time = "30 s"', f'rotor_time = "{locked}"'))
    monkeypatch.setattr("sweeprig.conduct.unattended.build_adapter", lambda *_: object())
    said = [sentence for sentence in refusals(job, NOON) if "no heartbeat" in sentence]
    assert len(said) == refused
    assert all("up to 7 s, locked-rotor time 6 s" in sentence for sentence in said)


def test_a_served_simulated_rig_needs_no_acknowledgement(real: Edit) -> None:
    """A rig file with a rate is a served simulated bench: nobody can be hurt there."""
    job = real((RIG, 'cautions_acknowledged = "A. Bench, 2026-03-01"\n', "rate = 20\n"))
    assert refusals(job, NOON) == []


@pytest.mark.parametrize("name", ["demo", "pump", "four-wire", "full-bench", "electronic", "stirrer"])
def test_shipped_jobs_may_be_left_alone(name: str) -> None:
    """No shipped job on the simulated bench is refused."""
    assert refusals(load(shipped(name)), NOON) == []


def test_preview_lists_the_points(sweeprig: Callable[..., subprocess.CompletedProcess[str]], short_job: Path) -> None:
    """`preview` says "Left alone, this rig:" with each point and yes or no, and the same in JSON."""
    said = sweeprig("preview", short_job)
    assert said.returncode == 0
    part = said.stdout.split("Left alone, this rig:\n")[1].split("\n\n")[0].splitlines()
    value = json.loads(sweeprig("preview", short_job, "--json").stdout)["left_alone"]
    assert [line.strip() for line in part] == [f"yes  {each['point']}" for each in value]
    assert {each["met"] for each in value} == {True}
    assert any("8.5 s after the last sign of rotation" in line for line in part)


def test_an_unmet_point_stands_out(real: Edit) -> None:
    """A point that is not met is shown with NO, and below what to do about it."""

    night = Preview({"zero": 1, "rest": 2}, 700.0, ("x",), (), (), (), rest_s=90.0)
    job = real((RIG, 'cautions_acknowledged = "A. Bench, 2026-03-01"\n', ""))
    text = preview_text(night, "title", {}, points(job, NOON))
    assert "  NO   has its cautions acknowledged (nobody did)" in text
    assert "1 min 30 s of it are rests" in text
    assert "Refused unattended, until this is mended:\n  nobody has acknowledged" in text


def test_a_run_by_hand_is_refused_unattended(
    sweeprig: Callable[..., subprocess.CompletedProcess[str]], short_job: Path, tmp_path: Path
) -> None:
    """A sweep that wants hands is refused as an unattended run, exit 2, with nothing made; attended it begins."""
    sweep = short_job.parent / SWEEP
    text = sweep.read_text("utf-8").replace('supply = ["12 V"]', 'supply = ["12 V"]\nload = ["free air", "filter"]')
    sweep.write_text(text, "utf-8")
    said = sweeprig("run", short_job, "--runs", tmp_path / "runs")
    assert said.returncode == 2
    assert "may not run unattended" in said.stderr
    assert "only a person can set" in said.stderr
    assert not (tmp_path / "runs").exists()
