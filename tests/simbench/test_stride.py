"""Many cells in one go against one after the other, as written and compiled, and against the numbers of before."""

import importlib.util
import math
import random
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from sweeprig.simbench import stride
from sweeprig.simbench.compiled import Deferred, available
from sweeprig.simbench.friction import gaussian
from sweeprig.simbench.plant import CELL_S, HEAT_CELLS, Plant
from tests.simbench.test_plant import FAN, bench, read, story

needs_extra = pytest.mark.skipif(importlib.util.find_spec("numba") is None, reason="the extra `fast` is not installed")
NEVER = 10**12

EARLIER = {
    (0, 3.0): (
        35.0, 152.3709302280677, 453, 34.992026292567516, 54.2324621311378, 1.2422884658391589, 0.8110362247452743,
        420.0000000000022, 20.27871946444893, 1,
    ),
    (1, 0.3): (
        35.0, 152.97451040453262, 455, 34.99926913136037, 54.332471623105334, 1.2383834495561739, 0.8099532397460665,
        419.9019625124949, 20.224887980958982, 1,
    ),
    (2, 0.05): (
        35.0, 95.92879520482705, 192, 34.98964964903886, 25.358089079322248, 0.737408339229292, 0.38754885487283613,
        377.5255145134582, 20.06336308288666, 1,
    ),
}  # fmt: skip
"""Seed and current limit → the last reading of `story` (own earlier output, one cell after the other in methods)."""


def as_written(monkeypatch: pytest.MonkeyPatch) -> Deferred[..., Any]:
    """Strides that are never compiled, whatever ran before in this process."""
    deferred = Deferred(stride.stride, NEVER)
    monkeypatch.setattr(stride, "STRIDE", deferred)
    return deferred


def hastened(monkeypatch: pytest.MonkeyPatch) -> Deferred[..., Any]:
    """Strides that are compiled from the first on."""
    monkeypatch.delenv("SWEEPRIG_PLAIN", raising=False)
    available.cache_clear()
    deferred = Deferred(stride.stride, NEVER)
    available.cache_clear()
    deferred.hasten()
    assert deferred.quick
    monkeypatch.setattr(stride, "STRIDE", deferred)
    return deferred


def night(plant: Plant, seed: int, hours: float, longest_s: float = math.inf) -> list[tuple[float, ...]]:
    """Settings drawn by `seed` from near the stall to full speed, starts, coasting; advanced by at most `longest_s`."""
    draw = random.Random(seed)
    seen = []
    while plant.now < hours * 3600.0:
        hz, duty = draw.choice((100.0, 300.0, 1000.0, 25e3)), draw.choice((6.0, 9.0, 12.0, 30.0, 70.0, 100.0))
        plant.set_drive(hz, duty, draw.random() < 0.95)
        until = plant.now + draw.uniform(0.05, 60.0)
        while plant.now < until:
            plant.advance(min(until, plant.now + longest_s))
        seen.append((*read(plant), plant.node_volt_seconds, plant.switch_amp_seconds, float(plant.supply_limited)))
    return seen


@pytest.mark.parametrize(("seed", "limit"), EARLIER)
def test_as_before_strides(seed: int, limit: float, monkeypatch: pytest.MonkeyPatch) -> None:
    """The numbers are those of the code before there were strides (own earlier output).

    To 1e-11, which leaves room for another maths library's last bit; on one machine they are the same to the bit.
    """
    as_written(monkeypatch)
    assert story(bench(seed=seed, limit=limit), None)[-1] == pytest.approx(EARLIER[seed, limit], rel=1e-11)


@pytest.mark.parametrize("limit", [3.0, 0.35, 0.06])
@pytest.mark.parametrize("seed", range(3))
def test_strides_are_single_cells(seed: int, limit: float, monkeypatch: pytest.MonkeyPatch) -> None:
    """As written, many cells in one go are the same to the last bit as one after the other, also at the supply's limit.

    Steps of less than one cell never make a stride; one step of each setting makes the longest ones.
    """
    counted = as_written(monkeypatch)
    at_once = night(bench(seed=seed, limit=limit), seed, 0.1)
    strode = counted.asked
    single = night(bench(seed=seed, limit=limit), seed, 0.1, 0.9 * CELL_S)
    assert counted.asked == strode
    assert strode > 50
    assert at_once == single


