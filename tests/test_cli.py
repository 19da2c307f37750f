"""The installed command as a new user meets it: answers, texts of refusals, exit codes."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

Command = Callable[..., subprocess.CompletedProcess[str]]


def edit(path: Path, old: str, new: str) -> None:
    text = path.read_text("utf-8")
    assert old in text
    path.write_text(text.replace(old, new), "utf-8")


@pytest.fixture
def short_run(short_job: Path, tmp_path: Path) -> Path:
    """The folder of a finished short run."""
    from sweeprig.launch import start

    return start(short_job, tmp_path / "runs").path


def test_run_answers_first(short_job: Path, tmp_path: Path, sweeprig: Command) -> None:
    """`run` ends with the table of findings, the run folder and the report's path; exit 0; SIMULATED is said."""
    done = sweeprig("run", short_job, "--runs", tmp_path / "runs")
    assert done.returncode == 0, done.stderr
    assert "Stall duty" in done.stdout
    assert "SIMULATED" in done.stdout
    report = Path(done.stdout.splitlines()[-1].removeprefix("report").strip())
    assert report.read_text("utf-8").startswith("<!doctype html>")
    assert (report.parent / "findings.json").is_file()
    assert "hold 1: Zero check" in done.stderr


def test_json_is_one_value(short_job: Path, tmp_path: Path, sweeprig: Command) -> None:
    """With --json standard output is one JSON value and all else goes to standard error."""
    done = sweeprig("run", short_job, "--runs", tmp_path / "runs", "--json")
    value = json.loads(done.stdout)
    assert value["findings"]["simulated"] is True
    assert set(value["findings"]["conditions"][0]) >= {"stall_duty_percent", "start_99_duty_percent", "usable_range"}


@pytest.mark.parametrize("command", ["status", "fit", "report", "export"])
def test_commands_on_a_run(short_run: Path, sweeprig: Command, command: str) -> None:
    """status, fit, report and export answer on a finished run, as text and as JSON."""
    plain = sweeprig(command, short_run)
    assert plain.returncode == 0, plain.stderr
    assert plain.stdout.strip()
    assert json.loads(sweeprig(command, short_run, "--json").stdout)


def test_preview_says_what_a_night_would_do(short_job: Path, sweeprig: Command) -> None:
    """preview counts holds, predicts time, and adds up the locked-rotor times."""
    done = sweeprig("preview", short_job)
    assert done.returncode == 0
    assert "5 stall" in done.stdout
    assert "together: 8.5 s" in done.stdout
    assert json.loads(sweeprig("preview", short_job, "--json").stdout)["holds"]["start"] == 5


def test_no_such_job(tmp_path: Path, sweeprig: Command) -> None:
    """A job that is not there: exit 2, and the text names it."""
    done = sweeprig("run", tmp_path / "none.toml")
    assert done.returncode == 2
    assert "none.toml" in done.stderr


def test_unknown_adapter_lists_the_known(short_job: Path, tmp_path: Path, sweeprig: Command) -> None:
    """An unknown adapter is refused before a run folder is made; the known ones are listed."""
    edit(short_job.parent / "shelter-bench.toml", 'adapter = "scpi-supply"', 'adapter = "scpi-suply"')
    done = sweeprig("run", short_job, "--runs", tmp_path / "runs")
    assert done.returncode == 2
    assert "scpi-suply" in done.stderr
    for known in ("board", "scpi-multimeter", "scpi-scope", "scpi-supply"):
        assert known in done.stderr
    assert not (tmp_path / "runs").exists()


def test_unattended_refusal_gives_the_sum(short_job: Path, tmp_path: Path, sweeprig: Command) -> None:
    """A job whose times add up to more than the locked-rotor time is refused with the figure."""
    edit(short_job.parent / "shelter-bench.toml", 'locked_rotor_time = "12 s"', 'locked_rotor_time = "7 s"')
    done = sweeprig("run", short_job, "--runs", tmp_path / "runs")
    assert done.returncode == 2
    assert "8.5 s" in done.stderr
    assert "7 s" in done.stderr
    assert sweeprig("preview", short_job).stdout.count("Refused") == 1


def test_a_trip_exits_4(short_job: Path, tmp_path: Path, sweeprig: Command) -> None:
    """Protection trips on over-speed in the run-in: exit 4, the rule and the evidence in the text."""
    edit(short_job.parent / "shelter-bench.toml", 'speed = "6000 rpm"', 'speed = "1500 rpm"')
    done = sweeprig("run", short_job, "--runs", tmp_path / "runs")
    assert done.returncode == 4
    assert "over_speed" in done.stderr
    assert "limit 1500 rpm" in done.stderr


