"""Nothing is missing in the manual: every config key, command, option, exit code, error, finding and topic."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from types import UnionType
from typing import Any, Union, get_args, get_origin

import click
import pytest
from pydantic import BaseModel

import sweeprig
from sweeprig import errors, manual
from sweeprig.cli import cli
from sweeprig.conduct.bounds import TABLE
from sweeprig.holds import Approach, Purpose, Status, Verdict
from sweeprig.job import Job
from sweeprig.report.catalogue import MEANINGS
from sweeprig.roles import ACTUATORS, SENSORS

ROOT = Path(sweeprig.__file__).parent


def models_in(annotation: Any) -> Iterator[type[BaseModel]]:
    """The config models that an annotation mentions, at any depth."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    elif get_origin(annotation) in (Union, UnionType) or get_args(annotation):
        for part in get_args(annotation):
            yield from models_in(part)


def reachable(model: type[BaseModel], seen: set[type[BaseModel]]) -> set[type[BaseModel]]:
    """The model and all models below it."""
    if model not in seen:
        seen.add(model)
        for field in model.model_fields.values():
            for inner in models_in(field.annotation):
                reachable(inner, seen)
    return seen


MODELS = sorted(reachable(Job, set()), key=lambda model: model.__name__)
KEYS = [(model.__name__, key) for model in MODELS for key in model.model_fields]


def commands(group: click.Group, prefix: str = "") -> Iterator[tuple[str, click.Command]]:
    for name, command in group.commands.items():
        if isinstance(command, click.Group):
            yield from commands(command, f"{prefix}{name} ")
        else:
            yield f"{prefix}{name}", command


COMMANDS = dict(commands(cli))
LINES = {
    name: line for name in COMMANDS for line in manual.text("exit-codes").splitlines()
    if line.startswith((f"| `sweeprig {name} ", f"| `sweeprig {name}`"))
}  # fmt: skip


def quoted(topic: str) -> set[str]:
    """Every word in code marks of a topic, and the words of indented examples."""
    text = manual.text(topic)
    spans = re.findall(r"`([^`\n]+)`", text) + re.findall(r"^ {4,}(.*)$", text, re.M)
    return {word for span in spans for word in re.findall(r"--[a-z-]+|[A-Za-z_][A-Za-z0-9_]*", span)}


def test_the_models_are_found() -> None:
    """The walk over the models reaches rig, motor and sweep and their inner tables."""
    assert {"Job", "Rig", "Motor", "Sweep", "Limits", "Instrument", "SimulatedMotor"} <= {m.__name__ for m in MODELS}


@pytest.mark.parametrize(("model", "key"), KEYS)
def test_config_key_is_in_the_manual(model: str, key: str) -> None:
    """Every key of every config file stands in `job-files`, in code marks."""
    assert key in quoted("job-files"), f"{model}.{key}"


@pytest.mark.parametrize("name", COMMANDS)
def test_command_is_in_the_manual(name: str) -> None:
    """Every command stands in the table of commands."""
    assert name in LINES


@pytest.mark.parametrize(
    ("name", "option"),
    [(name, option) for name, command in COMMANDS.items() for p in command.params
     if isinstance(p, click.Option) for option in p.opts if option != "--json"],
)  # fmt: skip
def test_option_is_in_the_manual(name: str, option: str) -> None:
    """Every option stands in the line of its command; `--json` is said once for all, exceptions by name."""
    assert f"`{option}" in LINES[name]


def test_manual_promises_json_only_where_it_is() -> None:
    """A command without `--json` says so in its line, and no other does."""
    without = {name for name, command in COMMANDS.items() if not any("--json" in p.opts for p in command.params)}
    assert {name for name, line in LINES.items() if "no `--json`" in line} == without


def test_no_command_is_invented() -> None:
    """Each `sweeprig WORD` in any topic's code names a command that exists."""
    first_words = {name.split()[0] for name in COMMANDS}
    for topic in manual.topics():
        text = manual.text(topic)
        code = re.findall(r"`sweeprig ([a-z]+)", text) + re.findall(r"^ {4,}sweeprig ([a-z]+)", text, re.M)
        assert set(code) <= first_words, topic


def leaves(error: type[errors.SweeprigError]) -> Iterator[type[errors.SweeprigError]]:
    yield error
    for below in error.__subclasses__():
        if below.__module__ == "sweeprig.errors":
            yield from leaves(below)


@pytest.mark.parametrize(
    "error", [e for e in leaves(errors.SweeprigError) if e.__name__ not in ("SweeprigError", "LinkError")]
)
def test_error_stands_beside_its_exit_code(error: type[errors.SweeprigError]) -> None:
    """Each error class stands in the table, in the line of its own exit code."""
    table = manual.text("exit-codes")
    line = next(line for line in table.splitlines() if f"`{error.__name__}`" in line)
    assert line.rstrip(" |").endswith(f"| {error.exit_code}")


@pytest.mark.parametrize("error", [e.__name__ for e in leaves(errors.RigError) if not e.__subclasses__()])
def test_rig_errors_are_explained(error: str) -> None:
    """Each error of links and instruments has its line in `links`; the two families are only headings."""
    assert f"| `{error}` |" in manual.text("links")


@pytest.mark.parametrize("key", [key.removeprefix("usable_range.") for key in MEANINGS])
def test_finding_is_defined(key: str) -> None:
    """Every finding has its definition in `findings`."""
    assert key in quoted("findings")


@pytest.mark.parametrize("word", [*Purpose, *Approach, *Status, *Verdict])
def test_own_words_are_explained(word: str) -> None:
    """Every purpose, approach, status and verdict stands in `words`."""
    assert str(word) in quoted("words")


@pytest.mark.parametrize("role", [*ACTUATORS, *SENSORS])
def test_roles_are_listed(role: str) -> None:
    """Every role that a rig may offer stands in `job-files`."""
    assert role in quoted("job-files")


def test_topics_that_errors_name_exist() -> None:
    """Each topic to which an error text of any room sends people can be read."""
    sources = [path.read_text(encoding="utf-8") for path in ROOT.rglob("*.py")]
    named = {topic for source in sources for topic in re.findall(r'\btopic="([a-z-]+)"', source)}
    assert named
    assert named <= set(manual.topics()) | set(manual.ALSO)


def test_public_names_in_the_library_topic_exist() -> None:
    """Each `sweeprig.NAME` in `library` is a public name of the package or one of its rooms."""
    used = set(re.findall(r"\bsweeprig\.([A-Za-z_]+)", manual.text("library"))) - {"report"}
    assert used <= set(sweeprig.__all__)


def test_every_bound_stands_with_its_value_and_reason() -> None:
    """The page of bounds is the table of conduct, row by row, and nothing else."""
    page = manual.text("bounds")
    rows = [f"| `{name}` | {default:g} | {why} |" for name, (default, why) in TABLE.items()]
    assert [line for line in page.splitlines() if line.startswith("| `")] == rows
