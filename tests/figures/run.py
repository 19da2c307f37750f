"""Benchmarks: each figure is one JSON object a line. Never a test, never fails a build.

ONLY=night python tests/figures/run.py        one group
FULL=1 python tests/figures/run.py            the long forms
"""

from __future__ import annotations

import json
import math
import os
import time
from collections.abc import Iterator
from importlib import import_module
from typing import Any

GROUPS = (
    "startup", "search", "settle", "conduct", "night", "findings",
    "physics", "truth", "unattended", "fuzz", "serve",
)  # fmt: skip
MORE = {
    "unattended": ("fault_nights", "crash_points", "stress"),
    "findings": ("findings_covered", "kick"),
    "search": ("long_run",),
    "night": ("foretold", "drift"),
}
"""Modules of a group beside the one of its name."""


def measured(name: str, full: bool) -> Iterator[dict[str, Any]]:
    """The figures of a group: modules of this folder, which is on the path because this script lies in it."""
    for module in (name, *MORE.get(name, ())):
        began = time.perf_counter()
        for figure in import_module(module).figures(full):
            figure["seconds"] = round(time.perf_counter() - began, 1)
            yield figure
            began = time.perf_counter()


def main() -> None:
    only = os.environ.get("ONLY", "").strip().replace("-", "")
    full = os.environ.get("FULL", "").strip() == "1"
    for name in GROUPS:
        if only in ("", name):
            for figure in measured(name, full):
                print(json.dumps(_sound(figure), allow_nan=False), flush=True)


def _sound(figure: dict[str, Any]) -> dict[str, Any]:
    """JSON knows no infinity: a value that could not be had is null, and not met."""
    value = figure["value"]
    odd = isinstance(value, float) and not math.isfinite(value)
    return {**figure, "value": None, "meets": False} if odd else figure


if __name__ == "__main__":
    main()
