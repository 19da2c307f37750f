"""The command line: parse, one library call, print. Only this module and `terminal` print, only this one exits.

Imports at the top stay light: `sweeprig --help` must not load numpy. Each command loads what it needs.
"""

from __future__ import annotations

import json
import signal
import sys
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from sweeprig.errors import ConfigError, SweeprigError, Where

if TYPE_CHECKING:
    from sweeprig.conduct.states import Orders
    from sweeprig.job import Job
    from sweeprig.launch import Launched
    from sweeprig.opened import Run

OWN_ERROR = 70

as_json = click.option(
    "--json", "json_out", is_flag=True, help="Print one JSON value; all else goes to standard error."
)
run_argument = click.argument("run", type=click.Path(path_type=Path))


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="sweeprig")
def cli() -> None:
    """Find out overnight, unattended, what a small PWM-driven motor or fan can do, and how sure that is.

    A job names a rig, a motor and a sweep. `sweeprig preview demo` shows what a night would do, `sweeprig run demo`
    does it on the simulated bench. More: `sweeprig manual`.
    """


def main() -> None:
    """Entry point: every way out has one of the plan's exit codes."""
    try:
        cli.main(standalone_mode=False)
    except click.exceptions.Abort:
        sys.exit(5)
    except click.exceptions.Exit as leaving:
        sys.exit(leaving.exit_code)
    except click.ClickException as error:
        error.show()
        sys.exit(2)
    except SweeprigError as error:
        click.echo(f"sweeprig: {error}", err=True)
        sys.exit(error.exit_code)
    except BrokenPipeError:
        sys.exit(0)
    except Exception:  # noqa: BLE001 - the last line of defence: our own error, its traceback kept
        traceback.print_exc()
        click.echo("sweeprig: this is a defect of sweeprig; please report the lines above", err=True)
        sys.exit(OWN_ERROR)


# -- jobs ------------------------------------------------------------------------------------------------------------


def _job(given: str) -> Job:
    """A job file's path, or the name of a job that ships with sweeprig."""
    from sweeprig.job import load, shipped

    path = Path(given)
    if not path.exists() and path.name == given and not path.suffix:
        path = shipped(given)  # says which there are
    return load(path)


@cli.command(short_help="What a night would do; nothing is opened or moved.")
@click.argument("job")
@as_json
def preview(job: str, json_out: bool) -> None:
    """What a night would do: holds, time, what can and cannot be found with this rig, what needs a person.

    Everything is checked that can be checked with nothing connected; nothing is opened or moved.
    """
    from dataclasses import asdict

    from sweeprig.conduct.unattended import locked_rotor_sum, refusals
    from sweeprig.job import freeze
    from sweeprig.launch import check_rig, in_process
    from sweeprig.schedule import preview as look_ahead
    from sweeprig.terminal import preview_text

    checked = _job(job)
    check_rig(checked)
    night = look_ahead(freeze(checked), 0.0)
    sums, refused = locked_rotor_sum(checked), refusals(checked)
    simulated = in_process(checked) or checked.rig.rate is not None
    if json_out:
        value = {**asdict(night), "locked_rotor_seconds": sums, "refused": refused, "simulated": simulated}
        click.echo(json.dumps(value))
        return
    title = f"{checked.title}\n{checked.motor.name} on {checked.rig.name}, sweep {checked.sweep.name}"
    click.echo(preview_text(night, f"{title}{'  (SIMULATED)' if simulated else ''}", sums, refused))


@cli.command(short_help="Perform a job: sweep, findings, report.")
@click.argument("job")
@click.option("--runs", type=click.Path(path_type=Path), default=Path("runs"), show_default=True,
              help="Folder in which the run's own folder is made.")  # fmt: skip
@click.option("--attended", is_flag=True, help="A person stays with the rig.")
@click.option("--plain", is_flag=True, help="Plain lines instead of a status line.")
@click.option("--undecided-ok", is_flag=True, help="Exit 0 also when a limit is not decided.")
@as_json
def run(job: str, runs: Path, attended: bool, plain: bool, undecided_ok: bool, json_out: bool) -> None:
    """Perform a job: sweep, findings, report. Ctrl-C once finishes the hold in hand; twice switches off at once."""
    from sweeprig.launch import start

    checked = _job(job)
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

    job = open_run(run).job
    _allowed(job, attended)
    _perform(job, plain, undecided_ok, json_out, lambda on_event, orders: go_on(
        run, attended=attended, on_event=on_event, orders=orders))  # fmt: skip


