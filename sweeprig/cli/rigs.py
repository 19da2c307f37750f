"""Commands about the rig and the people around it: off, notice."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import click

from sweeprig.cli.base import as_json, cli, job_named
from sweeprig.errors import ConfigError, Where


@cli.command(short_help="Switch a rig off, and prove it.")
@click.argument("rig")
@click.option("--take-over", is_flag=True, help="Kill the run that holds the rig if it does not obey within 2 s.")
@as_json
def off(rig: str, take_over: bool, json_out: bool) -> None:
    """Switch drive and supply of a rig off, at once on all links, and prove it. RIG: a rig file or a job file.

    A run that holds the rig is ordered off. It has two seconds to have drive and supply confirm; the proof follows
    once the rotor is at rest.
    """
    from sweeprig.clock import SystemClock
    from sweeprig.conduct.off import off_or_order
    from sweeprig.conduct.rig import RigUse
    from sweeprig.job.loader import is_rig_file, load_rig

    if Path(rig).exists() and is_rig_file(rig):
        alone, folder = load_rig(rig)
        use = RigUse(alone, alone.limits, 1.0, folder)
    else:
        use = RigUse.of_job(job_named(rig))
    if all(instrument.in_process for instrument in use.rig.instruments.values()):
        raise ConfigError(
            "this rig is simulated inside the process that uses it; there is nothing to switch off from here",
            where=Where(rig),
            remedy="Give the file of a real rig or of a served simulated bench",
            topic="simbench",
        )
    done = off_or_order(
        use, SystemClock(use.rig.rate or 1.0), SystemClock(), take_over, lambda text: click.echo(text, err=True)
    )
    told = () if done.off is None else done.off.told
    who = None if done.holder is None else str(done.holder)
    if json_out:
        value = {"off": list(told), "took_s": done.took_s, "proved": True, "holder": who, "by_holder": done.off is None}
        click.echo(json.dumps(value))
    elif done.off is None:
        click.echo(f"off, and shown to be off, after {done.took_s:.1f} s by its holder: {who}")
    else:
        click.echo(f"{' and '.join(told)} confirmed off after {done.off.took_s:.2f} s, and shown to be off")
        if who is not None:
            click.echo(f"killed: {who}", err=True)


@cli.command(short_help="Send a test notice to the services in your notices.toml.")
@as_json
def notice(json_out: bool) -> None:
    """Send a test notice now, to the services that your notices.toml names, and say what became of it."""
    from sweeprig.conduct import notices

    result = notices.test_notice()
    click.echo(json.dumps({"ok": result.ok, "words": result.words}) if json_out else result.words)
    if not result.ok:
        sys.exit(3)
