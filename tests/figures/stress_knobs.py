"""Put before everything into processes under stress, as their `sitecustomize`: makes commits slow and steps UTC.

Each knob is a file in the folder STRESS_KNOBS, so that it can be turned while the process works.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.abc import MetaPathFinder
from importlib.machinery import ModuleSpec
from importlib.util import find_spec
from pathlib import Path
from typing import Any

KNOBS = os.environ.get("STRESS_KNOBS", "")


def knob(name: str) -> float:
    try:
        return float(Path(KNOBS, name).read_text("utf-8"))
    except (OSError, ValueError):
        return 0.0


def slow(logbook: Any) -> None:
    """Its commits wait, as for a disk that syncs slowly; from when to when is noted."""
    transaction = logbook._transaction

    @contextmanager
    def slowly(self: Any, *args: Any) -> Iterator[Any]:
        with transaction(self, *args) as connection:
            yield connection
            if seconds := knob("slow"):
                began = time.monotonic()
                time.sleep(seconds)
                with Path(KNOBS, "commits").open("a", encoding="utf-8") as file:
                    file.write(f"{began} {time.monotonic()}\n")

    logbook._transaction = slowly


class Finder(MetaPathFinder):
    """Slows the logbook's class as soon as its module has been imported."""

    def find_spec(self, name: str, path: object = None, target: object = None) -> ModuleSpec | None:
        del path, target
        if name != "sweeprig.logbook.logbook":
            return None
        sys.meta_path.remove(self)
        spec = find_spec(name)
        assert spec is not None
        assert spec.loader is not None
        execute = spec.loader.exec_module

        def executed(module: Any) -> None:
            execute(module)
            slow(module.Logbook)

        spec.loader.exec_module = executed  # type: ignore[method-assign]  # once, after the real one
        return spec


if KNOBS:
    real = time.time
    time.time = lambda: real() + knob("step")
    sys.meta_path.insert(0, Finder())
