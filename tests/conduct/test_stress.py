"""Disks full, slow and locked, clocks stepped, links reopened by the hundred. The drive goes off, and nothing that was
concluded is lost. The long forms are tests/figures/stress.py."""

from __future__ import annotations

import errno
import gc
import os
import socket
import sqlite3
import sys
import threading
from collections.abc import Callable
from contextlib import closing, suppress
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import pytest

from sweeprig.clock import SystemClock
from sweeprig.conduct.last_seen import LastSeen
from sweeprig.conduct.requests import Requests
from sweeprig.conduct.run import LOCKED
from sweeprig.conduct.states import Event, State
from sweeprig.errors import DiskFull, RunInUse
from sweeprig.holds import Outcome, Purpose, Status, Verdict
from sweeprig.link.registry import open_link
from sweeprig.logbook import Logbook
from sweeprig.logbook.run_folder import LOGBOOK
from sweeprig.logbook.traffic import TrafficLog
from sweeprig.results import results

if TYPE_CHECKING:
    from sweeprig.simbench import Bench
    from tests.conduct.conftest import Bed

MakeBed = Callable[[], "Bed"]


# -- disks -----------------------------------------------------------------------------------------------------------


def limited(connection: sqlite3.Connection) -> None:
    """No new page fits."""
    connection.execute(f"PRAGMA max_page_count = {connection.execute('PRAGMA page_count').fetchone()[0]}")


def read_only(connection: sqlite3.Connection) -> None:
    """As after a remount: SQLITE_READONLY for every write."""
    connection.execute("PRAGMA query_only = ON")


