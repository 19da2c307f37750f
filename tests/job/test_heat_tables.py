"""Heat tables of fans with electronics: what they take, and what is refused with place, value and range."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import document, load, shipped

BODIES = "winding_case_k_per_w = 8.0\ncase_ambient_k_per_w = 12.0\nwinding_j_per_k = 1.5\ncase_j_per_k = 20.0\n"
FILES = {"electronic": "aspirator-fan-electronic.toml", "four-wire": "aspirator-fan-4wire.toml"}


def with_table(folder: Path, name: str, lines: str) -> Path:
    """A copy of the shipped job whose motor has this heat table."""
    shutil.copytree(shipped(name).parent, folder)
    motor = folder / "motors" / FILES[name]
    motor.write_text(motor.read_text(encoding="utf-8") + f"\n[simulated.heat]\n{lines}", encoding="utf-8")
    return folder / shipped(name).name


@pytest.mark.parametrize("name", FILES)
def test_a_heat_table_is_taken_and_kept(tmp_path: Path, name: str) -> None:
    """A fan's heat table is read, and stands in the whole job's text, from which it is read again."""
    job = load(with_table(tmp_path / "configs", name, BODIES))
    again = tmp_path / "whole.toml"
    again.write_text(document(job), encoding="utf-8")
    for one in (job, load(again)):
        heat = one.motor.simulated.heat  # type: ignore[union-attr]  # these kinds have one
        assert heat is not None
        assert (heat.winding_j_per_k, heat.ambient_degc) == (1.5, 20.0)


@pytest.mark.parametrize(
    ("name", "lines", "says"),
    [
        ("electronic", BODIES.replace("20.0", "0.0"), ["case_j_per_k", "0", "allowed", "takes up heat"]),
        ("electronic", BODIES + "magnet_percent_per_k = 2.0\n", ["magnet_percent_per_k", "2.0", "-1 to 0.5"]),
        ("four-wire", BODIES + "loss_percent = 140.0\n", ["loss_percent", "140", "0 to 100", "warms the winding"]),
        ("four-wire", BODIES + "magnet_percent_per_k = -0.2\n", ["unknown key", "magnet_percent", "loss_percent"]),
        ("electronic", BODIES + "loss_percent = 40.0\n", ["unknown key", "loss_percent"]),
    ],
)  # fmt: skip
def test_bad_heat_tables_are_refused(tmp_path: Path, name: str, lines: str, says: list[str]) -> None:
    """A body without capacity, a magnet that gains, a loss above all, a key of the other kind: with file and line."""
    path = with_table(tmp_path / "configs", name, lines)
    with pytest.raises(ConfigError) as refused:
        load(path)
    text = str(refused.value)
    for part in [*says, f"{FILES[name]}:"]:
        assert part in text
