"""Commands that take a job: preview, run, resume."""

from __future__ import annotations

import json
import signal
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from sweeprig.cli.base import answer, as_json, cli, job_named, run_argument
from sweeprig.errors import ConfigError

if TYPE_CHECKING:
    from sweeprig.conduct.states import Orders
    from sweeprig.holds import Condition, Outcome
    from sweeprig.job import Job
    from sweeprig.launch import Launched
    from sweeprig.plan import Expected, Plan
    from sweeprig.schedule.preview import Spread


def time_options(command: Callable[..., None]) -> Callable[..., None]:
    """--until and --hours: when the run must have finished, instead of what the sweep says."""
    until = click.option("--until", metavar="TIME", help="When it must have finished, for example 06:30.")
    hours = click.option("--hours", type=float, metavar="N", help="… or so many hours after its start.")
    return until(hours(command))


def ending_as_asked(job: Job, until: str | None, hours: float | None) -> Job:
    """The job with the deadline of the command line. On the simulated bench in this process, whose clock is not that of
    the computer, a time of day becomes the hours until then."""
    from datetime import datetime

    from sweeprig.job.deadlines import ending, moment_of
    from sweeprig.launch import in_process

    now = datetime.now().astimezone()
    moment = None if until is None else moment_of(until, now)
    if moment is not None and hours is None and in_process(job):
        hours, moment = (moment - now).total_seconds() / 3600.0, None
    return ending(job, moment, hours)


def known_of(run: Path) -> dict[Condition, Expected]:
    """What an earlier run tells of its motor at each of its conditions."""
    from sweeprig.opened import open_run
    from sweeprig.schedule.learned import learned

    earlier = open_run(run)
    conditions = earlier.findings.as_json()["conditions"]
    return learned(conditions, earlier.outcomes, f"the run {earlier.path.name}")


@contextmanager
def processes(plan: Plan) -> Iterator[Spread]:
    """Something like `map`: over all cores where predicting nineteen nights would take long, else one by one."""
    searched = any(stage is not None and stage.search != "ladder" for stage in (plan.stall, plan.start))
    if not searched or plan.deadline_utc is None:
        yield map
        return
    import multiprocessing
    from concurrent.futures import ProcessPoolExecutor

    with ProcessPoolExecutor(mp_context=multiprocessing.get_context("spawn")) as pool:
        yield pool.map


@cli.command(short_help="What a night would do; nothing is opened or moved.")
@click.argument("job")
@time_options
@click.option("--like", type=click.Path(path_type=Path), metavar="RUN", help="Predict from an earlier run.")
@as_json
def preview(job: str, until: str | None, hours: float | None, like: Path | None, json_out: bool) -> None:
    """What a night would do: holds, time, how sure it will be, what it cannot find with this rig, who must be there.

    The night is predicted from what the motor file expects of the motor, or, with --like, from an earlier run of it.

    Everything is checked that can be checked with nothing connected; nothing is opened or moved.
    """
    from dataclasses import asdict, replace

    from sweeprig.clock import SystemClock
    from sweeprig.conduct.unattended import locked_rotor_sum, points
    from sweeprig.job import freeze
    from sweeprig.launch import check_rig, first_utc, in_process
    from sweeprig.schedule import preview as look_ahead
    from sweeprig.terminal import preview_text

    checked = ending_as_asked(job_named(job), until, hours)
    check_rig(checked)
    now = first_utc(checked)
    plan = freeze(checked, began_utc=now)
    with processes(plan) as spread:
        night = look_ahead(plan if like is None else replace(plan, expected_at=known_of(like)), now, spread=spread)
    sums, alone = locked_rotor_sum(checked), points(checked, SystemClock().utc())
    refused = [point.why for point in alone if not point.met]
    simulated = in_process(checked) or checked.rig.rate is not None
    if json_out:
        value = {**asdict(night), "locked_rotor_seconds": sums, "refused": refused, "simulated": simulated}
        value["left_alone"] = [{"point": point.words, "met": point.met} for point in alone]
        click.echo(json.dumps(value))
        return
    title = f"{checked.title}\n{checked.motor.name} on {checked.rig.name}, sweep {checked.sweep.name}"
    click.echo(preview_text(night, f"{title}{'  (SIMULATED)' if simulated else ''}", sums, alone))


@cli.command(short_help="Perform a job: sweep, findings, report.")
@click.argument("job")
@click.option("--runs", type=click.Path(path_type=Path), default=Path("runs"), show_default=True,
              help="Folder in which the run's own folder is made.")  # fmt: skip
@time_options
@click.option("--attended", is_flag=True, help="A person stays with the rig.")
@click.option("--plain", is_flag=True, help="Plain lines instead of a status line.")
@click.option("--undecided-ok", is_flag=True, help="Exit 0 also when a limit is not decided.")
@as_json
def run(
    job: str,
    runs: Path,
    until: str | None,
    hours: float | None,
    attended: bool,
    plain: bool,
    undecided_ok: bool,
    json_out: bool,
) -> None:
    """Perform a job: sweep, findings, report. Ctrl-C once finishes the hold in hand; twice switches off at once."""
    from sweeprig.launch import start

    checked = ending_as_asked(job_named(job), until, hours)
    _allowed(checked, attended)
    _perform(checked, plain, undecided_ok, json_out, lambda on_event, orders: start(
        checked, runs, attended=attended, on_event=on_event, orders=orders))  # fmt: skip


