"""The user's own file `notices.toml`: to which services notices go, and when. Read strictly, once, before the start.

Its addresses carry passwords. No error, no text and no representation made here shows a value of it that could be one.
"""

from __future__ import annotations

import os
import re
import stat
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Literal

import click
from pydantic import BeforeValidator, Field, ValidationError

from sweeprig.errors import ConfigError, Where
from sweeprig.job.amounts import Amount, Strict, problem
from sweeprig.job.problems import Sources, problems
from sweeprig.job.toml_source import read

VARIABLE = "SWEEPRIG_NOTICES"
"""Environment variable that names another file."""
TOPIC = "unattended"

Kind = Literal["end", "trip", "park", "give_up", "no_progress"]
KINDS: tuple[Kind, ...] = ("end", "trip", "park", "give_up", "no_progress")

_MOST_ADDRESSES, _MOST_ADDRESS = 20, 1000
_ADDRESS = re.compile(r"[A-Za-z][A-Za-z0-9+.-]*://\S+")
_EXAMPLE = 'Write for example to = ["json://localhost:8080"]'
_SHOWN = ("when", "no_progress")
"""Keys whose values may stand in an error, if they do not look like an address."""


def _read_address(value: object) -> str:
    allowed = f"service://…, without blanks, up to {_MOST_ADDRESS} characters"
    if not isinstance(value, str) or len(value) > _MOST_ADDRESS or not _ADDRESS.fullmatch(value):
        raise problem("this is no address of a service", None, allowed, _EXAMPLE)
    return value


class Notices(Strict):
    """The whole file. `to` never shows in a representation."""

    to: Annotated[
        tuple[Annotated[str, BeforeValidator(_read_address)], ...],
        Field(min_length=1, max_length=_MOST_ADDRESSES, strict=False, repr=False),
    ]
    when: Annotated[tuple[Kind, ...], Field(strict=False)] = KINDS
    no_progress: Annotated[float, Amount("s", 60.0, 86_400.0, "Shorter than a hold it would never be silent")] = 1800.0


def place(environment: Mapping[str, str] = os.environ) -> tuple[Path, bool]:
    """Where the file is looked for, and whether the environment named it."""
    named = environment.get(VARIABLE, "")
    return (Path(named), True) if named else (Path(click.get_app_dir("sweeprig")) / "notices.toml", False)


def read_notices(path: Path | None = None, environment: Mapping[str, str] = os.environ) -> Notices | None:
    """The file at `path`, or at its usual place; None where none is there and nobody named one.

    ConfigError with file, line and key for whatever is wrong in it, without the value where that could be a secret.
    """
    named = path is not None
    if path is None:
        path, named = place(environment)
    if not named and not path.exists():
        return None
    try:
        source = read(path, None if path.is_file() else Where(VARIABLE if environment.get(VARIABLE) else str(path)))
    except ConfigError as error:
        raise _without_secrets(error, path) from None
    try:
        return Notices.model_validate(source.data)
    except ValidationError as error:
        found = [_without_secrets(each, path) for each in problems(error, Sources(source), Notices)]
    raise found[0]


def open_to_others(path: Path) -> bool:
    """Whether other users of the machine can read the file (not told on Windows)."""
    try:
        return os.name == "posix" and bool(path.stat().st_mode & (stat.S_IRGRP | stat.S_IROTH))
    except OSError:
        return False


def _without_secrets(error: ConfigError, path: Path) -> ConfigError:
    """The same error; what may be an address, or the beginning of one, is left out of value, remedy and key."""
    where, value, remedy = error.where, error.value, error.remedy
    key = (where.key or "").split(",")[0] if where else ""
    if value not in (None, str(path)) and (key not in _SHOWN or "://" in str(value)):
        value = None
    if "://" in (remedy or ""):
        remedy = _EXAMPLE
    if where is not None and "://" in key:
        where = Where(where.file, where.line)
    return ConfigError(error.what, value=value, allowed=error.allowed, where=where, remedy=remedy, topic=TOPIC)
