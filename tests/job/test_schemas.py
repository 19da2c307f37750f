"""The shipped JSON Schemas: up to date, valid themselves, taking every shipped file and refusing spoilt ones."""

from __future__ import annotations

import datetime as dt
import json
import tomllib
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from sweeprig.job import document, load, shipped
from sweeprig.job.schemas import FOLDER, generate
from sweeprig.job.shipped import shipped_names

CONFIGS = shipped("demo").parent
KINDS = {"rigs": "rig", "motors": "motor", "sweeps": "sweep", "": "job"}
FILES = [
    pytest.param(path, kind, id=f"{folder}/{path.name}")
    for folder, kind in KINDS.items()
    for path in sorted((CONFIGS / folder).glob("*.toml"))
]


def validator(kind: str) -> jsonschema.Draft202012Validator:
    schema = json.loads((FOLDER / f"{kind}.schema.json").read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema, format_checker=jsonschema.FormatChecker())


def as_json(node: Any) -> Any:
    """TOML data as JSON sees it: dates are texts."""
    if isinstance(node, dict):
        return {key: as_json(value) for key, value in node.items()}
    if isinstance(node, list):
        return [as_json(value) for value in node]
    return node.isoformat() if isinstance(node, dt.date) else node


def faults(kind: str, text: str) -> list[str]:
    return [error.json_path for error in validator(kind).iter_errors(as_json(tomllib.loads(text)))]


@pytest.mark.parametrize("name", sorted(generate()))
def test_shipped_schema_is_what_the_models_give(name: str) -> None:
    """After a change of the models, `python -m sweeprig.job.schemas` writes these files anew."""
    assert (FOLDER / name).read_text(encoding="utf-8") == generate()[name]


@pytest.mark.parametrize(("path", "kind"), FILES)
def test_shipped_file_is_valid(path: Path, kind: str) -> None:
    """An independent validator takes every config that ships."""
    assert faults(kind, path.read_text(encoding="utf-8")) == []


@pytest.mark.parametrize("name", shipped_names())
def test_frozen_text_is_valid(name: str) -> None:
    """So does it the frozen form, with rig, motor and sweep as tables."""
    assert faults("job", document(load(shipped(name)))) == []


@pytest.mark.parametrize(
    ("kind", "file", "old", "new", "at"),
    [
        ("sweep", "sweeps/evening.toml", '"300 Hz"', '"300 V"', "$.pwm[0]"),
        ("sweep", "sweeps/evening.toml", '"4 min"', "240", "$.run_in.time"),
        ("sweep", "sweeps/evening.toml", "points = 12", "points = 2", "$.curve.points"),
        ("sweep", "sweeps/evening.toml", "hold_time", "hold_tme", "$.stall"),
        ("motor", "motors/aspirator-fan.toml", '"brushed"', '"brush"', "$.kind"),
        ("rig", "rigs/shelter-bench.toml", "earthed = true", "earthed = 1", "$.instruments.scope.earthed"),
        ("job", "demo.toml", "title", "titel", "$"),
    ],
)
def test_spoilt_file_is_not_valid(kind: str, file: str, old: str, new: str, at: str) -> None:
    """An editor with the schema marks a wrong unit, a bare number, a count, a key, a word, a kind of value."""
    text = (CONFIGS / file).read_text(encoding="utf-8")
    assert at in faults(kind, text.replace(old, new, 1))


def test_defaults_in_schemas_fit_their_own_key() -> None:
    """A default that an editor fills in is valid where it stands."""
    schemas = [json.loads(text) for text in generate().values()]
    nodes = [node for schema in schemas for node in walk(schema) if "default" in node and "$ref" not in node]
    assert len(nodes) > 10
    assert [node for node in nodes if not jsonschema.Draft202012Validator(node).is_valid(node["default"])] == []


def walk(node: Any) -> list[dict[str, Any]]:
    inner = list(node.values()) if isinstance(node, dict) else node if isinstance(node, list) else []
    own = [node] if isinstance(node, dict) else []
    return own + [found for entry in inner for found in walk(entry)]
