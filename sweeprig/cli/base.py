"""What the commands share: the group, the ways out with their exit codes, options, how a job and an answer are shown.

Imports at the top stay light: `sweeprig --help` must not load numpy. Each command loads what it needs.
"""

from __future__ import annotations

import json
import sys
import traceback
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from sweeprig.errors import SweeprigError

if TYPE_CHECKING:
    from sweeprig.job import Job

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
        if error.run is not None:
            click.echo(f"sweeprig: nothing is lost. Go on with: sweeprig resume {error.run}", err=True)
        sys.exit(error.exit_code)
    except BrokenPipeError:
        sys.exit(0)
    except Exception:  # noqa: BLE001 - the last line of defence: our own error, its traceback kept
        traceback.print_exc()
        click.echo("sweeprig: this is a defect of sweeprig; please report the lines above", err=True)
        sys.exit(OWN_ERROR)


def job_named(given: str) -> Job:
    """A job file's path, or the name of a job that ships with sweeprig."""
    from sweeprig.job import load, shipped

    path = Path(given)
    if not path.exists() and path.name == given and not path.suffix:
        path = shipped(given)  # says which there are
    return load(path)


def answer(findings: dict[str, Any], folder: Path, report_path: Path | None, json_out: bool) -> None:
    from sweeprig.terminal import findings_text, width_of_output

    if json_out:
        written = None if report_path is None else str(report_path)
        click.echo(json.dumps({"run": str(folder), "report": written, "findings": findings}))
        return
    click.echo(findings_text(findings, width_of_output()))
    click.echo(f"\nrun     {folder}")
    if report_path is not None:
        click.echo(f"report  {report_path}")
