"""The public names: listed, real, few, and loaded only when used."""

from __future__ import annotations

import subprocess
import sys

import sweeprig


def test_every_public_name_is_there() -> None:
    """Each listed name can be had, and belongs to sweeprig."""
    for name in sweeprig.__all__:
        value = getattr(sweeprig, name)
        assert getattr(value, "__module__", "sweeprig").startswith("sweeprig")


def test_the_list_is_short_and_sorted() -> None:
    """About twenty names."""
    assert sorted(sweeprig.__all__) == list(sweeprig.__all__)
    assert set(sweeprig.__all__) == set(sweeprig._HOME)
    assert len(sweeprig.__all__) <= 25


def test_importing_loads_nothing_heavy() -> None:
    """`import sweeprig`, the command line and the pytest plugin load nothing heavy."""
    code = (
        "import sys, sweeprig, sweeprig.cli, sweeprig.testing\n"
        "print([m for m in ('numpy', 'pandas', 'scipy', 'pydantic', 'matplotlib', 'serial') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_unknown_names_are_attribute_errors() -> None:
    """Asking for what is not there is the ordinary error."""
    assert not hasattr(sweeprig, "nonsense")
