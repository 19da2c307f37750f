"""Every refusal of a job file: where it points, what it shows, what it allows and what it says to do.

The spoilt files stand in refusals.toml. Line numbers are found in the spoilt file by an independent search for a text.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from sweeprig.errors import ConfigError


@dataclass(frozen=True)
class Case:
    """One spoilt place.

    old, new   the change in `file`
    at         text whose line the error must name, in `points_to` (the spoilt file, where that is empty); "" where
               nothing is written that it could name
    value      how the value begins that the error shows; None: it shows none
    says       parts of the text: what is wrong, the allowed range, the remedy
    other      text whose line in `other_file` the error must name besides
    """

    name: str
    file: str
    old: str
    new: str
    key: str
    says: list[str]
    at: str = ""
    value: str | None = None
    kind: str = "ConfigError"
    points_to: str = ""
    other: str = ""
    other_file: str = ""


def read_cases() -> list[Case]:
    table: dict[str, list[dict[str, Any]]] = tomllib.loads(
        Path(__file__).with_name("refusals.toml").read_text(encoding="utf-8")
    )
    return [Case(**entry) for entry in table["case"]]


CASES = read_cases()


def line_of(path: Path, text: str) -> int | None:
    """The first line (from 1) that has `text`; None for no text."""
    lines = path.read_text(encoding="utf-8").splitlines()
    return next(number for number, line in enumerate(lines, 1) if text in line) if text else None


@pytest.mark.parametrize("case", [pytest.param(case, id=case.name) for case in CASES])
def test_refusal_says_where_what_why_and_how(
    case: Case, configs: Path, spoil: Callable[[str, str, str], None], refusal: Callable[[], ConfigError]
) -> None:
    """A spoilt job is refused with file, line, key, value, allowed range and remedy, in the text and as fields."""
    spoil(case.file, case.old, case.new)
    error, file = refusal(), configs / (case.points_to or case.file)
    assert type(error).__name__ == case.kind
    assert error.where is not None
    assert (error.where.file, error.where.line, error.where.key) == (str(file), line_of(file, case.at), case.key)
    assert (error.value or "").startswith(case.value or "")
    assert (error.value is None) == (case.value is None)
    text = str(error)
    assert [part for part in case.says if part not in text] == []
    assert text.startswith(str(error.where))
    other = configs / case.other_file
    assert case.other == "" or f"{other}:{line_of(other, case.other)}" in text
    assert error.remedy
    assert "\n" not in text
    assert error.topic in ("job-files", "rig", "safety", "simbench")


def test_every_refusal_has_its_own_name() -> None:
    """No case stands twice in the table, and none expects nothing."""
    assert len({case.name for case in CASES}) == len(CASES)
    assert [case.name for case in CASES if not case.says] == []
