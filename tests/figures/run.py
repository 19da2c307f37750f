"""Benchmarks: each figure is one JSON object a line. Never a test, never fails a build.

ONLY=night python tests/figures/run.py        one group
FULL=1 python tests/figures/run.py            the long forms
"""

from __future__ import annotations

import importlib.util
import json
import os
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType
from typing import Any

GROUPS = ("startup", "search", "conduct", "night", "findings")


def group(name: str) -> ModuleType:
    """The benchmark module of a group, by its file: this folder is no package."""
    spec = importlib.util.spec_from_file_location(f"figures_{name}", Path(__file__).with_name(f"{name}.py"))
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def measured(name: str, full: bool) -> Iterator[dict[str, Any]]:
    began = time.perf_counter()
    for figure in group(name).figures(full):
        figure["seconds"] = round(time.perf_counter() - began, 1)
        yield figure
        began = time.perf_counter()


def main() -> None:
    only = os.environ.get("ONLY", "").strip().replace("-", "")
    full = os.environ.get("FULL", "").strip() == "1"
    for name in GROUPS:
        if only in ("", name):
            for figure in measured(name, full):
                print(json.dumps(figure), flush=True)


if __name__ == "__main__":
    main()
