"""Starting and resuming runs: run folder, logbook, clock and links put together around `conduct.run`.

The one place that chooses between real links, a served simulated bench and the in-process one.
"""

from __future__ import annotations

import shutil
from contextlib import closing
from dataclasses import dataclass, replace
from pathlib import Path

from sweeprig.clock import SystemClock
from sweeprig.conduct.attention import Attention
from sweeprig.conduct.host import checks, keep_awake, refuse
from sweeprig.conduct.locks import COMMAND, LINK, RigLock
from sweeprig.conduct.notice_file import read_notices
from sweeprig.conduct.opening import open_run_for_work, software
from sweeprig.conduct.requests import Requests
from sweeprig.conduct.rig import RigUse, assemble
from sweeprig.conduct.sessions import Opening, work
from sweeprig.conduct.stable_ports import with_stable_ports
from sweeprig.conduct.states import Ending, Event, OnEvent, Orders
from sweeprig.conduct.supervise import Supervisor, runner_command
from sweeprig.errors import ConfigError, RoleMissing, SweeprigError
from sweeprig.job import Job, document, freeze, load
from sweeprig.job.freeze import with_deadline
from sweeprig.logbook.run_folder import JOB, LOGBOOK, FolderLock, create_run_folder, folder_of
from sweeprig.plan import Plan
from sweeprig.schedule import preview
from sweeprig.schedule.preview import ROUGH


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
    """Begin a new run in a new folder under `runs` and work it to the end.

    On real links this process becomes the supervisor, and a runner of its own performs the holds. Errors: ConfigError
    and RigInUse before anything moves; RigError, DiskFull with the drive off; nothing concluded is lost.
    """
    if not isinstance(job, Job):
        job = load(job)
    check_rig(job)
    now = SystemClock().utc()
    job = with_stable_ports(with_deadline(job, first_utc(job)))
    if not in_process(job):
        _check_host(job, Path(runs))
    with rig_lock(job) as lock:
        lock.nobody_has(LINK)
        folder = create_run_folder(Path(runs), job.motor.name, now, document(job))
        _keep_dialects(job, folder)
        return _work(job, folder, lock, attended, on_event, orders or Orders())


def resume(
    path: Path | str, *, attended: bool = False, on_event: OnEvent = _nobody, orders: Orders | None = None
) -> Launched:
    """Go on with a run that ended or was killed: a new session, warm-up done again, nothing lost, nothing doubled."""
    folder = folder_of(path)
    job = load(folder / JOB)
    with rig_lock(job) as lock:
        return _work(job, folder, lock, attended, on_event, orders or Orders())


def rig_lock(job: Job) -> RigLock:
    """Nobody else may command any instrument of this rig meanwhile; the simulated bench inside needs no lock."""
    return RigLock((each.address for each in job.rig.instruments.values()), COMMAND, "works on")


def _work(job: Job, folder: Path, rig: RigLock, attended: bool, on_event: OnEvent, orders: Orders) -> Launched:
    """The run's own lock, then sessions inside this process or a supervisor with its runner."""
    inside = in_process(job)
    notices = None if inside else read_notices()
    simulated = inside or job.rig.rate is not None
    with FolderLock(folder), Attention(folder, job.motor.name, notices, simulated, on_event) as attention:
        for kind in Requests(folder, orders).clear():
            attention(Event("notice", 0.0, {"text": f"a request from before this session was put aside: {kind}"}))
        rig.works_on(folder)  # from now on requests find their way here
        try:
            ending = (_inside if inside else _supervised)(folder, attended, attention, orders)
        except SweeprigError as error:
            error.run = str(folder) if (folder / LOGBOOK).exists() else None
            raise
        attention.ended(ending)
        return Launched(folder, ending)


def _supervised(folder: Path, attended: bool, attention: Attention, orders: Orders) -> Ending:
    job = load(folder / JOB)
    with keep_awake() as awake:
        attention(Event("notice", 0.0, {"text": awake.how}))
        command = runner_command(folder, attended)
        return Supervisor(folder, RigUse.of_job(job), command, attention, orders, attention.tick).run()


def _check_host(job: Job, runs: Path) -> None:
    """What this machine cannot finish is refused before anything moves: disk, clock, descriptors, deadline."""
    plan, now = freeze(job), first_utc(job)
    night = preview(plan, now, ROUGH)
    until = job.sweep.deadline.until if job.sweep.deadline is not None else None
    rate = job.rig.rate or 1.0
    refuse(
        checks(
            runs,
            night.seconds / rate,
            sum(night.holds.values()),
            instruments=len(job.rig.instruments),
            deadline_utc=None if until is None else until.timestamp(),
            needed_seconds=None if until is None else _needed_s(plan, now) / rate,
        )
    )


def _needed_s(plan: Plan, now: float) -> float:
    """What must fit before a deadline: a ladder's whole night, since it makes its trials whatever they tell; else the
    time until every condition has an answer."""
    night = preview(replace(plan, deadline_utc=None), now, ROUGH)
    ladder = any(stage is not None and stage.search == "ladder" for stage in (plan.stall, plan.start))
    return night.seconds if ladder or night.answered_s is None else night.answered_s


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


def first_utc(job: Job) -> float:
    """UTC seconds at which a run that started now would begin by its own clock: the simulated bench's is not that of
    the computer."""
    if not in_process(job):
        return SystemClock().utc()
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


def _inside(folder: Path, attended: bool, on_event: OnEvent, orders: Orders) -> Ending:
    """On the simulated bench of this process. Its run clock and UTC go on where the last session left them."""
    from sweeprig.simbench import build

    job, logbook, traffic = open_run_for_work(folder)
    with logbook, closing(traffic):
        info = {"attended": attended, "software": software()}
        began, began_utc = logbook.last_times() or (0.0, None)
        bench = build(job, session=len(logbook.sessions()) + 1, began=began, began_utc=began_utc)
        number = logbook.begin_session(bench.clock.now(), bench.clock.utc(), info)
        opening = Opening(number, bench.clock, bench.ports, info, attended)
        return work(job, folder, logbook, traffic, opening, on_event, orders)
