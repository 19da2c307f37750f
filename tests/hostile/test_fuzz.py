"""Every reader of bytes or texts that we did not write, fed seeded inputs: see fuzzing.py for inputs and checks."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings

from sweeprig.quantities import parse_number, parse_quantity

MOST = 300


def _fuzzing() -> Any:
    """The module beside this one: the folder is no package, so that it is loaded by its path."""
    spec = importlib.util.spec_from_file_location("hostile_fuzzing", Path(__file__).with_name("fuzzing.py"))
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


READERS = _fuzzing().READERS


@pytest.mark.parametrize("name", READERS)
def test_any_input_is_right_or_a_typed_error(name: str) -> None:
    """300 seeded inputs for each of 16 readers, 4,800 in all: a right result or an error of ours, never another."""
    inputs, check = READERS[name]

    @settings(max_examples=MOST, derandomize=True, deadline=None, suppress_health_check=list(HealthCheck))
    @given(inputs)
    def each(value: Any) -> None:
        check(value)

    each()


@pytest.mark.timeout(20)
@pytest.mark.parametrize(
    "text", ["1" * 200_000 + "!", "1" * 100_000 + " " * 100_000 + "!", "1." * 50_000, "9" * 5_000 + "k"]
)
def test_a_long_text_is_refused_as_soon_as_a_short_one(text: str) -> None:
    """A hundred thousand digits and blanks end in a ValueError of one line, long before the test's time is up."""
    for read in (lambda: parse_quantity(text, "V"), lambda: parse_number(text)):
        with pytest.raises(ValueError, match=r"is not a number|has the unit") as caught:
            read()
        assert len(str(caught.value)) < 300
