"""Binomial regression against published cases: Bliss's beetles, Finney's rotenone, and a reference library."""

from __future__ import annotations

import math

import numpy as np
import pytest
import statsmodels.api as sm

from sweeprig.characterise.binary_fit import BinaryFit, FitFailed, Link, Separated, fit_binary

# Bliss 1935, beetles after five hours of carbon disulphide: log10 dose, exposed, killed. Data as printed in Dobson, An
# Introduction to Generalized Linear Models (certified). Copies with 60 instead of 61 killed in row 7 circulate.
BLISS_DOSE = np.array([1.6907, 1.7242, 1.7552, 1.7842, 1.8113, 1.8369, 1.8610, 1.8839])
BLISS_N = np.array([59.0, 60.0, 62.0, 56.0, 63.0, 59.0, 62.0, 60.0])
BLISS_KILLED = np.array([6.0, 13.0, 18.0, 28.0, 52.0, 53.0, 61.0, 60.0])

# Finney 1971, rotenone on the chrysanthemum aphid: dose, exposed, affected (certified: data set finney71 of R's drc).
FINNEY_DOSE = np.log10(np.array([10.2, 7.7, 5.1, 3.8, 2.6]))
FINNEY_N = np.array([50.0, 49.0, 46.0, 48.0, 50.0])
FINNEY_AFFECTED = np.array([44.0, 42.0, 24.0, 16.0, 6.0])


def fitted(x: np.ndarray, n: np.ndarray, k: np.ndarray, link: Link) -> BinaryFit:
    result = fit_binary(x, n, k, link)
    assert isinstance(result, BinaryFit)
    return result


def test_bliss_logit_as_published() -> None:
    """The beetles' logit line has the published coefficients, standard errors and deviance."""
    fit = fitted(BLISS_DOSE, BLISS_N, BLISS_KILLED, "logit")
    # certified: Dobson's table and the glmlab page print these digits
    assert fit.intercept == pytest.approx(-60.717455, abs=5e-6)
    assert fit.slope == pytest.approx(34.270326, abs=5e-6)
    assert fit.intercept_u == pytest.approx(5.180701, abs=2e-5)
    assert fit.slope_u == pytest.approx(2.912134, abs=1e-5)
    assert fit.deviance == pytest.approx(11.232231, abs=5e-7)


@pytest.mark.parametrize(
    ("link", "intercept", "slope", "deviance"),
    [
        # independent method: statsmodels and R's glm agree on all digits
        ("logit", -60.71745456, 34.27032573, 11.23223110),
        ("probit", -34.93525889, 19.72793421, 10.11975811),
        ("cloglog", -39.57231061, 22.04116982, 3.44643873),
    ],
)
def test_bliss_with_each_link(link: Link, intercept: float, slope: float, deviance: float) -> None:
    """Each link gives the reference's coefficients and deviance."""
    fit = fitted(BLISS_DOSE, BLISS_N, BLISS_KILLED, link)
    assert (fit.intercept, fit.slope) == pytest.approx((intercept, slope), rel=1e-8)
    assert fit.deviance == pytest.approx(deviance, abs=1e-7)


def test_bliss_doses_with_standard_error() -> None:
    """The dose for 5, 50 and 95 %, and the standard error of the middle one, are the reference's."""
    fit = fitted(BLISS_DOSE, BLISS_N, BLISS_KILLED, "logit")
    place, u = fit.place(0.5)
    # independent method: R's MASS dose.p
    assert place == pytest.approx(1.7717210, abs=1e-7)
    assert u == pytest.approx(0.0038580521, abs=1e-8)
    assert fit.place(0.05)[0] == pytest.approx(1.6858029, abs=1e-7)
    assert fit.place(0.95)[0] == pytest.approx(1.8576390, abs=1e-7)


def test_bliss_with_the_wrong_copy_differs() -> None:
    """The copy with 60 killed in row 7 gives another line, so the check above can tell the two apart."""
    killed = BLISS_KILLED.copy()
    killed[6] = 60.0
    fit = fitted(BLISS_DOSE, BLISS_N, killed, "logit")
    # independent method: statsmodels
    assert (fit.intercept, fit.slope) == pytest.approx((-59.518, 33.586), abs=5e-4)


def test_finney_probit_with_standard_errors() -> None:
    """Rotenone's probit line has the reference's coefficients, standard errors and deviance."""
    fit = fitted(FINNEY_DOSE, FINNEY_N, FINNEY_AFFECTED, "probit")
    # independent method: statsmodels and R's glm
    assert (fit.intercept, fit.slope) == pytest.approx((-2.88746, 4.21320), abs=5e-6)
    assert (fit.intercept_u, fit.slope_u) == pytest.approx((0.35104, 0.48056), abs=1e-5)
    assert fit.deviance == pytest.approx(1.73897, abs=5e-6)


