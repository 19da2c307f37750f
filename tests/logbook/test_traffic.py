"""The traffic log: what it writes, where it ends, and that it never stops anything."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.holds import Hold
from sweeprig.logbook import Logbook, TrafficLog


def test_lines(tmp_path: Path) -> None:
    """A message is one line with time, instrument, direction and text; bytes that are no plain text are escaped."""
    log = TrafficLog(tmp_path / "traffic.log")
    log("meter", ">", b"READ?", 12.25)
    log("meter", "<", b"+1.0E+00", 12.5)
    log("scope", "<", b"\x00\xff\n\\n", 12.75)
    log("scope", "<", b"a\\n", 13.0)
    log.close()
    assert log.failed == ""
    assert (tmp_path / "traffic.log").read_text("ascii").splitlines() == [
        "12.2500 meter > READ?",
        "12.5000 meter < +1.0E+00",
        r"12.7500 scope < \x00\xff\n\\n",
        r"13.0000 scope < a\\n",
    ]


def test_it_is_appended(tmp_path: Path) -> None:
    """A resumed run goes on in the same file."""
    for at in (1.0, 2.0):
        log = TrafficLog(tmp_path / "traffic.log")
        log("board", ">", b"?", at)
        log.close()
    assert (tmp_path / "traffic.log").read_text() == "1.0000 board > ?\n2.0000 board > ?\n"


def test_flushed_with_each_commit(tmp_path: Path, make_hold: Callable[..., Hold]) -> None:
    """Lines wait in memory until the logbook commits."""
    log = TrafficLog(tmp_path / "traffic.log")
    with Logbook.create(tmp_path / "logbook.sqlite", "", "", "", traffic=log) as book:
        book.begin_session(0.0, 0.0, {})
        log("board", ">", b"?", 1.0)
        assert (tmp_path / "traffic.log").read_text() == ""
        book.intend(make_hold(1), 1, 1.0, 1.0)
        assert (tmp_path / "traffic.log").read_text() == "1.0000 board > ?\n"
    log.close()


def test_cap(tmp_path: Path) -> None:
    """At the cap a note is written and nothing more, also when the file was long from an earlier session."""
    path = tmp_path / "traffic.log"
    log = TrafficLog(path, cap_bytes=100)
    for index in range(50):
        log("board", ">", b"0123456789", float(index))
    lines = path.read_text().splitlines()
    assert len(lines) == 4  # three lines of 27 characters and the note
    assert lines[-1] == "# the cap of 100 bytes is reached: no more traffic is noted"
    assert log.failed == "cap reached"
    again = TrafficLog(path, cap_bytes=100)
    again("board", ">", b"0", 60.0)
    again.close()
    assert "60.0000" not in path.read_text()


def test_cap_within_many_messages(tmp_path: Path) -> None:
    """Far from the cap messages are kept and written together; the cap still falls between two whole lines."""
    path, cap = tmp_path / "traffic.log", 1_500_000
    log = TrafficLog(path, cap_bytes=cap)
    for index in range(80_000):
        log("board", ">", b"0123456789", 1000.0 + index)
    log.close()
    text = path.read_text()
    lines = text.splitlines()
    assert lines[-1].startswith("# the cap of 1500000 bytes")
    assert lines[:-1] == [f"{1000 + index}.0000 board > 0123456789" for index in range(len(lines) - 1)]
    kept = len(text) - len(lines[-1]) - 1
    assert cap - len(lines[-2]) - 1 < kept <= cap


def test_unwritable_log_stops_nothing(tmp_path: Path, make_hold: Callable[..., Hold]) -> None:
    """A log that cannot be opened says why and is silent from then on."""
    log = TrafficLog(tmp_path / "no such folder" / "traffic.log")
    assert "No such file" in log.failed
    with Logbook.create(tmp_path / "logbook.sqlite", "", "", "", traffic=log) as book:
        book.begin_session(0.0, 0.0, {})
        log("board", ">", b"?", 1.0)
        book.intend(make_hold(1), 1, 1.0, 1.0)
        assert len(book.unfinished()) == 1


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
def test_full_disk_stops_nothing(tmp_path: Path, make_hold: Callable[..., Hold]) -> None:
    """Row D6: A log on a full disk gives up at the next commit, and the commit stands."""
    log = TrafficLog(Path("/dev/full"))
    with Logbook.create(tmp_path / "logbook.sqlite", "", "", "", traffic=log) as book:
        book.begin_session(0.0, 0.0, {})
        log("board", ">", b"?", 1.0)
        book.intend(make_hold(1), 1, 1.0, 1.0)
        assert "No space left" in log.failed
        log("board", ">", b"?", 2.0)
        assert len(book.unfinished()) == 1
