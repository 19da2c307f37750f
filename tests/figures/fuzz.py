"""Fuzzing: how many seeded inputs each reader of foreign bytes and texts was fed, and what escaped besides our errors.

The inputs and the checks are those of tests/hostile/fuzzing.py; here there are more of them.
"""

from __future__ import annotations

import importlib.util
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from hypothesis import HealthCheck, given, seed, settings


def figures(full: bool) -> Iterator[dict[str, Any]]:
    most = 50_000 if full else 3_000
    escaped, fed = [], 0
    for name, (inputs, check) in _readers().items():
        count, error = run(inputs, check, most)
        fed += count
        if error is not None:
            escaped.append(f"{name}: {type(error).__name__}")
    figure = {"figure": "fuzz_escapes", "value": len(escaped), "target": "0", "meets": not escaped, "n": fed}
    yield figure | ({"escaped": escaped} if escaped else {})


def run(inputs: Any, check: Callable[[Any], None], most: int) -> tuple[int, BaseException | None]:
    """How many inputs were fed, and what came out first that was no error of ours."""
    fed = 0

    @seed(20_260_302)
    @settings(max_examples=most, deadline=None, database=None, suppress_health_check=list(HealthCheck))
    @given(inputs)
    def each(value: Any) -> None:
        nonlocal fed
        fed += 1
        check(value)

    try:
        each()
    except Exception as error:  # noqa: BLE001 - whatever escapes is the figure
        return fed, error
    return fed, None


def _readers() -> Any:
    path = Path(__file__).parents[1] / "hostile" / "fuzzing.py"
    spec = importlib.util.spec_from_file_location("hostile_fuzzing", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module.READERS