def test_another_instrument_is_refused(short_run: Path, sweeprig: Command) -> None:
    """A resume with another instrument than the saved run had is refused: exit 3, both serial numbers named."""
    # A simulated instrument's serial number follows from the name of its rig.
    edit(short_run / "job.toml", 'name = "shelter bench"', 'name = "other bench"')
    done = sweeprig("resume", short_run)
    assert done.returncode == 3
    assert "another one than this run began with" in done.stderr
    assert done.stderr.count("SIM") >= 2


def test_off_on_a_bench_inside_the_process(short_job: Path, sweeprig: Command) -> None:
    """`off` on an in-process simulated rig says that there is nothing to switch off from here: exit 2."""
    done = sweeprig("off", short_job)
    assert done.returncode == 2
    assert "simulated" in done.stderr


@pytest.mark.skipif(sys.platform == "win32", reason="SIGINT to a child cannot be sent alone on Windows")
def test_ctrl_c_once_finishes_and_says_how_to_resume(
    tmp_path: Path, short_job: Path, sweeprig: Command, sweeprig_process: Callable[..., subprocess.Popen[str]]
) -> None:
    """One Ctrl-C: the hold in hand is completed, off is proved, exit 5 with the resume command; the run can go on."""
    edit(short_job.parent / "short.toml", "holds = 5", "holds = 200")
    process = sweeprig_process("run", short_job, "--runs", tmp_path / "runs")
    assert process.stderr is not None
    for line in process.stderr:
        if line.startswith("hold 5:"):
            process.send_signal(signal.SIGINT)
            break
    _, errors = process.communicate(timeout=60)
    assert process.returncode == 5
    assert "finishing the hold in hand" in errors
    assert "shown to be off" in errors
    (path,) = (tmp_path / "runs").iterdir()
    assert f"sweeprig resume {path}" in errors
    value = json.loads(sweeprig("status", path, "--json").stdout)
    assert value["in_hand"] is None
    assert set(value["outcomes"]) == {"done"}


def test_a_run_in_use_is_refused(short_run: Path, sweeprig: Command) -> None:
    """A run folder that another process holds: exit 3, and the holder is named."""
    import os

    from sweeprig.logbook import Logbook

    with Logbook.open(short_run / "logbook.sqlite"):
        done = sweeprig("resume", short_run)
    assert done.returncode == 3
    assert str(os.getpid()) in done.stderr


def test_manual_lists_its_topics(sweeprig: Command) -> None:
    """`manual` lists topics; `manual TOPIC` prints one; an unknown topic is refused with the list."""
    topics = json.loads(sweeprig("manual", "--json").stdout)
    assert {"start", "safety", "job-files"} <= set(topics)
    assert sweeprig("manual", "safety").stdout.startswith("#")
    wrong = sweeprig("manual", "safty")
    assert wrong.returncode == 2
    assert "safety" in wrong.stderr


def test_usage_errors_exit_2(sweeprig: Command) -> None:
    """A wrong option is a usage error: exit 2."""
    assert sweeprig("run", "--nonsense").returncode == 2


def test_help_names_every_command(sweeprig: Command) -> None:
    """The help lists the commands of the plan."""
    text = sweeprig("--help").stdout
    for command in ("preview", "run", "resume", "status", "fit", "report", "export", "off", "simbench", "manual"):
        assert f"\n  {command} " in text


@pytest.mark.parametrize(("limit", "code", "verdict"), [("90 %", 0, "pass"), ("1 %", 1, "fail")])
def test_a_limit_decides_the_exit_code(
    short_job: Path, tmp_path: Path, sweeprig: Command, limit: str, code: int, verdict: str
) -> None:
    """A limit in the motor file is judged: pass exits 0, fail exits 1, and the verdict is printed."""
    with (short_job.parent / "aspirator-fan.toml").open("a", encoding="utf-8") as file:
        file.write(f'\n[limits.stall_duty_percent]\nat_most = "{limit}"\n')
    done = sweeprig("run", short_job, "--runs", tmp_path / "runs")
    assert done.returncode == code, done.stderr
    assert f"{verdict}:" in done.stdout
    (path,) = (tmp_path / "runs").iterdir()
    (row,) = json.loads((path / "findings.json").read_text("utf-8"))["limits"]
    assert row["verdict"] == verdict