@cli.command(short_help="Go on with a run that was stopped or killed.")
@run_argument
@click.option("--attended", is_flag=True, help="A person stays with the rig.")
@click.option("--plain", is_flag=True, help="Plain lines instead of a status line.")
@click.option("--undecided-ok", is_flag=True, help="Exit 0 also when a limit is not decided.")
@as_json
def resume(run: Path, attended: bool, plain: bool, undecided_ok: bool, json_out: bool) -> None:
    """Go on with a run that was stopped or killed: nothing is lost, nothing doubled; the warm-up is done again."""
    from sweeprig.launch import resume as go_on
    from sweeprig.opened import open_run

    earlier = open_run(run)
    _allowed(earlier.job, attended)
    _perform(earlier.job, plain, undecided_ok, json_out, lambda on_event, orders: go_on(
        run, attended=attended, on_event=on_event, orders=orders), earlier.outcomes)  # fmt: skip


def _allowed(job: Job, attended: bool) -> None:
    """Cautions on a real rig, and the refusals of an unattended run."""
    from sweeprig.clock import SystemClock
    from sweeprig.conduct.unattended import refusals
    from sweeprig.launch import in_process
    from sweeprig.manual import cautions

    if not in_process(job) and job.rig.rate is None:
        click.echo("Before power is on:", err=True)
        for caution in cautions():
            click.echo(f"  - {caution}", err=True)
    refused = [] if attended else refusals(job, SystemClock().utc())
    if refused:
        raise ConfigError(
            "this job may not run unattended: " + "; ".join(refused),
            remedy="Mend the rig file, or start with --attended and stay with the rig",
            topic="safety",
        )


def time_ahead(job: Job, done: Sequence[Outcome]) -> tuple[float, float | None]:
    """(predicted seconds from now on, seconds to the deadline, None without one). What an earlier session did is not
    done again, except its opening; its deadline is known by then only on a clock that goes on meanwhile."""
    from sweeprig.holds import Purpose
    from sweeprig.job import freeze
    from sweeprig.launch import first_utc, in_process
    from sweeprig.schedule import preview as look_ahead
    from sweeprig.schedule.preview import ROUGH

    now = first_utc(job)
    plan = freeze(job, began_utc=now)
    opening = (Purpose.ZERO, Purpose.RUN_IN, Purpose.REST)
    kept = (one.ended - one.began for one in done if one.status == "done" and one.hold.purpose not in opening)
    most_s = None
    if plan.deadline_utc is not None and not (done and in_process(job)):
        most_s = plan.deadline_utc - now
    return look_ahead(plan, now, ROUGH).seconds - sum(kept), most_s


def _perform(
    job: Job,
    plain: bool,
    undecided_ok: bool,
    json_out: bool,
    work: Callable[[Any, Orders], Launched],
    done: Sequence[Outcome] = (),
) -> None:
    """Work a session with progress and Ctrl-C, then findings and report, then the answer. done: by earlier sessions."""
    from sweeprig.conduct.states import Orders, State
    from sweeprig.terminal import progress

    orders, (expected_s, most_s) = Orders(), time_ahead(job, done)
    with progress(expected_s, plain, most_s) as show, _interrupts(orders, show.say):
        launched = work(show, orders)
    from sweeprig.results import results  # only now: what it loads costs a second and has no part in a night

    found = results(launched.path)
    answer(found.findings.as_json(), launched.path, found.report_path, json_out)
    _say_what_is_no_data(launched.path)
    state, reason = launched.ending.state, launched.ending.reason
    if state is State.TRIPPED:
        click.echo(f"sweeprig: protection switched the drive off: {reason}", err=True)
        sys.exit(4)
    if state is not State.FINISHED:
        click.echo(f"sweeprig: {reason}. Go on with: sweeprig resume {launched.path}", err=True)
        sys.exit(5)
    verdicts = [limit["verdict"] for limit in found.findings.as_json()["limits"]]
    if "fail" in verdicts or ("not_decided" in verdicts and not undecided_ok):
        sys.exit(1)


def _say_what_is_no_data(path: Path) -> None:
    """A night may end well and yet have lost holds: that must not be found out from the report only."""
    from collections import Counter

    from sweeprig.opened import open_run

    counts = Counter(str(outcome.status) for outcome in open_run(path).outcomes)
    lost = {status: count for status, count in counts.items() if status != "done"}
    if lost:
        kinds = ", ".join(f"{count} {status}" for status, count in lost.items())
        total = sum(counts.values())
        click.echo(f"sweeprig: {kinds} of {total} holds: no data. The report lists each with its cause", err=True)


@contextmanager
def _interrupts(orders: Orders, say: Callable[[str], None]) -> Iterator[None]:
    """Ctrl-C is an order while a run lasts; a termination signal is the stronger one."""

    def asked(number: int, frame: object) -> None:
        del frame
        orders.interrupt()
        if number != signal.SIGINT:
            orders.finish = orders.off = True
        say(
            "switching off now"
            if orders.off
            else "finishing the hold in hand, then off; Ctrl-C again switches off at once"
        )

    kinds = [signal.SIGINT, signal.SIGTERM] + ([signal.SIGHUP] if hasattr(signal, "SIGHUP") else [])
    before = {kind: signal.signal(kind, asked) for kind in kinds}
    if hasattr(signal, "SIGTSTP"):  # Ctrl-Z would leave a rig with nobody who watches it
        before[signal.SIGTSTP] = signal.signal(
            signal.SIGTSTP, lambda *_: say("a run cannot be put to sleep: `sweeprig pause RUN` pauses it, drive off")
        )
    try:
        yield
    finally:
        for kind, handler in before.items():
            signal.signal(kind, handler)
