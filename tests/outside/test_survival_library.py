"""The law of stalling against exponential regression of a survival library, with right and with interval censoring.

The trials are drawn once from the law and written down; the reference is lifelines 0.30.3 (a regression of its own
making: cumulative hazard t / λ, ln λ = a + b·x), coefficients and standard errors as it printed them.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import optimize

from sweeprig.laws import EXPONENTIAL, GUMBEL_SD, LN2, Evidence, Trial, log_likelihood, summed

DUTIES = (9.0, 9.4, 9.8, 10.2, 10.6, 11.0)
# moments of the stops in parts of the hold time, eight holds at each duty; 1.0: it still turned
STOPS = (
    (0.132, 0.014, 0.156, 0.328, 0.233, 0.047, 0.138, 0.061),
    (0.058, 0.733, 0.143, 0.125, 0.195, 0.138, 0.346, 0.311),
    (1.0, 0.434, 1.0, 0.367, 0.769, 1.0, 0.659, 1.0),
    (0.248, 1.0, 1.0, 1.0, 1.0, 0.488, 1.0, 1.0),
    (1.0, 1.0, 0.211, 1.0, 1.0, 1.0, 1.0, 1.0),
    (1.0, 1.0, 1.0, 0.776, 1.0, 1.0, 1.0, 1.0),
)
INSTANT, EDGE = 1e-7, 0.05


def evidence(width: float) -> Evidence:
    """Stops seen at their moment (width INSTANT), or between the edges of a grid of `width`."""
    trials: list[Trial] = []
    for duty, stops in zip(DUTIES, STOPS, strict=True):
        for stop in stops:
            begin = stop if width == INSTANT else math.floor(stop / width) * width
            trials.append(Trial(len(trials), duty, 1.0) if stop == 1.0 else Trial(len(trials), duty, begin, width))
    return summed(trials)


def fitted(data: Evidence) -> tuple[np.ndarray, np.ndarray]:
    """(a, b) of ln λ = a + b·(duty − 10) by the tool's likelihood, and their standard errors (observed information)."""

    def minus(at: np.ndarray) -> float:
        a, b = float(at[0]), float(at[1])
        median = 10.0 - (a + math.log(LN2)) / b
        return -float(log_likelihood(EXPONENTIAL, data, np.asarray(median), np.asarray(GUMBEL_SD / b)))

    best = optimize.minimize(minus, np.array([0.3, 2.0]), method="Nelder-Mead", options={"xatol": 1e-9, "fatol": 1e-12})
    assert best.success
    step = 1e-3
    bend = np.empty((2, 2))
    for i in range(2):
        for j in range(2):
            e, f = np.eye(2)[i] * step, np.eye(2)[j] * step
            corners = [minus(best.x + s * e + t * f) * s * t for s in (1, -1) for t in (1, -1)]
            bend[i, j] = sum(corners) / (4.0 * step * step)
    return best.x, np.sqrt(np.diag(np.linalg.inv(bend)))


@pytest.mark.parametrize(
    ("width", "coefficients", "errors"),
    [
        # independent method: lifelines 0.30.3, fit (right-censored) and fit_interval_censoring
        (INSTANT, (0.509865, 2.535057), (0.285286, 0.412351)),
        (EDGE, (0.505503, 2.552521), (0.285454, 0.413704)),
    ],
    ids=["right-censored", "interval-censored"],
)
def test_law_is_the_librarys_exponential_regression(
    width: float, coefficients: tuple[float, float], errors: tuple[float, float]
) -> None:
    """Place and slope of the hazard, and their standard errors, are the library's."""
    found, u = fitted(evidence(width))
    # the printed digits, and what the library's own stopping rule leaves: a thousandth of a standard error
    assert found.tolist() == pytest.approx(coefficients, abs=1e-3 * 0.28)
    assert u.tolist() == pytest.approx(errors, rel=2e-3)


def test_the_two_references_differ_by_more_than_the_tolerance() -> None:
    """Interval censoring moves the reference by more than the check allows, so the check can tell the two apart."""
    found, _ = fitted(evidence(INSTANT))
    assert found.tolist() != pytest.approx([0.505503, 2.552521], abs=1e-3 * 0.28)
