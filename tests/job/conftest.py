"""A copy of the shipped configs to spoil, and the error that loading it then gives."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import load, shipped

Spoil = Callable[[str, str, str], None]
Refusal = Callable[[], ConfigError]


@pytest.fixture
def configs(tmp_path: Path) -> Path:
    """The demo job with its rig, motor and sweep, to be changed freely."""
    source = shipped("demo").parent
    for part in ("demo.toml", "rigs/shelter-bench.toml", "motors/aspirator-fan.toml", "sweeps/evening.toml"):
        (tmp_path / part).parent.mkdir(exist_ok=True)
        shutil.copy(source / part, tmp_path / part)
    return tmp_path


@pytest.fixture
def spoil(configs: Path) -> Spoil:
    """`spoil(file, old, new)`: replace the one place where `old` stands."""

    def change(file: str, old: str, new: str) -> None:
        text = (configs / file).read_text(encoding="utf-8")
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in {file}"
        (configs / file).write_text(text.replace(old, new), encoding="utf-8", newline="\n")

    return change


@pytest.fixture
def refusal(configs: Path) -> Refusal:
    """`refusal()`: load the demo job, which must be refused; the error."""

    def attempt() -> ConfigError:
        with pytest.raises(ConfigError) as caught:
            load(configs / "demo.toml")
        return caught.value

    return attempt