def test_finney_median_dose_and_fieller() -> None:
    """Rotenone's median dose, its standard error and Fieller interval are the reference's, and near Finney's print."""
    fit = fitted(FINNEY_DOSE, FINNEY_N, FINNEY_AFFECTED, "probit")
    place, u = fit.place(0.5)
    # independent method: R
    assert place == pytest.approx(0.685338, abs=5e-7)
    assert u == pytest.approx(0.022068, abs=1e-6)
    interval = fit.fieller(0.5)
    assert interval is not None
    assert (10.0 ** interval[0], 10.0 ** interval[1]) == pytest.approx((4.36449, 5.35439), abs=2e-5)
    # from memory: Finney prints log LD50 0.686 and LD50 4.85
    assert place == pytest.approx(0.686, abs=1e-3)
    assert 10.0**place == pytest.approx(4.85, abs=1e-2)


def test_finney_logit_median_dose() -> None:
    """With the logit the median dose is the reference's."""
    fit = fitted(FINNEY_DOSE, FINNEY_N, FINNEY_AFFECTED, "logit")
    assert 10.0 ** fit.place(0.5)[0] == pytest.approx(4.82892, abs=5e-6)  # independent method: R


REFERENCE_LINK = {
    "logit": sm.families.links.Logit,
    "probit": sm.families.links.Probit,
    "cloglog": sm.families.links.CLogLog,
}


@pytest.mark.parametrize("link", ["logit", "probit", "cloglog"])
@pytest.mark.parametrize("seed", [1, 2, 3, 4, 5])
def test_against_reference_library(link: Link, seed: int) -> None:
    """On random data the whole covariance matrix is statsmodels' (expected information)."""
    rng = np.random.default_rng(seed)
    x = rng.uniform(10.0, 30.0, 12)
    n = rng.integers(3, 20, 12).astype(float)
    k = rng.binomial(n.astype(int), 1.0 / (1.0 + np.exp(-(x - 20.0) / 3.0))).astype(float)
    fit = fitted(x, n, k, link)
    family = sm.families.Binomial(link=REFERENCE_LINK[link]())
    reference = sm.GLM(np.stack([k, n - k], axis=1), sm.add_constant(x), family=family).fit(tol=1e-13, maxiter=200)
    # independent method: statsmodels
    assert (fit.intercept, fit.slope) == pytest.approx(tuple(reference.params), rel=1e-6)
    assert fit.covariance == pytest.approx(np.asarray(reference.cov_params()), rel=1e-5)
    assert fit.deviance == pytest.approx(reference.deviance, rel=1e-8)


@pytest.mark.parametrize(
    ("successes", "between", "rising"),
    [
        ([0, 0, 5, 5], (2.0, 3.0), True),
        ([5, 5, 0, 0], (2.0, 3.0), False),
        ([0, 3, 5, 5], (2.0, 2.0), True),
        ([0, 0, 0, 0], (-math.inf, math.inf), True),
        ([5, 5, 5, 5], (-math.inf, math.inf), False),
    ],
    ids=["complete", "complete, falling", "quasi-complete", "no success", "no failure"],
)
def test_separated_data_are_said_to_be(successes: list[int], between: tuple[float, float], rising: bool) -> None:
    """Data that a value of x divides have no finite fit, and the result says where they divide."""
    result = fit_binary(np.array([1.0, 2.0, 3.0, 4.0]), np.full(4, 5.0), np.array(successes, dtype=float))
    assert isinstance(result, Separated)
    assert (result.between, result.rising) == (between, rising)


@pytest.mark.parametrize(
    ("x", "trials", "successes", "text"),
    [
        ([1.0, 2.0], [5.0, 5.0], [6.0, 1.0], "cannot be"),
        ([1.0, 1.0], [5.0, 5.0], [3.0, 1.0], "one setting"),
        ([1.0, 2.0], [5.0], [3.0], "equally long"),
    ],
)
def test_impossible_input_is_refused(x: list[float], trials: list[float], successes: list[float], text: str) -> None:
    """Counts that are none, and a covariate that never varies, are refused with the reason."""
    with pytest.raises(FitFailed, match=text):
        fit_binary(np.array(x), np.array(trials), np.array(successes))


def test_fieller_without_finite_interval() -> None:
    """When the slope is not told from zero there is no finite interval, and none is given."""
    fit = fitted(np.array([1.0, 2.0, 3.0]), np.full(3, 4.0), np.array([2.0, 1.0, 3.0]), "logit")
    assert fit.fieller(0.5) is None
