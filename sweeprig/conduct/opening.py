"""Opening a run folder for work: the frozen job, the logbook (made where there is none yet), and the first session.

Shared by the runner process and by work inside the calling process; which clock and links there are is given.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from sweeprig.clock import SystemClock
from sweeprig.conduct.sessions import Opening
from sweeprig.errors import RunInUse
from sweeprig.job import Job, job_hash, load
from sweeprig.logbook import Logbook
from sweeprig.logbook.run_folder import FINDINGS, JOB, LOGBOOK, REPORT, TRAFFIC
from sweeprig.logbook.traffic import TrafficLog


def open_run_for_work(folder: Path, wait: Callable[[], bool] = lambda: False) -> tuple[Job, Logbook, TrafficLog]:
    """The run in `folder`. What was worked out from it before is taken away: it will not be true any more.

    RunInUse where another process has the logbook, after `wait` has said to wait no longer."""
    while True:
        try:
            return _open(folder)
        except RunInUse:
            if not wait():
                raise


def _open(folder: Path) -> tuple[Job, Logbook, TrafficLog]:
    job = load(folder / JOB)
    for stale in (FINDINGS, REPORT):
        (folder / stale).unlink(missing_ok=True)
    traffic, path = TrafficLog(folder / TRAFFIC), folder / LOGBOOK
    try:
        if path.exists():
            return job, Logbook.open(path, traffic=traffic), traffic
        text = (folder / JOB).read_text("utf-8")
        return job, Logbook.create(path, text, job_hash(text), software(), traffic=traffic), traffic
    except BaseException:
        traffic.close()
        raise


def real_opening(job: Job, logbook: Logbook, attended: bool, because: str) -> Opening:
    """A session on real links. After a restart by the supervisor (`because`) nobody has touched the rig, so that what
    was set by hand is still set."""
    clock = clock_going_on(job.rig.rate or 1.0, logbook.last_times())
    sessions = logbook.sessions()
    hands = sessions[-1].info.get("hands") if because and sessions else None
    info: dict[str, object] = {"attended": attended, "software": software()}
    if because:
        info |= {"because": because, "hands": hands}
    number = logbook.begin_session(clock.now(), clock.utc(), info)
    return Opening(number, clock, None, info, attended, hands if isinstance(hands, str) else None)


def clock_going_on(rate: float, last: tuple[float, float] | None) -> SystemClock:
    """The clock of a run whose logbook was last written at `last` (run clock s, UTC s); None where it begins now.

    The machine's monotonic clock begins anew when the machine does, and an accelerated one with every process. The
    run's clock never goes back: it goes on from its last entry, by what UTC says has passed since. An accelerated
    UTC does not go back either.
    """
    if last is None:
        return SystemClock(rate)
    utc = SystemClock().utc()
    if rate != 1.0:
        utc = max(utc, last[1])
    return SystemClock(rate, last[0] + max(0.0, utc - last[1]), utc)


def software() -> str:
    """Name and version for the record."""
    from importlib.metadata import version

    return f"sweeprig {version('sweeprig')}"