@pytest.mark.parametrize("spoil", [limited, read_only], ids=["full", "read-only"])
@pytest.mark.parametrize("commit", [8, 17, 30])
def test_a_disk_that_takes_no_more(
    make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch, spoil: Callable[[sqlite3.Connection], None], commit: int
) -> None:
    """Row D6: A disk that is full, or read-only, from some commit on: DiskFull (exit 3) that says what to do, drive and
    supply off at once; what was concluded is there; with room again the resumed run finishes with nothing doubled."""
    bed = make_bed()
    books: list[Logbook] = []
    init = Logbook.__init__

    def noted(self: Logbook, *args: Any) -> None:
        init(self, *args)
        books.append(self)

    monkeypatch.setattr(Logbook, "__init__", noted)

    def spoils(count: int, when: str) -> None:
        if count == commit and when == "before":
            spoil(books[-1]._connection)

    bed.commit = spoils
    with pytest.raises(DiskFull, match="then resume the run") as caught:
        bed.start()
    assert caught.value.exit_code == 3
    bed.assert_off()
    before = bed.outcomes
    bed.calm()
    assert bed.resume().ending.state is State.FINISHED
    assert bed.whole()[: len(before)] == before


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs a device that is always full")
def test_a_full_disk_for_the_helpers_stops_nothing(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row D6: No room for traffic.log and last-seen: the run finishes, and both say why they ended."""
    logs: list[TrafficLog] = []
    signs: list[LastSeen] = []
    init = TrafficLog.__init__

    def full(self: TrafficLog, path: Path, *rest: Any) -> None:
        init(self, path, *rest)
        assert self._file is not None
        self._file.close()
        self._file = Path("/dev/full").open("a", encoding="ascii")  # noqa: SIM115 - the log closes it
        logs.append(self)

    def no_room(self: LastSeen, _: str) -> None:
        signs.append(self)
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(TrafficLog, "__init__", full)
    monkeypatch.setattr(LastSeen, "_replace", no_room)
    bed = make_bed()
    assert bed.start().ending.state is State.FINISHED
    bed.whole()
    assert "No space left" in logs[0].failed
    assert "No space left" in signs[0].failed


def test_a_disk_that_is_full_for_the_report_only(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row D6: No room for findings and report: DiskFull with the file's name, no half file, the logbook as it was; with
    room again the same call writes both."""
    bed = make_bed()
    bed.start()
    before = bed.outcomes

    def no_room(_: int) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", no_room)
        with pytest.raises(DiskFull, match=r"findings\.json"):
            results(bed.path)
    assert not (bed.path / "findings.json").exists()
    assert not (bed.path / "report.html").exists()
    assert bed.outcomes == before
    assert results(bed.path).report_path == bed.path / "report.html"


@pytest.mark.parametrize(("age", "reason"), [("2.5 s", "no_reading"), ("5 s", "heartbeat")])
def test_a_slow_disk(make_bed: MakeBed, age: str, reason: str) -> None:
    """Row D6: The two commits between two holds take longer than the board's heartbeat of 2 s: the drive is off
    by then, and the hold that finds it off, or readings too old, is discarded; the sweep still gets done, with the same
    verdicts, none of a stop that was a lapse."""
    bed = make_bed()

    def slow(count: int, when: str) -> None:
        if when == "before" and count > 5:
            bed.bench.advance(bed.bench.now + 1.05)

    calm = make_bed()
    calm.start()
    quiet = calm.outcomes
    bed = make_bed()
    rig = bed.job.parent / "shelter-bench.toml"
    rig.write_text(rig.read_text("utf-8").replace('"2.5 s"', f'"{age}"'), "utf-8")
    bed.commit = slow
    assert bed.start().ending.state is State.FINISHED
    outcomes = bed.whole()
    discarded = [outcome for outcome in outcomes if outcome.status is not Status.DONE]
    assert discarded
    assert {o.status for o in discarded} == {Status.DISCARDED}
    reasons = {o.reason.partition(":")[0] for o in discarded}
    assert reason in reasons
    assert reasons <= {reason, "switch_open"}  # of a drive that is off, protection may speak before the drive is asked
    lapses = [one for one in bed.bench.record if one.what == "drive_off" and "heartbeat" in one.why]
    assert len(lapses) >= len(discarded)
    assert curve_of(outcomes) == curve_of(quiet)


def test_a_sign_of_life_between_commits(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row D6: No two commits follow each other without a sign of life between: on a disk that takes seconds for each,
    the supervisor would else take the runner for one that hangs."""
    bed = make_bed()
    told: list[str] = []
    look = Requests.look

    def looked(self: Requests) -> None:
        told.append("alive")
        look(self)

    monkeypatch.setattr(Requests, "look", looked)
    bed.commit = lambda _, when: told.append(when)
    bed.faults = {("meter", 60): "no_reply"}  # heals once
    bed.start()
    commits = [place for place, what in enumerate(told) if what == "after"]
    assert len(commits) > 30
    assert all("alive" in told[one:two] for one, two in pairwise(commits))


def curve_of(outcomes: list[Outcome]) -> list[tuple[float, str, Verdict]]:
    return [
        (o.hold.duty_percent, str(o.hold.approach), o.verdict)
        for o in outcomes
        if o.status is Status.DONE and o.hold.purpose is Purpose.CURVE
    ]


def hold_lock(path: Path, seconds: float) -> threading.Thread:
    """Another program writes into the logbook for so long; returns once it has the lock."""
    has = threading.Event()

    def holds() -> None:
        with closing(sqlite3.connect(path, isolation_level=None)) as other:
            other.execute("BEGIN IMMEDIATE")
            has.set()
            threading.Event().wait(seconds)
            other.execute("ROLLBACK")

    thread = threading.Thread(target=holds)
    thread.start()
    assert has.wait(10.0)
    return thread


@pytest.mark.parametrize(
    ("seconds", "commit"), [(0.25, 20), (1.5, 20), (1.5, 21)], ids=["short", "long, intent", "long, outcome"]
)
def test_another_program_locks_the_logbook(make_bed: MakeBed, seconds: float, commit: int) -> None:
    """Row D6: A write lock by another process: a short one is waited for; with a long one the drive goes off, the hold
    that would have flowed on is discarded with the reason, and the sweep goes on; nothing is lost."""
    bed = make_bed()
    threads: list[threading.Thread] = []

    def lock(count: int, when: str) -> None:
        if when == "before" and count == commit and not threads:
            threads.append(hold_lock(bed.path / LOGBOOK, seconds))

    bed.commit = lock
    assert bed.start().ending.state is State.FINISHED
    threads[0].join()
    discarded = [o.reason for o in bed.whole() if o.status is not Status.DONE]
    assert discarded == ([] if seconds < 0.5 else [LOCKED])
    assert len(bed.told("off", proved=False)) == len(discarded)


def test_a_logbook_that_stays_locked(make_bed: MakeBed, short: Callable[..., None]) -> None:
    """Row D6: Locked for longer than `busy_s`: the run ends with RunInUse (exit 3), off, and can be resumed."""
    short(busy_s=0.1)
    bed = make_bed()
    threads: list[threading.Thread] = []

    def lock(count: int, when: str) -> None:
        if when == "before" and count == 20 and not threads:
            threads.append(hold_lock(bed.path / LOGBOOK, 1.6))

    bed.commit = lock
    with pytest.raises(RunInUse, match="stayed locked") as caught:
        bed.start()
    assert caught.value.exit_code == 3
    bed.assert_off()
    threads[0].join()
    bed.calm()
    assert bed.resume().ending.state is State.FINISHED
    bed.whole()


# -- clocks ----------------------------------------------------------------------------------------------------------


def stepped(bed: Bed, steps: dict[int, float]) -> None:
    """UTC steps by so many seconds in the middle of these holds."""

    apart, left, listen = [0.0], dict(steps), bed.listen

    def built(bench: Bench) -> None:
        real = bench.clock.utc
        bench.clock.utc = lambda: real() + apart[0]  # type: ignore[method-assign]  # a stepped clock

    def heard(event: Event) -> None:
        listen(event)
        if event.kind == "beat":
            apart[0] += left.pop(cast(int, event.data["number"]), 0.0)

    bed.on_built = built
    bed.listen = heard  # type: ignore[method-assign]  # what the run tells


@pytest.mark.parametrize("steps", [{5: 3600.0}, {5: -3600.0}, {5: 3600.0, 9: -3600.0}, {5: -3.0}], ids=str)
def test_a_stepped_clock(make_bed: MakeBed, steps: dict[int, float]) -> None:
    """Row D1: UTC stepped by an hour either way, or back and forth: exactly the holds in hand are discarded and asked
    again; durations, which are by the run's own clock, are untouched."""
    bed = make_bed()
    stepped(bed, steps)
    assert bed.start().ending.state is State.FINISHED
    outcomes = bed.whole()
    assert {o.number for o in outcomes if o.status is Status.DISCARDED} == set(steps)
    assert all("clock was stepped" in o.reason for o in outcomes if o.status is Status.DISCARDED)
    assert all(0.0 < o.ended - o.began < 120.0 for o in outcomes)


@pytest.mark.parametrize(("step", "done"), [(3600.0, False), (-3600.0, True)])
def test_a_deadline_under_a_stepped_clock(make_bed: MakeBed, step: float, done: bool) -> None:
    """Row D1: The deadline is a moment in UTC: a clock stepped past it ends the run after the discarded hold, one that
    steps back leaves it to come; either way the run says why it ended, and it is off."""
    bed = make_bed()
    sweep = bed.job.parent / "short.toml"
    text = sweep.read_text("utf-8")
    sweep.write_text(text.replace("[zero]", "[deadline]\nhours = 0.9\n[zero]"), "utf-8")
    stepped(bed, {5: step})
    ending = bed.start().ending
    assert ending.state is State.FINISHED
    outcomes = bed.outcomes
    assert outcomes[4].status is Status.DISCARDED
    assert (len(outcomes) > 5) is done
    assert ("deadline" in ending.reason) is not done
    bed.assert_off()


# -- many times ------------------------------------------------------------------------------------------------------


@pytest.mark.skipif(sys.platform == "win32", reason="neither pseudo-terminals nor a list of descriptors")
@pytest.mark.parametrize("kind", ["socket", "pty"])
def test_links_reopened_again_and_again(kind: str) -> None:
    """Rows A14 and C15: Closed and reopened 500 times: not one descriptor more, and one less once it is closed."""
    clock = SystemClock()
    with closing(Listener() if kind == "socket" else Terminal()) as far:
        link = open_link(far.address, clock, clock.now() + 5.0)
        far.taken()
        gc.collect()  # what earlier tests left is closed now, and not in between
        before = descriptors()
        for _ in range(500):
            link.close()
            link.resynchronise(clock.now() + 5.0)
            assert link.dirty == ""
            far.taken()
        assert descriptors() <= before
        link.close()
        assert descriptors() <= before - 1


def descriptors() -> int:
    """How many this process has."""
    return len(list(Path("/dev/fd").iterdir()))


class Listener:
    """A TCP peer in this process, one connection kept at a time."""

    def __init__(self) -> None:
        self.server = socket.create_server(("127.0.0.1", 0))
        self.address = f"TCPIP0::127.0.0.1::{self.server.getsockname()[1]}::SOCKET"
        self.peers: list[socket.socket] = []
        self.server.setblocking(False)

    def taken(self) -> None:
        """Take what waits, keep the last."""
        with suppress(BlockingIOError):
            while True:
                self.peers.append(self.server.accept()[0])
        for gone in self.peers[:-1]:
            gone.close()
        del self.peers[:-1]

    def close(self) -> None:
        self.server.close()
        for peer in self.peers:
            peer.close()


class Terminal:
    def __init__(self) -> None:
        import tty

        self.master, self.slave = os.openpty()
        tty.setraw(self.slave)
        self.address = f"serial:{os.ttyname(self.slave)}"

    def taken(self) -> None:
        pass

    def close(self) -> None:
        os.close(self.master)
        os.close(self.slave)
