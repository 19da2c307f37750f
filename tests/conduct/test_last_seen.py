"""The file for watchdogs outside: whole or not at all, seldom, and never a reason for a run to end."""

from __future__ import annotations

import errno
import json
import os
import re
import subprocess
from pathlib import Path

import pytest

from sweeprig import manual
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.last_seen import LastSeen, Seen, line_of, read
from sweeprig.conduct.states import State

T0 = 1_772_474_400.0  # 2026-03-02T18:00:00Z


def test_what_was_written_is_read(tmp_path: Path) -> None:
    """State, text and time come back; the file is one line of JSON with the time in words too."""
    file = tmp_path / "last-seen"
    LastSeen(file).write(State.HOLDING.words, "hold 41, 30 Ω\nof 210", T0)
    assert read(file) == Seen(T0, "holding", "hold 41, 30 Ω\nof 210")
    text = file.read_text("utf-8")
    assert text.count("\n") == 1
    assert text.endswith("\n")
    assert json.loads(text)["at"] == "2026-03-02T18:00:00Z"
    assert os.listdir(tmp_path) == ["last-seen"]  # noqa: PTH208 - names are all that is wanted


def test_it_is_written_seldom_but_at_once_on_a_change(tmp_path: Path) -> None:
    """The same state is written once in `last_seen_s`; another one at once; a clock set back is no reason to wait."""
    file = tmp_path / "last-seen"
    seen = LastSeen(file)
    every = BOUNDS["last_seen_s"]
    texts = []
    for state, at in (
        ("holding", T0), ("holding", T0 + 0.9 * every), ("tripped", T0 + 0.95 * every), ("tripped", T0 + every),
        ("tripped", T0 + 1.95 * every), ("tripped", T0 - 3600.0),
    ):  # fmt: skip
        seen.write(state, f"at {at}", at)
        found = read(file)
        assert found is not None
        texts.append(found.utc)
    assert texts == [T0, T0, T0 + 0.95 * every, T0 + 0.95 * every, T0 + 1.95 * every, T0 - 3600.0]


@pytest.mark.parametrize("step", ["write_text", "replace"])
def test_a_full_disk_ends_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str) -> None:
    """A write that fails leaves the old line whole and nothing beside it, says why, and mends itself."""
    file = tmp_path / "last-seen"
    seen = LastSeen(file)
    seen.write("holding", "before", T0)

    def full(*_: object, **__: object) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    with monkeypatch.context() as patched:
        patched.setattr(Path, step, full)
        seen.write("holding", "lost", T0 + 60.0)
    assert "No space left" in seen.failed
    assert read(file) == Seen(T0, "holding", "before")
    assert [entry.name for entry in tmp_path.iterdir()] == ["last-seen"]
    seen.write("holding", "after", T0 + 120.0)
    assert (seen.failed, read(file)) == ("", Seen(T0 + 120.0, "holding", "after"))


@pytest.mark.parametrize("utc", [float("nan"), float("inf"), 1e30])
def test_a_senseless_clock_ends_nothing(tmp_path: Path, utc: float) -> None:
    """A time that no calendar has is not written, and not raised."""
    seen = LastSeen(tmp_path / "last-seen")
    seen.write("holding", "", utc)
    assert seen.failed
    assert read(tmp_path / "last-seen") is None


def test_a_folder_that_is_gone_ends_nothing(tmp_path: Path) -> None:
    """Somebody moved the run folder away: the reason is kept."""
    seen = LastSeen(tmp_path / "gone" / "last-seen")
    seen.write("holding", "", T0)
    assert "No such file" in seen.failed


@pytest.mark.parametrize(
    "text", ["", "{", "[1]", '{"state": "holding"}', '{"utc": "x", "state": "", "text": ""}', "\0"]
)
def test_what_is_not_ours_is_nothing(tmp_path: Path, text: str) -> None:
    """Half a line, another program's file, and none at all are read as nothing."""
    file = tmp_path / "last-seen"
    assert read(file) is None
    file.write_text(text, "utf-8")
    assert read(file) is None


def test_a_long_text_is_cut() -> None:
    """The line stays short, whatever a state has to say."""
    assert len(line_of(Seen(T0, "holding", "x" * 100_000))) < 1000


# -- the page of the manual ----------------------------------------------------------------------------------------


def block(first: str) -> str:
    """The indented block of the page `unattended` that begins with `first`."""
    lines = manual.text("unattended").splitlines()
    begin = next(number for number, line in enumerate(lines) if line.startswith(f"    {first}"))
    taken = []
    for line in lines[begin:]:
        if line and not line.startswith("    "):
            break
        taken.append(line[4:])
    return "\n".join(taken).strip() + "\n"


@pytest.mark.skipif(os.name != "posix", reason="the watchdog of the manual is a shell's program")
@pytest.mark.parametrize(
    ("state", "age_s", "alarm"), [("holding", 5.0, False), ("holding", 1800.0, True), ("finished", 1800.0, False)]
)
def test_the_watchdog_of_the_manual_works(tmp_path: Path, state: str, age_s: float, alarm: bool) -> None:
    """As printed: it is silent for a run that lives or has finished, and mails for one that went silent."""
    run, tools = tmp_path / "run", tmp_path / "tools"
    run.mkdir()
    tools.mkdir()
    (tools / "mail").write_text('#!/bin/sh\ncat > "$MAILED"\n', "utf-8")
    (tools / "mail").chmod(0o755)
    LastSeen(run / "last-seen").write(state, "hold 41", T0)
    stat = (run / "last-seen").stat()
    os.utime(run / "last-seen", (stat.st_atime - age_s, stat.st_mtime - age_s))
    script = tmp_path / "watchdog"
    script.write_text(block("#!/bin/sh"), "utf-8")
    path = f"{tools}:{os.environ['PATH']}"
    environment = {**os.environ, "PATH": path, "MAILED": str(tmp_path / "mailed")}
    subprocess.run(["/bin/sh", script, run], env=environment, check=True, timeout=60.0)
    assert (tmp_path / "mailed").exists() == alarm


def test_the_unit_of_the_manual_is_safe() -> None:
    """Never started again after a trip; stopped through the supervisor, with time to switch off and prove it."""
    unit = dict(line.split("=", 1) for line in block("[Unit]").splitlines() if "=" in line)
    assert "4" in unit["RestartPreventExitStatus"].split()
    assert "3" not in unit["RestartPreventExitStatus"].split()
    assert unit["KillMode"] == "mixed"
    assert float(unit["TimeoutStopSec"]) > BOUNDS["obey_s"] + BOUNDS["take_over_s"]
    assert re.search(r"/sweeprig resume \S+ --plain$", unit["ExecStart"])


def test_the_states_of_the_page_exist() -> None:
    """The words of states in the examples are those of the table of states."""
    page = manual.text("unattended")
    shown = set(re.findall(r'"state": "([^"]+)"', page))
    assert shown == {State.HOLDING.words, State.FINISHED.words}
