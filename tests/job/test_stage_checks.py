"""The simulated stage belongs to a rig with a power switch; what else is refused of it stands in refusals.toml."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import load, shipped


@pytest.mark.parametrize("table", ["simulated_stage", "simulated_source"])
def test_no_stage_outside_a_fan_with_a_control_input(tmp_path: Path, table: str) -> None:
    """Either table in the rig file of a fan with a control input is refused, with its place and the remedy."""
    job = shipped("four-wire")
    folder = tmp_path / "configs"
    shutil.copytree(job.parent, folder)
    rig = folder / "rigs" / "shelter-bench-4wire.toml"
    rig.write_text(rig.read_text(encoding="utf-8") + f"\n[{table}]\n", encoding="utf-8")
    with pytest.raises(ConfigError) as refused:
        load(folder / job.name)
    text = str(refused.value)
    assert "has its power stage inside" in text
    assert "shelter-bench-4wire.toml" in text
    assert f"Remove [{table}]" in text


def test_no_load_capacitor_at_another_kind_of_motor(tmp_path: Path) -> None:
    """Beside a simulated motor that is not brushed a load capacitor is refused, with its place and the remedy."""
    job = shipped("stirrer")
    folder = tmp_path / "configs"
    shutil.copytree(job.parent, folder)
    rig = folder / "rigs" / "shelter-bench.toml"
    rig.write_text(
        rig.read_text(encoding="utf-8") + "\n[simulated_stage]\nload_capacitor_farad = 1e-6\n", encoding="utf-8"
    )
    with pytest.raises(ConfigError) as refused:
        load(folder / job.name)
    text = str(refused.value)
    assert "of kind geared" in text
    assert "load_capacitor_farad" in text
    assert "name a motor of kind brushed" in text
