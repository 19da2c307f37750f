"""Monotone speed curves against a published case of isotonic regression."""

from __future__ import annotations

import numpy as np
import pytest

from sweeprig.characterise.curve import fit_curve
from sweeprig.characterise.evidence import Point

# R's documentation example of isoreg (certified: printed there; scipy, scikit-learn and R agree)
RAW = (1.0, 0.0, 4.0, 3.0, 3.0, 5.0, 4.0, 2.0, 0.0)
MONOTONE = (0.5, 0.5, 3.0, 3.0, 3.0, 3.0, 3.0, 3.0, 3.0)


def points(values: tuple[float, ...], weights: tuple[float, ...]) -> list[Point]:
    return [
        Point(index, 10.0 + index, value, 0.1, weight)
        for index, (value, weight) in enumerate(zip(values, weights, strict=True))
    ]


def test_curve_through_the_published_case() -> None:
    """Equal weights give the published monotone values, and the curve says that the data were not monotone."""
    curve = fit_curve(points(RAW, (1.0,) * 9), monotone=True)
    assert curve is not None
    assert curve.value == pytest.approx(MONOTONE, abs=1e-12)
    assert "not_monotone" in curve.flags


def brute_force(values: tuple[float, ...], weights: tuple[float, ...]) -> list[float]:
    """The max-min formula of isotonic regression (Barlow et al. 1972): exact, and no pooling in it."""
    v, w = np.array(values), np.array(weights)

    def mean(first: int, last: int) -> float:
        return float(np.average(v[first : last + 1], weights=w[first : last + 1]))

    return [max(min(mean(i, j) for j in range(k, len(v))) for i in range(k + 1)) for k in range(len(v))]


def test_weights_count() -> None:
    """Exposure weights enter as the max-min formula of isotonic regression says (independent method)."""
    weights = (1.0, 4.0, 0.5, 2.0, 1.0, 3.0, 1.0, 5.0, 0.25)
    curve = fit_curve(points(RAW, weights), monotone=True)
    assert curve is not None
    assert curve.value == pytest.approx(brute_force(RAW, weights), abs=1e-12)


def test_without_the_constraint_the_values_stay() -> None:
    """A quantity that need not be monotone keeps its means."""
    curve = fit_curve(points(RAW, (1.0,) * 9), monotone=False)
    assert curve is not None
    assert tuple(curve.value) == RAW
    assert "not_monotone" not in curve.flags
