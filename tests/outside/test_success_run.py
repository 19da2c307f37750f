"""Bounds from trials that all ended alike, against the success-run theorem: n = ln(1 − C) / ln R."""

from __future__ import annotations

import pytest
from scipy import stats

from sweeprig.characterise.thresholds import SpreadPrior, bound_without_contrast
from sweeprig.laws import EXPONENTIAL, GAUSSIAN, LOGISTIC, STALL_LAWS, Law, Trial, summed

# Success run at 95 % confidence (independent method: n = ln 0.05 / ln R rounded up; the pairs 90/95 29, 95/95 59,
# 99/95 299 are common practice and agree)
RUNS = [(0.90, 29), (0.95, 59), (0.99, 299)]
DUTY = 20.0


def bound(laws: tuple[Law, ...], survivals: int, probability: float, prior: SpreadPrior) -> float:
    trials = [Trial(index, DUTY, 1.0) for index in range(survivals)]
    return bound_without_contrast(laws, summed(trials), prior, probability)


@pytest.mark.parametrize(("probability", "run"), RUNS)
@pytest.mark.parametrize("law", [EXPONENTIAL, GAUSSIAN, LOGISTIC], ids=lambda law: law.name)
@pytest.mark.parametrize("prior", [SpreadPrior(0.3), SpreadPrior(3.0, 0.5)], ids=["narrow", "wide"])
def test_run_of_survivals_reaches_the_duty(probability: float, run: int, law: Law, prior: SpreadPrior) -> None:
    """The bound comes down to the duty tried at exactly the run the theorem asks for, whatever law and spread."""
    assert bound((law,), run, probability, prior) <= DUTY
    assert bound((law,), run - 1, probability, prior) > DUTY


@pytest.mark.parametrize("run", [5, 20, 100])
def test_run_of_survivals_is_clopper_pearson(run: int) -> None:
    """At the survival that Clopper and Pearson's one-sided bound gives for n of n, the duty bound is the duty tried."""
    # independent method: scipy; 20 of 20 gives 1 − 0.139108
    reliability = stats.binomtest(run, run, alternative="greater").proportion_ci(0.95, method="exact").low
    assert bound(STALL_LAWS, run, reliability, SpreadPrior(0.3)) == pytest.approx(DUTY, abs=1e-4)


def test_run_of_failures_is_the_mirror() -> None:
    """29 failures of 29 show that a tenth would succeed only above the duty tried; 28 of 28 do not."""
    trials = [Trial(index, DUTY, 0.1, 0.05) for index in range(29)]
    found = bound_without_contrast(STALL_LAWS, summed(trials), SpreadPrior(0.3), 0.10)
    short = bound_without_contrast(STALL_LAWS, summed(trials[:28]), SpreadPrior(0.3), 0.10)
    assert found >= DUTY
    assert short < DUTY
