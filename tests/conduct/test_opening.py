"""How a process begins its work on a run: the run's clock goes on, and a logbook that is held is waited for."""

from __future__ import annotations

from pathlib import Path

import pytest

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.opening import clock_going_on, open_run_for_work, real_opening
from sweeprig.conduct.runner import HeardOrders, waits
from sweeprig.conduct.states import Event
from sweeprig.errors import RunInUse
from sweeprig.job import document, load
from sweeprig.logbook.run_folder import FolderLock, create_run_folder


@pytest.fixture
def folder(short_job: Path, tmp_path: Path) -> Path:
    """A run that nobody has worked on yet."""
    return create_run_folder(tmp_path / "runs", "fan", SystemClock().utc(), document(load(short_job)))


def test_a_run_begins_on_the_machines_clock() -> None:
    """The first session's clock is the machine's."""
    clock, machine = clock_going_on(1.0, None), SystemClock()
    assert clock.now() == pytest.approx(machine.now(), abs=0.5)
    assert clock.utc() == pytest.approx(machine.utc(), abs=0.5)


@pytest.mark.parametrize("last_now", [0.0, 1e9], ids=["machine's clock ahead", "machine restarted: its clock behind"])
def test_the_runs_clock_goes_on(last_now: float) -> None:
    """In another process, also after the machine restarted: on from the last entry, by what UTC says has passed."""
    utc = SystemClock().utc()
    clock = clock_going_on(1.0, (last_now, utc - 3600.0))
    assert clock.now() == pytest.approx(last_now + 3600.0, abs=0.5)
    assert clock.utc() == pytest.approx(utc, abs=0.5)


def test_the_runs_clock_never_goes_back() -> None:
    """UTC was set back since the last entry: the run clock goes on from there at once, and UTC is the machine's."""
    utc = SystemClock().utc()
    clock = clock_going_on(1.0, (50.0, utc + 7200.0))
    assert 50.0 <= clock.now() < 50.5
    assert clock.utc() == pytest.approx(utc, abs=0.5)


def test_an_accelerated_clock_goes_on_in_both() -> None:
    """On a served bench run clock and UTC are ahead of the machine's after a session, and stay so in the next one."""
    last = (40_000.0, SystemClock().utc() + 30_000.0)
    clock = clock_going_on(20.0, last)
    now, utc = clock.now(), clock.utc()
    assert last[0] <= now < last[0] + 10.0
    assert last[1] <= utc < last[1] + 10.0
    clock.wait(now + 1.0)
    assert clock.now() >= now + 1.0
    assert clock.utc() - utc == pytest.approx(clock.now() - now, abs=0.5)


def test_sessions_stand_in_order_on_the_runs_clock(folder: Path) -> None:
    """After a session whose clock stood far ahead (the machine ran for years), one on a machine that was just started
    begins later on the run's clock."""
    for ahead in (0.0, 1e9):
        job, logbook, traffic = open_run_for_work(folder)
        with logbook:
            opening = real_opening(job, logbook, attended=True, because="")
            assert opening.clock.now() >= ahead
            logbook.event("notice", 1e9, opening.clock.utc(), {"text": "years later"}, now=True)
        traffic.close()
    job, logbook, traffic = open_run_for_work(folder)
    with logbook:
        first, second = logbook.sessions()
        assert second.began >= 1e9 > first.began
        assert second.began_utc >= first.began_utc
    traffic.close()


def test_a_logbook_that_is_held_is_waited_for(folder: Path) -> None:
    """A `status` that looks, or a runner that is still switching off, has the logbook for a while: asked again."""
    lock, asked = FolderLock(folder, "logbook").acquire(), list[int]()

    def wait() -> bool:
        asked.append(1)
        if len(asked) == 3:
            lock.release()
        return True

    _, logbook, traffic = open_run_for_work(folder, wait)
    logbook.close(clean=True)
    traffic.close()
    assert len(asked) == 3


def test_waiting_for_a_logbook_has_an_end(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without waiting, and once the runner is ordered off: RunInUse, which names the holder. Waiting is told, once."""
    orders, pulses, told = HeardOrders(SystemClock().now), list[int](), list[Event]()
    monkeypatch.setitem(BOUNDS, "proof_s", 0.0)

    def pulse() -> None:
        pulses.append(1)
        orders.off = len(pulses) == 3

    with FolderLock(folder, "logbook"):
        with pytest.raises(RunInUse, match="held by process"):
            open_run_for_work(folder)
        with pytest.raises(RunInUse, match="held by process"):
            open_run_for_work(folder, waits(told.append, pulse, orders.off_because))
    assert len(pulses) == 3
    assert [event.data["text"] for event in told] == [
        "another process still has this run's logbook (a runner that lost its supervisor?); waiting for its end"
    ]
