"""The laws and their likelihood: what must hold whatever the numbers."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from sweeprig.laws import (
    EXPONENTIAL,
    GAUSSIAN,
    GUMBEL_SD,
    LN2,
    LOGISTIC,
    LOGISTIC_SD,
    Law,
    Trial,
    log_chance_of_same,
    log_likelihood,
    summed,
)

LAWS = [EXPONENTIAL, GAUSSIAN, LOGISTIC]
# independent method: scipy's distributions of the threshold, unit standard deviation and median 0
REFERENCE = {
    "exponential hazard": stats.gumbel_r(loc=math.log(LN2) / GUMBEL_SD, scale=1.0 / GUMBEL_SD),
    "Gaussian threshold": stats.norm(),
    "logistic threshold": stats.logistic(scale=1.0 / LOGISTIC_SD),
}
law_of = st.sampled_from(LAWS)
trial_of = st.builds(
    Trial,
    hold=st.integers(0, 99),
    duty_percent=st.floats(8.0, 12.0),
    survived=st.floats(0.0, 1.0),
    failed=st.none() | st.floats(0.01, 1.0),
)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_law_is_its_distribution(law: Law) -> None:
    """The chance to get through a trial is the distribution function of a threshold with standard deviation 1."""
    places = np.linspace(-5.0, 6.0, 56)
    reference = REFERENCE[law.name]
    assert reference.std() == pytest.approx(1.0, abs=1e-9)
    assert np.exp(-law.cumulative(places)) == pytest.approx(reference.cdf(places), abs=1e-12)
    assert law.cumulative(places) == pytest.approx(-reference.logcdf(places), rel=1e-9)
    for probability in (0.01, 0.5, 0.9, 0.99, 0.999):
        assert law.offset(probability) == pytest.approx(float(reference.ppf(probability)), abs=1e-9)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_law_far_away_stays_a_number(law: Law) -> None:
    """A thousand spreads away on either side the hazard is finite and falls with duty."""
    hazard = law.cumulative(np.array([-1000.0, -30.0, 0.0, 30.0, 1000.0]))
    assert np.all(np.isfinite(hazard))
    assert np.all(np.diff(hazard) <= 0.0)
    assert hazard[0] > hazard[2] > hazard[3] >= 0.0


@given(law_of, st.lists(trial_of, min_size=1, max_size=8), st.floats(8.0, 12.0), st.floats(0.1, 2.0))
def test_sums_lose_nothing(law: Law, trials: list[Trial], median: float, spread: float) -> None:
    """The likelihood of the summed evidence is the product of the trials' own, S(a) − S(b) or S(a)."""

    def one(trial: Trial) -> float:
        hazard = float(law.cumulative(np.array((trial.duty_percent - median) / spread)))
        seen = 0.0 if trial.failed is None else math.log(max(-math.expm1(-hazard * trial.failed), 1e-300))
        return seen - hazard * trial.survived

    found = float(log_likelihood(law, summed(trials), np.array(median), np.array(spread)))
    assert found == pytest.approx(sum(one(trial) for trial in trials), rel=1e-6, abs=1e-6)


@given(law_of, trial_of, st.floats(0.0, 1.0), st.floats(8.0, 12.0), st.floats(0.1, 2.0))
def test_splitting_a_hold_changes_nothing(law: Law, trial: Trial, part: float, median: float, spread: float) -> None:
    """One exposure, or the same time as two exposures of which the first was survived: the same likelihood."""
    first = Trial(1, trial.duty_percent, part * trial.survived)
    rest = replace(trial, survived=(1.0 - part) * trial.survived)
    whole, split = summed([trial]), summed([first, rest])
    found = [float(log_likelihood(law, e, np.array(median), np.array(spread))) for e in (whole, split)]
    assert found[0] == pytest.approx(found[1], rel=1e-9, abs=1e-9)


@given(law_of, st.lists(trial_of, min_size=1, max_size=6), st.floats(-8.0, 60.0), st.floats(0.1, 2.0))
def test_shift_of_duty(law: Law, trials: list[Trial], shift: float, spread: float) -> None:
    """Trials and median shifted by the same duty have the same likelihood."""
    moved = [replace(trial, duty_percent=trial.duty_percent + shift) for trial in trials]
    here = float(log_likelihood(law, summed(trials), np.array(10.0), np.array(spread)))
    there = float(log_likelihood(law, summed(moved), np.array(10.0 + shift), np.array(spread)))
    assert there == pytest.approx(here, rel=1e-5, abs=1e-5)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_chance_that_all_end_alike(law: Law) -> None:
    """At the median each whole trial is a fair coin, whichever way all of them ended and whenever it was seen."""
    failed = summed([Trial(i, 10.0, 0.3, 0.01) for i in range(6)])
    survived = summed([Trial(i, 10.0, 1.0) for i in range(6)])
    for evidence in (failed, survived):
        chance = log_chance_of_same(law, evidence, np.array(10.0), np.array(0.4))
        assert math.exp(float(chance)) == pytest.approx(0.5**6, rel=1e-9)  # exact
