"""The smooth curve through levels, and its three uncertainties."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.characterise.curve import Curve, fit_curve, levels, lowest_sure_duty, pooled_scatter
from sweeprig.characterise.evidence import Point


def made(values: dict[float, tuple[float, ...]], u: float = 2.0) -> Curve:
    points = [Point(0, duty, value, u, 10.0) for duty, row in values.items() for value in row]
    curve = fit_curve(points, monotone=True)
    assert curve is not None
    return curve


def test_accuracy_is_not_averaged_down() -> None:
    """A hundred readings of one instrument leave its accuracy where it was, while their scatter falls with √n."""
    few = made({10.0: (99.0, 101.0), 20.0: (199.0, 201.0)})
    many = made({10.0: (99.0, 101.0) * 50, 20.0: (199.0, 201.0) * 50})
    for curve in (few, many):
        assert curve.u_common_at(np.array([10.0, 15.0])) == pytest.approx(2.0)
    assert few.u_random[0] == pytest.approx(1.0)  # exact: √2 / √2
    assert many.u_random[0] == pytest.approx(math.sqrt(100 / 99) / 10.0)  # exact
    assert many.one(10.0)[1] > 2.0


def test_without_replicates_the_readings_stand_in() -> None:
    """No hold repeated: the readings' own u is taken for the scatter too, and the flag says so."""
    curve = made({10.0: (100.0,), 20.0: (200.0,)})
    assert curve.flags == ("no_replicates",)
    assert curve.u_random == pytest.approx([2.0, 2.0])


def test_scatter_is_local() -> None:
    """Replicates near the stall do not make the far end of the curve unsure; there the branches' difference counts."""
    noisy = [Point(0, 10.0, value, 1.0, 10.0) for value in (80.0, 120.0, 100.0)]
    falling = [*noisy, Point(0, 50.0, 1000.0, 1.0, 10.0), Point(0, 90.0, 2000.0, 1.0, 10.0)]
    rising = [Point(0, 50.0, 1003.0, 1.0, 10.0), Point(0, 90.0, 1999.0, 1.0, 10.0)]
    curve = fit_curve(falling, monotone=True, other=rising)
    assert curve is not None
    # exact: s = 20; root of (3² + 1²) / (2 · 2) differences
    assert curve.one_hold == pytest.approx([20.0, math.sqrt(2.5), math.sqrt(2.5)])
    assert curve.u_random[0] == pytest.approx(20.0 / math.sqrt(3.0))
    assert curve.flags == ()
    alone = fit_curve(falling, monotone=True)
    assert alone is not None
    assert alone.one_hold == pytest.approx([20.0, 1.0, 1.0])
    assert alone.flags == ("no_replicates",)


def test_exposure_weights_the_mean() -> None:
    """A survivor of 20 s and one that turned for 5 s weigh four to one."""
    found = levels([Point(1, 10.0, 100.0, 1.0, 20.0), Point(2, 10.0, 90.0, 1.0, 5.0)])
    assert len(found) == 1
    assert found[0].value == pytest.approx(98.0)  # exact
    assert found[0].effective_n == pytest.approx(625.0 / 425.0)  # exact: (Σw)² / Σw²
    assert found[0].holds == (1, 2)


def test_settings_nearly_equal_are_one_level() -> None:
    """Settings nearer than 0.05 % are one level; those farther apart are two."""
    points = [Point(i, duty, 100.0 + i, 1.0, 10.0) for i, duty in enumerate((10.0, 10.03, 10.09))]
    assert [level.holds for level in levels(points)] == [(0, 1), (2,)]


def test_pooled_scatter() -> None:
    """Scatter is pooled over levels by degrees of freedom."""
    points = [Point(0, 10.0, v, 1.0, 1.0) for v in (1.0, 3.0)] + [Point(0, 20.0, v, 1.0, 1.0) for v in (4.0, 5.0, 6.0)]
    scatter, freedom = pooled_scatter(levels(points))
    assert scatter == pytest.approx(math.sqrt(4.0 / 3.0))  # exact: (2 + 2) / 3
    assert freedom == 3
    assert pooled_scatter(levels(points[:1])) == (0.0, 0)


def test_beyond_the_levels_it_goes_straight_on_and_knows_less() -> None:
    """Below the lowest level the curve follows its end slope, and its u holds the whole step away from it."""
    curve = made({10.0: (100.0, 100.0), 20.0: (300.0, 300.0), 30.0: (400.0, 400.0)}, u=0.0)
    value, u = curve.one(8.0)
    assert value == pytest.approx(60.0)  # exact: slope 20
    assert u == pytest.approx(40.0 / math.sqrt(3.0))  # exact: rectangle of ± 40
    assert curve.one(32.0)[0] == pytest.approx(420.0)


def test_between_levels_u_has_the_curvature() -> None:
    """Where the smooth curve leaves the chord, u is larger than at the levels."""
    curve = made({10.0: (0.0, 0.0), 20.0: (300.0, 300.0), 40.0: (400.0, 400.0)}, u=0.0)
    away = abs(float(curve.at(np.array([15.0]))[0]) - 150.0)
    assert away > 1.0
    assert curve.one(15.0)[1] == pytest.approx(away / math.sqrt(3.0))
    assert curve.one(20.0)[1] == pytest.approx(0.0, abs=1e-9)


@given(st.lists(st.floats(0.0, 4000.0), min_size=2, max_size=10))
def test_monotone_whatever_the_data(values: list[float]) -> None:
    """The fitted speed never falls with duty, between the levels either."""
    curve = made({10.0 + 5.0 * index: (value,) for index, value in enumerate(values)})
    assert np.all(np.diff(curve.dense(5.0, 70.0)[1]) >= -1e-6)


def test_one_level_is_no_curve() -> None:
    """A curve needs two duties."""
    assert fit_curve([Point(0, 10.0, 1.0, 1.0, 1.0)], monotone=True) is None
    assert fit_curve([], monotone=False) is None


def test_lowest_sure_duty() -> None:
    """It is the lowest measured duty above every stop."""
    assert lowest_sure_duty([9.0, 10.0, 11.0, 50.0], [8.0, 10.0]) == 11.0
    assert lowest_sure_duty([9.0, 10.0], []) == 9.0
    assert lowest_sure_duty([9.0, 10.0], [12.0]) is None


def test_accuracy_of_duty_comes_in_by_the_slope() -> None:
    """On a straight curve of 20 rpm a percent, 0.1 % of duty is 2 rpm."""
    curve = made({10.0: (200.0, 200.0), 20.0: (400.0, 400.0), 30.0: (600.0, 600.0)}, u=0.0)
    assert curve.u_with_duty(0.1) == pytest.approx([2.0, 2.0, 2.0])  # exact
