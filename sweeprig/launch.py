"""Starting and resuming runs: run folder, logbook, clock and links put together around `conduct.run`.

The one place that chooses between real links, a served simulated bench and the in-process one.
"""

from __future__ import annotations

import shutil
from collections.abc import Mapping
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sweeprig.clock import Clock, SystemClock
from sweeprig.conduct.rig import RigUse, assemble, open_rig, require_heartbeat, same_instruments
from sweeprig.conduct.run import Ending, run
from sweeprig.conduct.states import OnEvent, Orders
from sweeprig.errors import ConfigError, RoleMissing
from sweeprig.job import Job, document, freeze, job_hash, load
from sweeprig.job.freeze import with_deadline
from sweeprig.logbook import Logbook
from sweeprig.logbook.run_folder import FINDINGS, JOB, LOGBOOK, REPORT, TRAFFIC, create_run_folder, folder_of
from sweeprig.logbook.traffic import TrafficLog


@dataclass(frozen=True, slots=True)
class Launched:
    """path: the run folder; ending: how this session ended."""

    path: Path
    ending: Ending


def _nobody(event: object) -> None:
    del event


def in_process(job: Job) -> bool:
    """Every instrument is answered by the simulated bench inside this process (`load` refuses a mixture)."""
    return all(instrument.in_process for instrument in job.rig.instruments.values())


def start(
    job: Job | Path | str,
    runs: Path | str = "runs",
    *,
    attended: bool = False,
    on_event: OnEvent = _nobody,
    orders: Orders | None = None,
) -> Launched:
    """Begin a new run in a new folder under `runs` and work it to the end of its first session.

    Errors: ConfigError before anything moves; RigError, DiskFull with the drive off; nothing concluded is lost.
    """
    if not isinstance(job, Job):
        job = load(job)
    check_rig(job)
    now = SystemClock().utc()
    job = with_deadline(job, _first_utc(job, now))
    text = document(job)
    folder = create_run_folder(Path(runs), job.motor.name, now, text)
    _keep_dialects(job, folder)
    traffic = TrafficLog(folder / TRAFFIC)
    logbook = Logbook.create(folder / LOGBOOK, text, job_hash(text), software(), traffic=traffic)
    return Launched(folder, _session(job, logbook, traffic, attended, on_event, orders or Orders()))


def resume(
    path: Path | str, *, attended: bool = False, on_event: OnEvent = _nobody, orders: Orders | None = None
) -> Launched:
    """Go on with a run that ended or was killed: a new session, warm-up done again, nothing lost, nothing doubled."""
    folder = folder_of(path)
    job = load(folder / JOB)
    for stale in (FINDINGS, REPORT):
        (folder / stale).unlink(missing_ok=True)
    traffic = TrafficLog(folder / TRAFFIC)
    logbook = Logbook.open(folder / LOGBOOK, traffic=traffic)
    return Launched(folder, _session(job, logbook, traffic, attended, on_event, orders or Orders()))


def check_rig(job: Job) -> None:
    """Refuse what cannot work once the links are open, with nothing opened and no folder made.

    ConfigError for an unknown adapter, dialect or option, or an address that the simulated bench does not serve;
    RoleMissing for a role whose instrument has no such channel.
    """
    rig, named = assemble(RigUse.of_job(job), SystemClock()), job.rig.instruments
    for role, given in job.rig.roles.items():
        name, _, quantity = given.partition(".")
        channels = rig.adapters[name].channels
        if quantity and quantity not in channels:
            raise RoleMissing(
                f"the instrument {name!r} has no channel for the role {role}",
                value=given,
                allowed=", ".join(f"{name}.{channel}" for channel in channels),
                remedy="Correct [roles] in the rig file, or set the instrument's option that adds the channel",
                topic="rig",
            )
    for name, instrument in named.items():
        if instrument.in_process and instrument.address.partition(":")[2] not in named:
            raise ConfigError(
                f"the simulated bench has no instrument for the address of {name}",
                value=instrument.address,
                allowed=", ".join(f"simbench:{each}" for each in named),
                remedy="Behind simbench: stands the name of an instrument of this rig file",
                topic="simbench",
            )


def _first_utc(job: Job, now: float) -> float:
    """UTC seconds at which the run's own clock begins: the simulated bench's is not that of the computer."""
    if not in_process(job):
        return now
    from sweeprig.simbench.clock import START_UTC

    return START_UTC


def _keep_dialects(job: Job, folder: Path) -> None:
    """The user's own dialects go with the run, so that a resume finds them beside its job.toml."""
    if job.rig_folder is None:
        return
    for name in {instrument.dialect for instrument in job.rig.instruments.values()} - {None}:
        own = job.rig_folder / "dialects" / f"{name}.toml"
        if own.is_file():
            (folder / "dialects").mkdir(exist_ok=True)
            shutil.copy(own, folder / "dialects")


def _session(
    job: Job, logbook: Logbook, traffic: TrafficLog, attended: bool, on_event: OnEvent, orders: Orders
) -> Ending:
    with logbook, closing(traffic):
        saved = {seen.name: seen.identity for seen in reversed(logbook.instruments())}
        session, clock, ports = _clock_and_ports(job, logbook, attended)
        rig = open_rig(RigUse.of_job(job), clock, ports, traffic)
        try:
            same_instruments(rig, saved)
            if not attended:
                require_heartbeat(rig)
            return run(freeze(job, session), rig, logbook, session, on_event, orders)
        finally:
            rig.close()


def _clock_and_ports(job: Job, logbook: Logbook, attended: bool) -> tuple[int, Clock, Mapping[str, Any] | None]:
    """The session's number, its clock, and the ports of the in-process bench where there is one.

    On the simulated bench the run clock and UTC go on where the last session left them."""
    info = {"attended": attended, "software": software()}
    if not in_process(job):
        clock: Clock = SystemClock(job.rig.rate or 1.0)
        return logbook.begin_session(clock.now(), clock.utc(), info), clock, None
    from sweeprig.simbench import build

    began, began_utc = logbook.last_times() or (0.0, None)
    bench = build(job, session=len(logbook.sessions()) + 1, began=began, began_utc=began_utc)
    return logbook.begin_session(bench.clock.now(), bench.clock.utc(), info), bench.clock, bench.ports


def software() -> str:
    """Name and version for the record."""
    from importlib.metadata import version

    return f"sweeprig {version('sweeprig')}"
