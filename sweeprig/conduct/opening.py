"""Opening a run folder for work: the frozen job, the logbook (made where there is none yet), and the first session.

Shared by the runner process and by work inside the calling process; which clock and links there are is given.
"""

from __future__ import annotations

from pathlib import Path

from sweeprig.clock import SystemClock
from sweeprig.conduct.sessions import Opening
from sweeprig.job import Job, job_hash, load
from sweeprig.logbook import Logbook
from sweeprig.logbook.run_folder import FINDINGS, JOB, LOGBOOK, REPORT, TRAFFIC
from sweeprig.logbook.traffic import TrafficLog


def open_run_for_work(folder: Path) -> tuple[Job, Logbook, TrafficLog]:
    """The run in `folder`. What was worked out from it before is taken away: it will not be true any more."""
    job = load(folder / JOB)
    for stale in (FINDINGS, REPORT):
        (folder / stale).unlink(missing_ok=True)
    traffic, path = TrafficLog(folder / TRAFFIC), folder / LOGBOOK
    if path.exists():
        return job, Logbook.open(path, traffic=traffic), traffic
    text = (folder / JOB).read_text("utf-8")
    return job, Logbook.create(path, text, job_hash(text), software(), traffic=traffic), traffic


def real_opening(job: Job, logbook: Logbook, attended: bool, because: str) -> Opening:
    """A session on real links. After a restart by the supervisor (`because`) nobody has touched the rig, so that what
    was set by hand is still set."""
    clock = SystemClock(job.rig.rate or 1.0)
    sessions = logbook.sessions()
    hands = sessions[-1].info.get("hands") if because and sessions else None
    info: dict[str, object] = {"attended": attended, "software": software()}
    if because:
        info |= {"because": because, "hands": hands}
    number = logbook.begin_session(clock.now(), clock.utc(), info)
    return Opening(number, clock, None, info, attended, hands if isinstance(hands, str) else None)


def software() -> str:
    """Name and version for the record."""
    from importlib.metadata import version

    return f"sweeprig {version('sweeprig')}"
