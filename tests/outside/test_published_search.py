"""The one-step rule against a published sequence of trials.

Watson 2017, QUEST+: A general multidimensional Bayesian adaptive psychometric method, Journal of Vision 17(3):10,
Example 1: the threshold of a Weibull function of contrast in dB, by minimum expected entropy.
"""

from __future__ import annotations

import numpy as np
import pytest

from sweeprig.laws import Floats
from sweeprig.schedule.one_step import entropy, expected, variance

DECIBELS = np.arange(-40.0, 1.0)
SLOPE, GUESS, LAPSE = 3.5, 0.5, 0.02
WRONG = (5, 6, 15, 18, 21)
# certified: the stimuli printed in the paper; reproduced by an independent program as well
STIMULI = (
    -18, -22, -25, -28, -30, -22, -13, -15, -16, -18, -19, -20, -21, -22, -23, -19,
    -20, -20, -18, -18, -19, -17, -17, -18, -18, -18, -19, -19, -19, -19, -19, -19,
)  # fmt: skip


def correct(contrast: Floats, threshold: Floats) -> Floats:
    """Watson's Weibull function in dB: 1 − δ − (1 − γ − δ)·exp(−10^(β·(x − t)/20)), shape (contrasts, thresholds)."""
    rise = 10.0 ** (SLOPE * (contrast[:, None] - threshold[None, :]) / 20.0)
    return np.asarray(1.0 - LAPSE - (1.0 - GUESS - LAPSE) * np.exp(-rise))


def played() -> tuple[list[int], Floats]:
    """The stimuli that the rule of the search chooses with the paper's answers, and the posterior at the end."""
    right = correct(DECIBELS, DECIBELS)
    chance = np.stack([right, 1.0 - right], axis=1).reshape(-1, DECIBELS.size)
    makes: Floats = np.asarray(np.kron(np.eye(DECIBELS.size), np.ones((1, 2))), dtype=np.float64)
    weight: Floats = np.full(DECIBELS.size, 1.0 / DECIBELS.size)
    chosen = []
    for trial in range(1, len(STIMULI) + 1):
        index = int(np.argmin(expected(weight, chance, makes, entropy)[:, 0]))
        chosen.append(round(DECIBELS[index]))
        weight = weight * chance[2 * index + (trial in WRONG)]
        weight = weight / weight.sum()
    return chosen, weight


def test_watsons_first_example() -> None:
    """Given the paper's answers, the rule asks for the paper's 32 stimuli, and believes in its threshold at the end."""
    chosen, weight = played()
    assert tuple(chosen) == STIMULI
    assert DECIBELS[int(np.argmax(weight))] == -20.0  # certified: the paper's mode


def test_the_posterior_of_the_example() -> None:
    """Mean and standard deviation of the posterior are those of an independent program (independent method)."""
    _, weight = played()
    mean = float(weight @ DECIBELS)
    assert mean == pytest.approx(-20.3936, abs=5e-5)
    assert float(np.sqrt(weight @ (DECIBELS - mean) ** 2)) == pytest.approx(1.3893, abs=5e-5)


def test_the_variance_rule_by_hand() -> None:
    """Two equally likely values 0 and 2, and a trial that tells them apart with chance 3/4: each outcome leaves weights
    3/4 and 1/4, so a variance of 4·3/16, by hand."""
    chance = np.array([[0.75, 0.25], [0.25, 0.75], [0.5, 0.5], [0.5, 0.5]])
    makes = np.array([[1.0, 1.0, 0.0, 0.0], [0.0, 0.0, 1.0, 1.0]])
    after = expected(np.array([0.5, 0.5]), chance, makes, variance(np.array([[0.0, 2.0]])))
    assert after[:, 0] == pytest.approx([0.75, 1.0], rel=1e-12)
