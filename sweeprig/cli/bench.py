"""Commands of the simulated bench: serve, truth."""

from __future__ import annotations

import json
from contextlib import suppress
from pathlib import Path

import click

from sweeprig.cli.base import as_json, cli, job_named
from sweeprig.errors import ConfigError, SweeprigError, Where


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
    """Serve the job's instruments on loopback until Ctrl-C, SIGTERM or SIGHUP; exit code 0."""
    from sweeprig.simbench.serve import serve as serve_bench

    def say(text: str) -> None:
        with suppress(OSError):  # a terminal that hung up takes no words any more
            click.echo(text, err=True)

    def ready(addresses: dict[str, str]) -> None:
        for name, address in addresses.items():
            click.echo(f"{name}  {address}")
        say("serving, SIMULATED; Ctrl-C ends")

    served = job_named(job)
    try:
        why = serve_bench(served, rate, write, ready=ready, record=record, signals=True)
    except OSError as error:
        if error.filename is None or isinstance(error, SweeprigError):
            raise
        where, remedy = Where(str(error.filename)), "Name a file in a folder that is there and in which you may write"
        raise ConfigError("the file cannot be written", value=error.strerror, where=where, remedy=remedy) from error
    say(f"ended: {why}; everything is closed")


@simbench.command(short_help="What is true of the simulated motor.")
@click.argument("job")
@click.option("--rare", is_flag=True, help="Also stops and starts too rare to count; takes several minutes.")
@as_json
def truth(job: str, rare: bool, json_out: bool) -> None:
    """The simulated motor's parameters and what is true of it, found by brute force: for comparison with findings."""
    from sweeprig.simbench.truth_of_job import RARE_TRIALS, truth_of
    from sweeprig.terminal import truth_text, width_of_output

    asked = job_named(job)
    click.echo("trying the simulated motor some thousand times at each threshold; this takes a while …", err=True)
    value = truth_of(asked, rare_trials=RARE_TRIALS if rare else 0)
    click.echo(json.dumps(value) if json_out else truth_text(value, width_of_output()))
