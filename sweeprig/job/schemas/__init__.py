"""JSON Schemas of the four kinds of config file, made from the models, so that editors can check while one types.

`python -m sweeprig.job.schemas` writes the files beside this one. Checks across tables are not in a schema.
"""

from __future__ import annotations

import json
from pathlib import Path

from pydantic import BaseModel

from sweeprig.job.amounts import exact_text
from sweeprig.job.models import Job
from sweeprig.job.motor_models import Motor
from sweeprig.job.rig_models import Rig
from sweeprig.job.sweep_models import Sweep

FOLDER = Path(__file__).parent
_MODELS: dict[str, type[BaseModel]] = {"rig": Rig, "motor": Motor, "sweep": Sweep, "job": Job}


def generate() -> dict[str, str]:
    """File name → text of each schema."""
    return {f"{kind}.schema.json": _text(kind, model) for kind, model in _MODELS.items()}


def _text(kind: str, model: type[BaseModel]) -> str:
    schema = model.model_json_schema(mode="validation")
    if kind == "job":
        for part in ("rig", "motor", "sweep"):
            path = {"type": "string", "minLength": 1, "description": f"path of a {part} file, relative to this file"}
            schema["properties"][part] = {"anyOf": [path, schema["properties"][part]]}
    head = {"$schema": "https://json-schema.org/draft/2020-12/schema"}
    return json.dumps(_tidy(head | schema), indent=1, ensure_ascii=False, sort_keys=True) + "\n"


def _tidy(node: object) -> object:
    """Without `null`, which TOML does not have, and titles, which only repeat the key; defaults as they are written."""
    if isinstance(node, list):
        return [_tidy(entry) for entry in node]
    if not isinstance(node, dict):
        return node
    if {"type": "null"} in node.get("anyOf", ()):
        arms = [arm for arm in node["anyOf"] if arm != {"type": "null"}]
        rest = {key: value for key, value in node.items() if key != "anyOf" and value is not None}
        node = rest | (arms[0] if len(arms) == 1 else {"anyOf": arms})
    if "unit" in node and isinstance(node.get("default"), float):
        node = node | {"default": exact_text(node["default"], node["unit"])}
    tidy = {key: _tidy(value) for key, value in node.items() if key not in ("title", "properties")}
    if "properties" in node:  # a property may itself be called `title`
        tidy["properties"] = {key: _tidy(value) for key, value in node["properties"].items()}
    return tidy
