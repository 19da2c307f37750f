"""Commands that take a run: status, what people ask of a running one, fit, report, export."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

import click

from sweeprig.cli.base import answer, as_json, cli, run_argument
from sweeprig.errors import RunError, Where

if TYPE_CHECKING:
    from sweeprig.opened import Run


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


@cli.command(short_help="Tell a waiting run that a person has done what it asked for.")
@run_argument
@as_json
def ready(run: Path, json_out: bool) -> None:
    """Tell a waiting run that a person has done what it asked for, or end a pause: the sweep goes on."""
    _request(run, "ready", json_out)


@cli.command(short_help="Let a run pause after the hold in hand, drive off.")
@run_argument
@as_json
def pause(run: Path, json_out: bool) -> None:
    """Let a run pause after the hold in hand, drive and supply off, until `sweeprig ready RUN`."""
    _request(run, "pause", json_out)


@cli.command(short_help="Let a run stop after the hold in hand.")
@run_argument
@as_json
def stop(run: Path, json_out: bool) -> None:
    """Let a run stop after the hold in hand, drive and supply off; `sweeprig resume RUN` goes on."""
    _request(run, "stop", json_out)


def _request(run: Path, kind: str, json_out: bool) -> None:
    from sweeprig.conduct.requests import ask
    from sweeprig.opened import open_run

    opened = open_run(run)
    if not opened.status()["working"]:
        raise RunError(
            "no process works on this run, so nobody would hear it",
            where=Where(str(opened.path)),
            remedy=f"Go on with: sweeprig resume {opened.path}",
            topic="unattended",
        )
    ask(opened.path, kind)
    said = f"asked: {kind}; `sweeprig status {opened.path}` shows what comes of it"
    click.echo(json.dumps({"asked": kind, "run": str(opened.path)}) if json_out else said)


@cli.command(short_help="Work the findings out again.")
@run_argument
@as_json
def fit(run: Path, json_out: bool) -> None:
    """Work the findings out again from the logbook and write findings.json."""
    from sweeprig.results import fit as work_out

    done = work_out(run)
    answer(done.findings.as_json(), run, None, json_out)


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