def _allowed(job: Job, attended: bool) -> None:
    """Cautions on a real rig, and the refusals of an unattended run."""
    from sweeprig.conduct.unattended import refusals
    from sweeprig.launch import in_process
    from sweeprig.manual import cautions

    if not in_process(job) and job.rig.rate is None:
        click.echo("Before power is on:", err=True)
        for caution in cautions():
            click.echo(f"  - {caution}", err=True)
    refused = refusals(job)
    if refused and not attended:
        raise ConfigError(
            "this job may not run unattended: " + "; ".join(refused),
            remedy="Mend the rig file, or start with --attended and stay with the rig",
            topic="safety",
        )


def _perform(
    job: Job, plain: bool, undecided_ok: bool, json_out: bool, work: Callable[[Any, Orders], Launched]
) -> None:
    """Work a session with progress and Ctrl-C, then findings and report, then the answer."""
    from sweeprig.conduct.states import Orders, State
    from sweeprig.job import freeze
    from sweeprig.results import results
    from sweeprig.schedule import preview as look_ahead
    from sweeprig.terminal import progress

    orders = Orders()
    with progress(look_ahead(freeze(job), 0.0).seconds, plain) as show, _interrupts(orders, show.say):
        launched = work(show, orders)
    done = results(launched.path)
    _answer(done.findings.as_json(), launched.path, done.report_path, json_out)
    _say_what_is_no_data(launched.path)
    state, reason = launched.ending.state, launched.ending.reason
    if state is State.TRIPPED:
        click.echo(f"sweeprig: protection switched the drive off: {reason}", err=True)
        sys.exit(4)
    if state is not State.FINISHED:
        click.echo(f"sweeprig: {reason}. Go on with: sweeprig resume {launched.path}", err=True)
        sys.exit(5)
    verdicts = [limit["verdict"] for limit in done.findings.as_json()["limits"]]
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
    try:
        yield
    finally:
        for kind, handler in before.items():
            signal.signal(kind, handler)


def _answer(findings: dict[str, Any], folder: Path, report_path: Path | None, json_out: bool) -> None:
    from sweeprig.terminal import findings_text, width_of_output

    if json_out:
        written = None if report_path is None else str(report_path)
        click.echo(json.dumps({"run": str(folder), "report": written, "findings": findings}))
        return
    click.echo(findings_text(findings, width_of_output()))
    click.echo(f"\nrun     {folder}")
    if report_path is not None:
        click.echo(f"report  {report_path}")


# -- runs ------------------------------------------------------------------------------------------------------------


@cli.command(short_help="Where a run stands.")
@run_argument
@as_json
def status(run: Path, json_out: bool) -> None:
    """Where a run stands: sessions, holds done and discarded, the last thing that happened."""
    from sweeprig.opened import open_run
    from sweeprig.terminal import status_text

    opened = open_run(run)
    value = opened.status()
    click.echo(json.dumps(value) if json_out else status_text(value))


@cli.command(short_help="Work the findings out again.")
@run_argument
@as_json
def fit(run: Path, json_out: bool) -> None:
    """Work the findings out again from the logbook and write findings.json."""
    from sweeprig.results import fit as work_out

    done = work_out(run)
    _answer(done.findings.as_json(), run, None, json_out)


@cli.command()
@run_argument
@as_json
def report(run: Path, json_out: bool) -> None:
    """Write the report: one HTML file that prints well."""
    from sweeprig.opened import open_run
    from sweeprig.results import write_report

    written = write_report(open_run(run))
    click.echo(json.dumps({"report": str(written)}) if json_out else str(written))


@cli.command()
@run_argument
@click.option(
    "--to", "folder", type=click.Path(path_type=Path), help="Folder for the files; the run's own if left out."
)
@as_json
def export(run: Path, folder: Path | None, json_out: bool) -> None:
    """Write holds and readings as CSV, units in the header."""
    from sweeprig.logbook.export import export_csv
    from sweeprig.opened import open_run

    opened: Run = open_run(run)
    written = [str(path) for path in export_csv(opened.contents, folder or opened.path)]
    click.echo(json.dumps({"files": written}) if json_out else "\n".join(written))


