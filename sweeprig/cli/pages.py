"""The manual in the terminal."""

from __future__ import annotations

import json

import click

from sweeprig.cli.base import as_json, cli


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
