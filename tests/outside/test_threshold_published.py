"""Published threshold data through the tool's own laws and posterior: up-and-down, probit and logit.

`test_binary_response` fits the same data by regression; here they come out of what findings are made of: `laws` and
`thresholds`. Doses are taken times 100, so that the rounding of large nights (to 0.01) stays far below them.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import optimize

from sweeprig.characterise import combine
from sweeprig.characterise.binary_fit import BinaryFit, fit_binary
from sweeprig.characterise.duties_found import START, Kind, threshold
from sweeprig.characterise.evidence import Chosen
from sweeprig.characterise.thresholds import SpreadPrior, posterior
from sweeprig.laws import (
    EXPONENTIAL,
    GAUSSIAN,
    GUMBEL_SD,
    LN2,
    LOGISTIC,
    LOGISTIC_SD,
    Law,
    Trial,
    log_likelihood,
    summed,
)

# Bliss 1935, beetles (certified: as printed in Dobson): log10 dose, exposed, killed
BLISS = (
    (1.6907, 59, 6), (1.7242, 60, 13), (1.7552, 62, 18), (1.7842, 56, 28), (1.8113, 63, 52), (1.8369, 59, 53),
    (1.8610, 62, 61), (1.8839, 60, 60),
)  # fmt: skip
# Finney 1971, rotenone (certified: data set finney71 of R's drc): dose, exposed, affected
FINNEY = ((10.2, 50, 44), (7.7, 49, 42), (5.1, 46, 24), (3.8, 48, 16), (2.6, 50, 6))
# Gorla et al. 2017, material 951, Int. J. Appl. Eng. Res. 12(21) (certified): load in kN, failed
LOADS_KN = (36, 35, 36, 37, 38, 39, 38, 37, 38, 37, 36, 35, 36, 37, 36)
FAILED = (1, 0, 0, 0, 0, 1, 1, 0, 1, 1, 1, 0, 0, 1, 1)
SCALE = 100.0


def trials(rows: tuple[tuple[float, int, int], ...], sign: float = 1.0) -> list[Trial]:
    """One trial an insect, "success" where it responded; with sign −1 the dose turned round and response a failure."""
    made: list[Trial] = []
    for dose, exposed, hit in rows:
        for index in range(exposed):
            good = (index < hit) == (sign > 0.0)
            made.append(Trial(len(made), sign * SCALE * dose, float(good), None if good else 1.0))
    return made


def most_likely(law: Law, made: list[Trial], start: tuple[float, float]) -> tuple[float, float, float]:
    """(median, spread, log-likelihood) of greatest likelihood."""
    data = summed(made)

    def minus(at: np.ndarray) -> float:
        return -float(log_likelihood(law, data, np.asarray(at[0]), np.asarray(math.exp(at[1]))))

    best = optimize.minimize(
        minus,
        np.array([start[0], math.log(start[1])]),
        method="Nelder-Mead",
        options={"xatol": 1e-10, "fatol": 1e-12, "maxiter": 4000, "maxfev": 4000},
    )
    assert best.success
    return float(best.x[0]), math.exp(float(best.x[1])), -float(best.fun)


def saturated(rows: tuple[tuple[float, int, int], ...]) -> float:
    def part(count: int, of: int) -> float:
        return count * math.log(count / of) if count else 0.0

    return sum(part(hit, exposed) + part(exposed - hit, exposed) for _, exposed, hit in rows)


@pytest.mark.parametrize(
    ("law", "unit", "intercept", "slope", "deviance"),
    [
        # certified: Dobson's table and the glmlab page print these digits of the logit
        (LOGISTIC, LOGISTIC_SD, -60.717455, 34.270326, 11.232231),
        # independent method: statsmodels and R's glm agree on these digits of the probit
        (GAUSSIAN, 1.0, -34.935259, 19.727934, 10.119758),
    ],
    ids=["logit", "probit"],
)
def test_beetles_come_out_of_the_laws(law: Law, unit: float, intercept: float, slope: float, deviance: float) -> None:
    """The laws' likelihood of Bliss's beetles has its top where logit and probit have theirs, with their deviance."""
    median, spread, value = most_likely(law, trials(BLISS), (177.0, 5.0))
    assert SCALE * unit / spread == pytest.approx(slope, rel=1e-5)
    assert -median * unit / spread == pytest.approx(intercept, rel=1e-5)
    assert 2.0 * (saturated(BLISS) - value) == pytest.approx(deviance, abs=1e-5)


def test_beetles_turned_round_are_the_exponential_law() -> None:
    """With the dose turned round and death a failure, the complementary log-log line is the law of stalling."""
    median, spread, value = most_likely(EXPONENTIAL, trials(BLISS, -1.0), (-177.0, 5.0))
    slope = SCALE * GUMBEL_SD / spread
    # independent method: statsmodels and R's glm (complementary log-log)
    assert slope == pytest.approx(22.041169, rel=1e-5)
    assert math.log(LN2) + GUMBEL_SD * median / spread == pytest.approx(-39.572311, rel=1e-5)
    assert 2.0 * (saturated(BLISS) - value) == pytest.approx(3.446439, abs=1e-5)


@pytest.mark.parametrize(
    ("law", "rows", "place", "u"),
    [
        # independent method: R's MASS dose.p of the logit line; R's probit line
        (LOGISTIC, BLISS, 1.7717210, 0.0038580521),
        (GAUSSIAN, tuple((math.log10(dose), n, k) for dose, n, k in FINNEY), 0.685338, 0.022068),
    ],
    ids=["beetles, logit", "rotenone, probit"],
)
def test_posterior_of_the_median_dose(
    law: Law, rows: tuple[tuple[float, int, int], ...], place: float, u: float
) -> None:
    """With hundreds of trials the posterior's median and standard deviation are the dose and its standard error.

    They need not agree closer than the posterior's own skewness allows: a fifth of the standard error, and a tenth of
    it in its size.
    """
    sample = posterior(law, summed(trials(rows)), SpreadPrior(10.0, 3.0)).at(0.5) / SCALE
    assert combine.quantile(sample, 0.5) == pytest.approx(place, abs=0.2 * u)
    assert float(np.std(sample)) == pytest.approx(u, rel=0.1)


def test_rotenone_interval_is_fiellers() -> None:
    """The 95 % interval of rotenone's median dose is Fieller's, to a tenth of its width."""
    rows = tuple((math.log10(dose), n, k) for dose, n, k in FINNEY)
    sample = posterior(GAUSSIAN, summed(trials(rows)), SpreadPrior(10.0, 3.0)).at(0.5) / SCALE
    low, high = (10.0 ** combine.quantile(sample, p) for p in (0.025, 0.975))
    # independent method: R (Fieller 1954)
    assert (low, high) == pytest.approx((4.36449, 5.35439), abs=0.1)


def up_and_down() -> list[Trial]:
    """Loads rise until a specimen fails: a specimen that survives at a load is a failure to break, so duty = load."""
    return [
        Trial(i, float(kn), float(broke), None if broke else 1.0)
        for i, (kn, broke) in enumerate(zip(LOADS_KN, FAILED, strict=True))
    ]


def test_up_and_down_data_give_the_published_strength() -> None:
    """Fifteen specimens up and down: the published median strength 36.63 kN (s.e. 0.62, Dixon and Mood) and the tool's
    finding, of the Gaussian law that Dixon and Mood assume, agree within half of the published standard error."""
    kind = Kind("load", (GAUSSIAN,), SpreadPrior(2.0, 1.0), START.flags, timed=False)
    finding = threshold(kind, Chosen(tuple(up_and_down())), 0.0).finding(0.5)
    assert finding.value == pytest.approx(36.63, abs=0.31)  # certified
    assert finding.u is not None
    assert finding.u >= 0.62  # the published error takes the spread as known; what does not can only be wider


def test_up_and_down_error_with_the_spread_known() -> None:
    """Told the spread that Dixon and Mood found (1.844 kN, as recomputed), the posterior has their standard error.

    Theirs is an approximation for many specimens; a tenth is left for it.
    """
    sample = posterior(GAUSSIAN, summed(up_and_down()), SpreadPrior(1.84417, 0.01)).at(0.5)
    assert float(np.std(sample)) == pytest.approx(0.62, rel=0.1)  # certified


def test_up_and_down_data_by_probit() -> None:
    """The probit line of the same data has its median at the tool's most likely one, within the published error."""
    made = up_and_down()
    levels = np.array(sorted(set(LOADS_KN)), dtype=float)
    n = np.array([sum(load == level for load in LOADS_KN) for level in levels], dtype=float)
    k = np.array(
        [sum(f for load, f in zip(LOADS_KN, FAILED, strict=True) if load == level) for level in levels], dtype=float
    )
    line = fit_binary(levels, n, k, "probit")
    assert isinstance(line, BinaryFit)
    median, spread, _ = most_likely(GAUSSIAN, made, (36.6, 1.8))
    assert (median, spread) == pytest.approx((line.place(0.5)[0], 1.0 / line.slope), rel=1e-5)  # independent method
    assert median == pytest.approx(36.63, abs=0.31)  # certified
