"""Two linear states between events: against scipy's matrix exponential, quadrature and root finder, for any damping."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.linalg import expm
from scipy.optimize import brentq

from sweeprig.simbench.second_order import Course, system

RINGING, CRITICAL, STIFF = (-2.0, 30.0, -40.0, -1.0), (-3.0, 1.0, -1.0, -1.0), (-4e3, 300.0, -9e5, -3e6)
SYSTEMS = [RINGING, CRITICAL, (-3.0, 1.0, -1.0 + 1e-9, -1.0), (-5.0, 1.0, 0.5, -0.2), STIFF]
START, END, ROW = (1.3, -0.7), (0.4, 2.0), (-0.1, 1.0)


def course(rows: tuple[float, float, float, float]) -> Course:
    return Course(system(*rows), END, START)


def exact(rows: tuple[float, float, float, float], seconds: float) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """END + e^(A·t)·START by scipy (independent method)."""
    found = np.array(END) + expm(np.array(rows).reshape(2, 2) * seconds) @ np.array(START)
    return np.asarray(found, dtype=np.float64)


@pytest.mark.parametrize("rows", SYSTEMS)
@pytest.mark.parametrize("part", [0.01, 0.5, 3.0])
def test_course_and_integrals(rows: tuple[float, float, float, float], part: float) -> None:
    """States, their integrals and that of the first one's square agree with scipy's to 1e-9."""
    one, seconds = course(rows), part / -min(rows[0], rows[3])
    assert one.at(seconds) == pytest.approx(tuple(exact(rows, seconds)), rel=1e-10, abs=1e-10)
    charge, flux = one.integral(seconds)
    assert charge == pytest.approx(quad(lambda t: exact(rows, t)[0], 0.0, seconds)[0], rel=1e-9)
    assert flux == pytest.approx(quad(lambda t: exact(rows, t)[1], 0.0, seconds)[0], rel=1e-9)
    assert one.square(seconds) == pytest.approx(quad(lambda t: exact(rows, t)[0] ** 2, 0.0, seconds)[0], rel=1e-9)


@pytest.mark.parametrize("rows", SYSTEMS)
def test_extremes_are_where_the_slope_is_zero(rows: tuple[float, float, float, float]) -> None:
    """Each extreme has no slope, by scipy's states; and a fine grid shows no greater or lesser value than they do."""
    one, seconds = course(rows), 12.0 / -min(rows[0], rows[3])
    times = list(one.extremes(ROW, seconds, most=100))
    matrix = np.array(rows).reshape(2, 2)
    for at in times:
        slope = np.array(ROW) @ matrix @ (exact(rows, at) - np.array(END))
        steep = np.abs(np.array(ROW) @ matrix) @ np.abs(np.array(START))
        assert slope == pytest.approx(0.0, abs=1e-9 * steep)
    grid = [float(np.array(ROW) @ exact(rows, at)) for at in np.linspace(0.0, seconds, 700)]
    seen = [float(np.array(ROW) @ exact(rows, at)) for at in (0.0, *times, seconds)]
    assert max(grid) <= max(seen) + 1e-9
    assert min(grid) >= min(seen) - 1e-9


def test_first_crossing_is_the_first() -> None:
    """A ringing course falls below a level where scipy's root finder says, the first time; below its least, never."""
    one = course(RINGING)

    def over(at: float) -> float:
        return float(np.array(ROW) @ exact(RINGING, at)) - 0.5

    grid = np.linspace(0.0, 1.0, 2001)
    before = next(n for n, at in enumerate(grid) if over(float(at)) > 0.0 > over(float(grid[n + 1])))
    root = brentq(over, grid[before], grid[before + 1], xtol=1e-14)
    assert one.falls_below(ROW, 0.5, 1.0, 1e-12) == pytest.approx(root, rel=1e-10)
    assert one.falls_below(ROW, -50.0, 1.0, 1e-12) == math.inf
