"""Many motors by one call: order, seeds, errors, and the same answer with any number of processes."""

import sys
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from sweeprig.errors import SweeprigError
from sweeprig.simbench.many import many


@pytest.fixture(autouse=True)
def findable(monkeypatch: pytest.MonkeyPatch) -> None:
    """Fresh processes find this file by its name; last on the path, so that the installed package is used."""
    monkeypatch.setattr(sys, "path", [*sys.path, str(Path(__file__).parents[2])])


def drawn(unit: float, pair: tuple[int, int]) -> tuple[float, float]:
    """A unit's own number and a random one."""
    return unit, float(np.random.default_rng(pair).standard_normal())


def failing(unit: float, pair: tuple[int, int], bad: float) -> float:
    del pair
    if unit == bad:
        raise SweeprigError("no such motor", value=f"{unit:g}")
    return unit


def test_processes_do_not_change_the_result() -> None:
    """Two fresh processes give what none gives, in the units' order, every unit with random numbers of its own."""
    units = [float(n) for n in range(37)]
    alone = many(drawn, units, 5, workers=1)
    assert many(drawn, units, 5, workers=2) == alone
    assert [unit for unit, _ in alone] == units
    assert len({number for _, number in alone}) == 37
    assert many(drawn, units, 6, workers=1) != alone


def test_a_unit_is_the_same_in_every_lot() -> None:
    """Unit 3 of a lot of 5 is unit 3 of a lot of 50."""
    few, lots = (many(drawn, [1.0] * count, 9, workers=1) for count in (5, 50))
    assert lots[:5] == few


def test_no_units_give_no_results() -> None:
    """An empty lot is done at once."""
    assert many(drawn, [], 1) == []


@pytest.mark.parametrize("workers", [1, 2])
def test_the_error_of_a_unit_reaches_the_caller(workers: int) -> None:
    """What the work raises in another process comes out as itself."""
    with pytest.raises(SweeprigError, match="no such motor"):
        many(partial(failing, bad=2.0), [1.0, 2.0, 3.0], 1, workers=workers)


def test_no_process_is_refused() -> None:
    """Less than one process is an error that says what is allowed."""
    with pytest.raises(SweeprigError, match="needs a process") as caught:
        many(drawn, [1.0], 1, workers=0)
    assert caught.value.allowed == "1 or more"