@cli.command(short_help="Switch a rig off, and prove it.")
@click.argument("rig")
@as_json
def off(rig: str, json_out: bool) -> None:
    """Switch drive and supply of a rig off, at once on all links, and prove it. RIG: a rig file or a job file."""
    from sweeprig.clock import SystemClock
    from sweeprig.conduct.off import off as switch_off
    from sweeprig.conduct.rig import RigUse
    from sweeprig.job.loader import is_rig_file, load_rig

    if Path(rig).exists() and is_rig_file(rig):
        alone, folder = load_rig(rig)
        use = RigUse(alone, alone.limits, 1.0, folder)
    else:
        use = RigUse.of_job(_job(rig))
    if all(instrument.in_process for instrument in use.rig.instruments.values()):
        raise ConfigError(
            "this rig is simulated inside the process that uses it; there is nothing to switch off from here",
            where=Where(rig),
            remedy="Give the file of a real rig or of a served simulated bench",
            topic="simbench",
        )
    done = switch_off(use, SystemClock(use.rig.rate or 1.0))
    told = " and ".join(done.told)
    value = {"off": list(done.told), "took_s": done.took_s, "proved": True}
    click.echo(
        json.dumps(value) if json_out else f"{told} confirmed off after {done.took_s:.2f} s, and shown to be off"
    )


# -- the simulated bench ---------------------------------------------------------------------------------------------


@cli.group(short_help="The simulated bench: serve it, or ask what is true of it.")
def simbench() -> None:
    """The simulated bench: serve it over sockets and a serial port, or ask what is true of its motor."""


@simbench.command()
@click.argument("job")
@click.option("--rate", type=click.FloatRange(min=0, min_open=True), default=1.0, show_default=True,
              help="Bench seconds in one real second.")  # fmt: skip
@click.option(
    "--write", type=click.Path(path_type=Path), help="Write a rig file with the opened addresses and the rate."
)
@click.option("--record", type=click.Path(path_type=Path), help="Write what the drive really did, one JSON line each.")
def serve(job: str, rate: float, write: Path | None, record: Path | None) -> None:
    """Serve the job's instruments on loopback until Ctrl-C."""
    from sweeprig.simbench.serve import serve as serve_bench

    def ready(addresses: dict[str, str]) -> None:
        for name, address in addresses.items():
            click.echo(f"{name}  {address}")
        click.echo("serving, SIMULATED; Ctrl-C ends", err=True)

    served = _job(job)
    try:
        serve_bench(served, rate, write, ready=ready, record=record)
    except OSError as error:
        if error.filename is None or isinstance(error, SweeprigError):
            raise
        where, remedy = Where(str(error.filename)), "Name a file in a folder that is there and in which you may write"
        raise ConfigError("the file cannot be written", value=error.strerror, where=where, remedy=remedy) from error


@simbench.command(short_help="What is true of the simulated motor.")
@click.argument("job")
@click.option("--rare", is_flag=True, help="Also stops too rare to count, by splitting; takes several minutes.")
@as_json
def truth(job: str, rare: bool, json_out: bool) -> None:
    """The simulated motor's parameters and what is true of it, found by brute force: for comparison with findings."""
    from sweeprig.simbench.truth_of_job import RARE_TRIALS, truth_of
    from sweeprig.terminal import truth_text, width_of_output

    asked = _job(job)
    click.echo("trying the simulated motor some thousand times at each threshold; this takes a while …", err=True)
    value = truth_of(asked, rare_trials=RARE_TRIALS if rare else 0)
    click.echo(json.dumps(value) if json_out else truth_text(value, width_of_output()))


# -- the manual ------------------------------------------------------------------------------------------------------


@cli.command()
@click.argument("topic", required=False)
@as_json
def manual(topic: str | None, json_out: bool) -> None:
    """Read the manual: a TOPIC, or the list of topics."""
    from sweeprig import manual as pages
    from sweeprig.terminal import page_text

    if topic is None:
        names = pages.topics()
        click.echo(
            json.dumps(list(names))
            if json_out
            else "sweeprig manual TOPIC, with TOPIC one of:\n"
            + "\n".join(f"  {name:<12}{pages.heading(name)}" for name in names)
        )
        return
    text = pages.text(topic)
    click.echo(json.dumps({"topic": topic, "text": text}) if json_out else page_text(text))