def test_strides_with_python_s_generator_and_late_begin(monkeypatch: pytest.MonkeyPatch) -> None:
    """The same with the standard library's normals, whole numbers for settings, a seizure and a stiff spell between."""
    as_written(monkeypatch)

    def run(longest_s: float) -> list[tuple[float, ...]]:
        plant = Plant(FAN, 2.0, random.Random(5), now=7, ripple=False)
        plant.set_supply(12, 3, True)
        seen = night(plant, 5, 0.02, longest_s)
        for torque in (1e-3, math.inf, 0):
            plant.bind(torque)
            seen += night(plant, 6, plant.now / 3600.0 + 0.01, longest_s)
        return seen

    assert run(math.inf) == run(0.9 * CELL_S)


@needs_extra
@pytest.mark.parametrize(("seed", "limit"), [(1, 3.0), (2, 0.35)])
def test_a_night_compiled_and_as_written(seed: int, limit: float, monkeypatch: pytest.MonkeyPatch) -> None:
    """Two hours with stops and starts: speeds, times of edges and integrals to 1e-9; edges and stops exactly."""
    rough = replace(FAN, breakaway_friction_spread_percent=8.0)
    as_written(monkeypatch)
    plain = night(bench(rough, seed=seed, limit=limit), seed, 2.0)
    hastened(monkeypatch)
    quick = night(bench(rough, seed=seed, limit=limit), seed, 2.0)
    assert plain[-1][9] > 10
    assert len(plain) == len(quick)
    for a, b in zip(plain, quick, strict=True):
        assert (a[2], a[9]) == (b[2], b[9])
        assert a == pytest.approx(b, rel=1e-9)


@needs_extra
def test_looking_changes_nothing_compiled(monkeypatch: pytest.MonkeyPatch) -> None:
    """Compiled too, looks in between change no later reading: to 1e-9, for single cells are not compiled."""
    hastened(monkeypatch)
    looked, alone = story(bench(seed=4), random.Random(4)), story(bench(seed=4), None)
    for a, b in zip(looked, alone, strict=True):
        assert a == pytest.approx(b, rel=1e-9)


def test_a_plant_with_more_state_takes_no_strides(monkeypatch: pytest.MonkeyPatch) -> None:
    """A class that refines the plant keeps its own steps: the stride knows nothing of what it added."""
    counted = as_written(monkeypatch)

    class Refined(Plant):
        cells = 0

        def _enter_next_cell(self) -> None:
            self.cells += 1
            super()._enter_next_cell()

    plant = Refined(FAN, 2.0, np.random.default_rng(1))
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(300.0, 60.0, True)
    plant.advance(4.0 + CELL_S / 2.0)
    assert plant.cells == round(4.0 / CELL_S)
    assert counted.asked == 0


def test_most_cells_are_strides(monkeypatch: pytest.MonkeyPatch) -> None:
    """In steady running all cells but the one at each renewal of the heat are passed in strides."""
    counted = as_written(monkeypatch)
    plant = bench(seed=3)
    plant.set_drive(300.0, 60.0, True)
    plant.advance(10.0)
    before = counted.asked
    plant.advance(110.0)
    share = (counted.asked - before) / (100.0 / CELL_S)
    assert share == pytest.approx(1.0 - 1.0 / HEAT_CELLS, abs=0.01)


def test_normals_are_the_standard_library_s() -> None:
    """Drawn in pairs they are those that `gauss` gives one by one, to the bit, also after one drawn outside."""
    for before in (0, 1, 2):
        ours, theirs = random.Random(8), random.Random(8)
        for rng in (ours, theirs):
            for _ in range(before):
                rng.gauss(0.0, 1.0)
        assert gaussian(ours, 600) + gaussian(ours, 2) == [theirs.gauss(0.0, 1.0) for _ in range(602)]
        assert ours.getstate() == theirs.getstate()
