"""Reading a run's findings.json, which may come from a stranger: bounded, plain JSON, each known key of its own kind.

What the findings mean is `characterise`'s; nothing is worked out here.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from sweeprig.logbook.run_folder import read_bounded

LARGEST_FILE = 16_000_000
"""Bytes; the findings of a dozen conditions have two hundred thousand."""

MOST_TEXT = 10_000
LARGEST_NUMBER = 1e15
MOST_DEPTH = 12
MOST_CONDITIONS = 1_000

_BOUNDS = ("two_sided", "upper", "lower")
_NUMBERS = ("value", "u", "low", "high", "coverage_probability", "coverage_factor")
_TEXT_KEYS = ("method", "reason", "assumes", "flags")
_COLUMNS = ("duty_percent", "speed_rpm", "u_rpm", "branch")
_TIMES = ("hold_time_s", "start_time_s", "rest_time_s")
_SETTINGS = ("pwm_hz", "supply_v")
_WORDS = ("direction", "load", "thermal", "freewheel")


def read_findings(path: Path) -> Mapping[str, Any]:
    """The JSON value of the findings at `path`.

    FileNotFoundError where there is none, RunError where it is no ordinary file; ValueError, with the key, where it is
    no JSON of findings: too large, nested too deeply, a number that is none, a text where a number belongs.
    """
    try:
        shown = json.loads(read_bounded(path, LARGEST_FILE), parse_constant=_no_constant)
    except RecursionError:
        raise ValueError("nested too deeply") from None
    _plain(shown, "findings", MOST_DEPTH)
    found: Mapping[str, Any] = _table(shown, "findings")
    for key in ("limits", "suspicions", "advice"):
        for entry in _list(found.get(key, []), key):
            _table(entry, key)
    _is(found.get("simulated"), bool, "simulated")
    _is(found.get("job_hash"), str, "job_hash")
    conditions = _list(found.get("conditions", []), "conditions")
    if len(conditions) > MOST_CONDITIONS:
        raise ValueError(f"conditions: more than {MOST_CONDITIONS}")
    for entry in conditions:
        _condition(_table(entry, "conditions"))
    return found


def _condition(entry: Mapping[str, Any]) -> None:
    for key in _SETTINGS:
        if not (isinstance(entry.get(key), float | int) and (key != "pwm_hz" or entry[key] > 0)):
            raise ValueError(f"{key}: a number is wanted")
    for key in _WORDS:
        _is(entry.get(key), str, key)
    for key in _TIMES:
        _optional_number(entry.get(key), key)
    for key, value in entry.items():
        if isinstance(value, dict) and "value" in value:
            _finding(value, key)
    for key, value in _table(entry.get("usable_range", {}), "usable_range").items():
        _finding(_table(value, key), key)
    curve = _table(entry.get("speed_curve", {}), "speed_curve")
    columns = {key: _list(curve.get(key, []), key) for key in _COLUMNS}
    if len({len(column) for column in columns.values()}) > 1 or set(curve) - set(_COLUMNS):
        raise ValueError(f"speed_curve: the columns {', '.join(_COLUMNS)} are wanted, equally long")
    for key, column in columns.items():
        for value in column:
            _is(value, str, key) if key == "branch" else _number(value, key)


def _finding(entry: Mapping[str, Any], name: str) -> None:
    for key in _NUMBERS:
        _optional_number(entry.get(key), f"{name}.{key}")
    for key in ("u", "coverage_factor"):
        if (entry.get(key) or 0.0) < 0.0:
            raise ValueError(f"{name}.{key}: it is negative")
    if entry.get("bound") not in (None, *_BOUNDS):
        raise ValueError(f"{name}.bound: one of {', '.join(_BOUNDS)} is wanted")
    for key in _TEXT_KEYS:
        value = entry.get(key)
        for text in value if isinstance(value, list) else [value]:
            if text is not None:
                _is(text, str, f"{name}.{key}")
    holds = entry.get("holds")
    for number in holds if isinstance(holds, list) else [holds]:
        _optional_number(number, f"{name}.holds")


def _plain(value: Any, name: str, depth: int) -> None:
    """No number beyond use, no text without end, no nesting that findings do not have."""
    if depth == 0:
        raise ValueError(f"{name}: nested too deeply")
    if isinstance(value, str) and len(value) > MOST_TEXT:
        raise ValueError(f"{name}: a text of more than {MOST_TEXT} characters")
    if isinstance(value, int | float) and not -LARGEST_NUMBER <= value <= LARGEST_NUMBER:
        raise ValueError(f"{name}: a number beyond use")
    if isinstance(value, dict):
        for key, inner in value.items():
            _plain(key, name, depth)
            _plain(inner, key[:40], depth - 1)
    if isinstance(value, list):
        for inner in value:
            _plain(inner, name, depth - 1)


def _no_constant(name: str) -> Any:
    raise ValueError(f"{name} is no number of JSON")


def _wanted(test: Callable[[Any], bool], what: str) -> Callable[[Any, str], Any]:
    def checked(value: Any, name: str) -> Any:
        if not test(value):
            raise ValueError(f"{name}: {what} is wanted")
        return value

    return checked


def _is(value: Any, kind: type, name: str) -> None:
    if not isinstance(value, kind):
        raise ValueError(f"{name}: {'true or false' if kind is bool else 'a text'} is wanted")


_table = _wanted(lambda value: isinstance(value, dict), "an object")
_list = _wanted(lambda value: isinstance(value, list), "a list")
_number = _wanted(lambda value: isinstance(value, int | float) and not isinstance(value, bool), "a number")
_optional_number = _wanted(
    lambda value: value is None or (isinstance(value, int | float) and not isinstance(value, bool)), "a number or null"
)
