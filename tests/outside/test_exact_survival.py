"""The hazard law's likelihood against exponential survival with censoring: a textbook data set and two libraries."""

from __future__ import annotations

import math

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import optimize, stats

from sweeprig.laws import EXPONENTIAL, GUMBEL_SD, LN2, Trial, log_likelihood, summed

# Weeks of remission of 21 + 21 patients (Gehan 1965; data from memory, as are the sums 359 and 182 that textbooks
# give for them). True: relapse seen; False: censored.
TREATED = (
    *((t, True) for t in (6, 6, 6, 7, 10, 13, 16, 22, 23)),
    *((t, False) for t in (6, 9, 10, 11, 17, 19, 20, 25, 32, 32, 34, 35)),
)
CONTROL = tuple((t, True) for t in (1, 1, 2, 2, 3, 4, 4, 5, 5, 8, 8, 8, 8, 11, 11, 12, 12, 15, 17, 22, 23))
INSTANT = 1e-6


def trials(duty: float, rows: tuple[tuple[int, bool], ...], width: float = INSTANT) -> list[Trial]:
    """A "hold time" of 1 week, so that a rate is a hazard a week."""
    return [Trial(0, duty, float(time), width if seen else None) for time, seen in rows]


def most_likely(rows: list[Trial], start: tuple[float, float]) -> tuple[float, float]:
    """(median, spread) of greatest likelihood."""
    evidence = summed(rows)

    def minus(x: np.ndarray) -> float:
        return -float(log_likelihood(EXPONENTIAL, evidence, np.asarray(x[0]), np.asarray(math.exp(x[1]))))

    found = optimize.minimize(
        minus,
        np.array([start[0], math.log(start[1])]),
        method="Nelder-Mead",
        options={"xatol": 1e-10, "fatol": 1e-12, "maxiter": 5000, "maxfev": 5000},
    )
    assert found.success
    return float(found.x[0]), math.exp(float(found.x[1]))


def hazard(duty: float, median: float, spread: float) -> float:
    return LN2 * math.exp(-GUMBEL_SD * (duty - median) / spread)


def test_events_over_exposure_at_two_duties() -> None:
    """With two duties the law has a rate for each, and the most likely are events over exposure: 9/359 and 21/182."""
    assert sum(t for t, _ in TREATED) == 359  # from memory: the sums that textbooks print
    assert sum(t for t, _ in CONTROL) == 182
    median, spread = most_likely([*trials(11.0, TREATED), *trials(10.0, CONTROL)], (8.0, 1.0))
    # exact: the closed form of the exponential law with censoring
    assert hazard(11.0, median, spread) == pytest.approx(9.0 / 359.0, rel=1e-5)
    assert hazard(10.0, median, spread) == pytest.approx(21.0 / 182.0, rel=1e-5)


def test_one_duty_against_scipy_censored_fit() -> None:
    """At one duty with the spread held, the most likely rate is scipy's exponential fit to the censored times."""
    evidence = summed(trials(10.0, TREATED))
    found = optimize.minimize_scalar(
        lambda m: -float(log_likelihood(EXPONENTIAL, evidence, np.asarray(m), np.asarray(0.5))),
        bounds=(5.0, 12.0),
        options={"xatol": 1e-10},
        method="bounded",
    )
    seen = [float(t) for t, event in TREATED if event]
    right = [float(t) for t, event in TREATED if not event]
    _, scale = stats.expon.fit(stats.CensoredData(uncensored=seen, right=right), floc=0.0)
    assert hazard(10.0, float(found.x), 0.5) == pytest.approx(1.0 / scale, rel=1e-4)  # independent method


def test_interval_censoring_against_scipy() -> None:
    """Stops known only to lie within four weeks give scipy's rate for interval-censored times."""
    rows = trials(10.0, TREATED, width=4.0)
    evidence = summed(rows)
    found = optimize.minimize_scalar(
        lambda m: -float(log_likelihood(EXPONENTIAL, evidence, np.asarray(m), np.asarray(0.5))),
        bounds=(5.0, 12.0),
        options={"xatol": 1e-10},
        method="bounded",
    )
    interval = [[float(t), float(t) + 4.0] for t, event in TREATED if event]
    right = [float(t) for t, event in TREATED if not event]
    _, scale = stats.expon.fit(stats.CensoredData(interval=interval, right=right), floc=0.0)
    assert hazard(10.0, float(found.x), 0.5) == pytest.approx(1.0 / scale, rel=1e-4)  # independent method


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_slope_against_poisson_regression(seed: int) -> None:
    """Over many duties the law is Poisson regression of events with log exposure as offset: same rate and slope."""
    rng = np.random.default_rng(seed)
    duty = np.linspace(9.0, 11.0, 9)
    rows: list[Trial] = []
    events, exposure = np.zeros(9), np.zeros(9)
    for index, place in enumerate(duty.tolist()):
        for time in rng.exponential(1.0 / hazard(place, 9.7, 0.8), size=12).tolist():
            survived, seen = min(time, 1.0), time < 1.0
            rows.append(Trial(0, place, survived, INSTANT if seen else None))
            events[index] += seen
            exposure[index] += survived
    median, spread = most_likely(rows, (9.7, 0.8))
    model = sm.GLM(events, sm.add_constant(duty), family=sm.families.Poisson(), offset=np.log(exposure))
    intercept, slope = model.fit(tol=1e-13).params
    # independent method: statsmodels
    assert -GUMBEL_SD / spread == pytest.approx(slope, rel=1e-4)
    assert math.log(hazard(10.0, median, spread)) == pytest.approx(intercept + 10.0 * slope, abs=1e-4)


def test_spread_is_the_standard_deviation_of_the_law() -> None:
    """The stopping law's median and standard deviation are scipy's for that Gumbel law (independent method)."""
    scale = 0.4 / GUMBEL_SD
    law = stats.gumbel_r(loc=20.0 + scale * math.log(LN2), scale=scale)
    assert law.median() == pytest.approx(20.0, abs=1e-12)
    assert law.std() == pytest.approx(0.4, abs=1e-12)
    places = np.linspace(18.5, 23.0, 40)
    mine = np.exp(-EXPONENTIAL.cumulative((places - 20.0) / 0.4))
    assert mine == pytest.approx(law.cdf(places), abs=1e-12)
    assert 20.0 + 0.4 * EXPONENTIAL.offset(0.99) == pytest.approx(law.ppf(0.99), abs=1e-9)
