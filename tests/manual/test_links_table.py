"""The table of failures in `sweeprig manual links`: each row names tests that say its key, or why none."""

from __future__ import annotations

import ast
import re
from functools import cache
from pathlib import Path

import pytest

from sweeprig import manual

TESTS = Path(__file__).parents[1]
UNTESTED = ("not tested without hardware", "with the VISA link")
ROWS_OF = {"A": 24, "B": 13, "C": 17, "D": 7}
"""Rows of each table: a way of failing is never dropped silently."""

_ROW = re.compile(r"^\| ([A-D]\d+) \| (.+) \| (.+) \| (.+) \|$", re.M)
_KEYS = re.compile(r"^Rows? ((?:[A-D]\d+(?:, | and )?)+):")


def table() -> dict[str, str]:
    """Key → the last column."""
    rows = _ROW.findall(manual.text("links"))
    found = {key: shown for key, _, _, shown in rows}
    assert len(found) == len(rows)
    return found


ROWS = table()


@cache
def keys_of_tests(file: Path) -> dict[str, set[str]]:
    """Test function → the keys that its docstring begins with."""
    found = {}
    for node in ast.walk(ast.parse(file.read_text("utf-8"))):
        if isinstance(node, ast.FunctionDef) and node.name.startswith("test"):
            said = _KEYS.match(ast.get_docstring(node) or "")
            found[node.name] = set(re.findall(r"[A-D]\d+", said.group(1))) if said else set()
    return found


def test_every_way_of_failing_has_its_row() -> None:
    """The keys of each table run from 1 without a gap."""
    assert list(ROWS) == [f"{letter}{number}" for letter, most in ROWS_OF.items() for number in range(1, most + 1)]


@pytest.mark.parametrize("key", ROWS)
def test_a_row_names_tests_that_say_its_key(key: str) -> None:
    """Each test named is a function of its file whose docstring begins with the key; or the row says why none."""
    named = re.findall(r"`([^`]+)::([^`]+)`", ROWS[key])
    assert (ROWS[key] in UNTESTED) == (not named)
    for file, name in named:
        assert key in keys_of_tests(TESTS / file)[name]


def test_no_test_names_a_row_that_is_not_tested() -> None:
    """Each key in a docstring of a test has a row, and the row is not one of those without a test."""
    for file in TESTS.rglob("test_*.py"):
        for name, keys in keys_of_tests(file).items():
            assert all(ROWS.get(key, "with the VISA link") not in UNTESTED for key in keys), f"{file.name}::{name}"
