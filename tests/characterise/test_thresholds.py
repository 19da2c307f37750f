"""The posterior on its grid, against plain integration; bounds; invariances; how samples are summed up."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sweeprig.characterise import combine
from sweeprig.characterise.duties_found import STALL, START, Kind, start_stall_hysteresis, threshold
from sweeprig.characterise.evidence import Chosen
from sweeprig.characterise.explained import fit
from sweeprig.characterise.thresholds import STALL_PRIOR, SpreadPrior, bound_without_contrast, posterior
from sweeprig.laws import EXPONENTIAL, GAUSSIAN, STALL_LAWS, Floats, Law, Trial, log_likelihood, summed

LADDER = (
    *(Trial(i, duty, 1.0) for i, duty in enumerate((12.0, 11.5, 11.0, 10.5, 10.0, 12.0, 11.5, 11.0, 10.5))),
    Trial(20, 9.5, 0.1, 0.0125),
    Trial(21, 10.0, 0.6, 0.0125),
    Trial(22, 10.5, 0.8, 0.0125),
    Trial(23, 9.5, 0.3, 0.0125),
)
SEPARABLE = (*(Trial(i, 11.0 + 0.5 * i, 1.0) for i in range(4)), *(Trial(9 + i, 10.5, 0.1, 0.01) for i in range(3)))


def plain(law: Law, trials: tuple[Trial, ...], probability: float) -> Floats:
    """2.5, 50 and 97.5 % of the duty for `probability` by a fixed, fine grid without any closing in."""
    median, log_spread = np.linspace(2.0, 16.0, 2801)[None, :], np.linspace(-5.2, 2.8, 161)[:, None]
    weight = np.exp(
        log_likelihood(law, summed(trials), median, np.exp(log_spread)) + STALL_PRIOR.log_density(log_spread)
    )
    place = np.broadcast_to(median + law.offset(probability) * np.exp(log_spread), weight.shape)
    order = np.argsort(place, axis=None)
    cumulative = np.cumsum(weight.ravel()[order])
    return np.asarray(np.interp([0.025, 0.5, 0.975], cumulative / cumulative[-1], place.ravel()[order]))


@pytest.mark.parametrize("law", STALL_LAWS, ids=lambda law: law.name)
@pytest.mark.parametrize("trials", [LADDER, SEPARABLE], ids=["ladder", "separable"])
@pytest.mark.parametrize("probability", [0.5, 0.99])
def test_grid_is_the_integral(law: Law, trials: tuple[Trial, ...], probability: float) -> None:
    """Quantiles of the adapted grid are those of plain fine integration, to a tenth of the standard uncertainty."""
    sample = posterior(law, summed(trials), STALL_PRIOR).at(probability)
    u = float(np.std(sample))
    found = [combine.quantile(sample, p) for p in (0.025, 0.5, 0.975)]
    # independent method: plain integration, no sharing of the grid; prior density and likelihood are tested elsewhere
    assert found == pytest.approx(plain(law, trials, probability).tolist(), abs=0.1 * u)


def test_evidence_is_the_integral() -> None:
    """The ratio by which one law is preferred to the other is that of the plain integrals."""
    posteriors = [posterior(law, summed(LADDER), STALL_PRIOR) for law in STALL_LAWS]
    median, log_spread = np.linspace(2.0, 16.0, 1401)[None, :], np.linspace(-4.5, 2.5, 141)[:, None]
    prior = STALL_PRIOR.log_density(log_spread)
    sums = [np.exp(log_likelihood(law, summed(LADDER), median, np.exp(log_spread)) + prior).sum() for law in STALL_LAWS]
    ratio = posteriors[0].log_evidence - posteriors[1].log_evidence
    assert ratio == pytest.approx(math.log(float(sums[0] / sums[1])), abs=0.03)  # independent method


def test_many_trials_may_be_rounded() -> None:
    """Above the number of trials where duties are rounded, the findings are those of the unrounded sums."""
    rng = np.random.default_rng(8)
    trials = []
    for index in range(401):
        duty = float(rng.uniform(9.5, 11.5))
        stop = rng.exponential() / float(EXPONENTIAL.cumulative(np.array((duty - 10.0) / 0.4)))
        trials.append(Trial(index, duty, min(stop, 1.0), 0.01234 if stop < 1.0 else None))
    rounded, exact = summed(trials), summed(trials[:200])
    other = summed(trials[200:])
    assert rounded.duty.size < exact.duty.size + other.duty.size
    lost = []
    for median, spread in ((9.9, 0.35), (10.0, 0.4), (10.1, 0.5)):
        place = np.array(median), np.array(spread)
        whole = log_likelihood(EXPONENTIAL, exact, *place) + log_likelihood(EXPONENTIAL, other, *place)
        # own bound: differences of log-likelihood below 0.1 move no 95 % interval by more than a few hundredths of u
        lost.append(float(log_likelihood(EXPONENTIAL, rounded, *place) - whole))
    assert max(lost) - min(lost) < 0.1


def test_separable_data_have_a_proper_answer() -> None:
    """When all stops lie below all survivals the stall duty lies near the gap, with an interval that is finite."""
    found = threshold(STALL, Chosen(SEPARABLE), 0.0).finding(0.5)
    assert found.value is not None
    assert found.low is not None
    assert found.high is not None
    assert 10.3 < found.value < 11.0
    assert 10.0 < found.low < found.value < found.high < 12.0


@settings(max_examples=15, deadline=None)
@given(st.floats(-5.0, 70.0))
def test_findings_shift_with_duty(shift: float) -> None:
    """Trials at duties shifted by a constant give findings shifted by it, u unchanged."""
    moved = tuple(Trial(t.hold, t.duty_percent + shift, t.survived, t.failed) for t in LADDER)
    for probability in (0.5, 0.99):
        here = threshold(STALL, Chosen(LADDER), 0.02).finding(probability)
        there = threshold(STALL, Chosen(moved), 0.02).finding(probability)
        assert here.value is not None
        assert here.u is not None
        assert there.value == pytest.approx(here.value + shift, abs=0.02 * here.u)
        assert there.u == pytest.approx(here.u, rel=0.01)


def test_more_trials_sharpen() -> None:
    """Ten times the same trials give an interval at most half as wide."""
    once = threshold(STALL, Chosen(LADDER), 0.0).finding(0.5)
    often = threshold(STALL, Chosen(LADDER * 10), 0.0).finding(0.5)
    assert once.u is not None
    assert often.u is not None
    assert often.u < 0.5 * once.u


def test_hull_is_over_the_laws() -> None:
    """The interval holds 95 % under each law that is kept, under one of them no more, and reaches over both."""
    fitted = fit(STALL_LAWS, summed(LADDER), STALL_PRIOR)
    assert [one.law for one in fitted.kept] == [EXPONENTIAL, GAUSSIAN]
    for probability in (0.5, 0.99):
        samples = fitted.at(probability)
        shown = combine.summary(samples)
        within = [float(np.mean((one >= shown.low) & (one <= shown.high))) for one in samples]
        # exact, to two of the 256 values of a sample
        assert min(within) == pytest.approx(0.95, abs=2.0 / 256.0)
        assert shown.low <= min(combine.quantile(one, 0.05) for one in samples)
        assert shown.high >= max(combine.quantile(one, 0.95) for one in samples)
        assert shown.upper == max(combine.quantile(one, 0.95) for one in samples)
    assert "hull" in threshold(STALL, Chosen(LADDER), 0.0).finding(0.99).method


def test_hull_of_laws_far_apart_cuts_the_outer_tails_only() -> None:
    """Two laws that lie far apart have an interval from the lower one's 5 % to the upper one's 95 %: the tail within
    belongs to the interval, so the one outside may be all of the 5 %; of a single law it is 2.5 to 97.5 %."""
    low, high = np.linspace(0.0, 1.0, 256), np.linspace(10.0, 11.0, 256)
    both, one = combine.summary([low, high]), combine.summary([low])
    assert (both.low, both.high) == pytest.approx((0.05, 10.95), abs=0.005)  # exact: of a rectangle
    assert (one.low, one.high) == pytest.approx((0.025, 0.975), abs=0.005)


def test_a_law_that_explains_less_widens_less() -> None:
    """A law ten times worse than the best stretches the interval less than one as good, and still does; the best law
    keeps its 95 %."""
    best, other = np.linspace(0.0, 1.0, 256), np.linspace(0.5, 1.5, 256)
    alone, worse, alike = (
        combine.summary(s, w) for s, w in (([best], ()), ([best, other], (1.0, 10.0)), ([best, other], ()))
    )
    assert alone.high < worse.high < alike.high
    assert float(np.mean((best >= worse.low) & (best <= worse.high))) >= 0.95 - 2.0 / 256.0


def test_law_that_the_data_reject_is_left_out() -> None:
    """Many trials after the exponential law reject the Gaussian one, and the finding says so."""
    rng = np.random.default_rng(4)
    trials = []
    for index in range(2500):
        duty = float(rng.choice([9.0, 9.4, 9.8, 10.2, 10.6, 11.0, 11.4]))
        stop = rng.exponential() / float(EXPONENTIAL.cumulative(np.array((duty - 10.0) / 0.5)))
        trials.append(Trial(index, duty, min(stop, 1.0), 0.01 if stop < 1.0 else None))
    found = threshold(STALL, Chosen(tuple(trials)), 0.0).finding(0.99)
    assert "Gaussian threshold rejected by the data" in found.assumes
    assert "hull" not in found.method
    assert found.value == pytest.approx(10.0 + 0.5 * EXPONENTIAL.offset(0.99), abs=4.0 * (found.u or 0.0))


@pytest.mark.parametrize(
    ("kind", "survived", "flag", "bound"),
    [
        (STALL, True, "never_stopped", "upper"),
        (STALL, False, "always_stopped", "lower"),
        (START, True, "always_started", "upper"),
        (START, False, "never_started", "lower"),
    ],
    ids=lambda value: str(getattr(value, "trial", value)),
)
def test_trials_that_all_end_alike_give_a_bound(kind: Kind, survived: bool, flag: str, bound: str) -> None:
    """Without a single event the other way the finding is one-sided, says so, and has no u."""
    trials = tuple(
        Trial(i, 20.0 + 0.5 * (i % 4), 1.0 if survived else 0.0, None if survived else 1.0) for i in range(8)
    )
    made = threshold(kind, Chosen(trials), 0.1)
    found = made.finding(0.5)
    assert flag in found.flags
    assert found.bound == bound
    assert found.u is None
    assert found.value == (found.high if bound == "upper" else found.low)
    assert (found.low is None) == (bound == "upper")
    assert made.upper(0.99).found == survived


def test_bound_moves_with_the_accuracy_of_duty() -> None:
    """A duty known less well moves an upper bound up by 1.645 of its standard uncertainty."""
    trials = Chosen(tuple(Trial(i, 20.0, 1.0) for i in range(8)))
    sharp, blunt = (threshold(STALL, trials, u).finding(0.5).value for u in (0.0, 0.2))
    assert sharp is not None
    assert blunt == pytest.approx(sharp + 1.6449 * 0.2, abs=1e-4)  # exact: normal quantile


def test_bound_falls_with_more_survivals() -> None:
    """Each further survival at the lowest duty lowers the bound; survivals far above do nothing."""
    prior = SpreadPrior(0.3)
    few = bound_without_contrast(STALL_LAWS, summed([Trial(i, 20.0, 1.0) for i in range(3)]), prior, 0.5)
    more = bound_without_contrast(STALL_LAWS, summed([Trial(i, 20.0, 1.0) for i in range(6)]), prior, 0.5)
    trials = [Trial(i, 20.0, 1.0) for i in range(6)] + [Trial(9, 90.0, 1.0)]
    assert more < few
    assert bound_without_contrast(STALL_LAWS, summed(trials), prior, 0.5) == pytest.approx(more, abs=1e-3)


def test_no_trials() -> None:
    """Without trials there is no value but a reason."""
    made = threshold(STALL, Chosen(()), 0.0)
    assert not made.finding(0.5).found
    assert "no stall trial" in made.finding(0.5).reason
    assert not made.upper(0.99).found


def test_few_failures_and_tail_not_tried_are_said() -> None:
    """A night with three stops is flagged, and so is a tail in which no hold was placed."""
    far = (*(Trial(i, 30.0, 1.0) for i in range(9)), *(Trial(20 + i, 5.0, 0.1, 0.01) for i in range(9)))
    assert "few_failures" in threshold(STALL, Chosen(SEPARABLE), 0.0).finding(0.5).flags
    assert "few_failures" not in threshold(STALL, Chosen(LADDER), 0.0).finding(0.5).flags
    assert "tail_not_tried" in threshold(STALL, Chosen(far), 0.0).finding(0.99).flags
    assert "tail_not_tried" not in threshold(STALL, Chosen(LADDER), 0.0).finding(0.99).flags


def test_hysteresis_adds_in_squares() -> None:
    """Start minus stall has the difference of the values and, the trials being independent, u in quadrature."""
    start_trials = tuple(Trial(i, 15.0 + 0.5 * i, float(i > 4), None if i > 4 else 1.0) for i in range(10)) * 3
    # enough trials that the distributions are not skewed: the value is a median, and it is means that subtract
    stall, start = threshold(STALL, Chosen(LADDER * 4), 0.3), threshold(START, Chosen(start_trials), 0.3)
    found = start_stall_hysteresis(start, stall)
    samples = [one.sample(0.5) for one in (start, stall)]
    means, deviations = zip(*[(float(np.mean(s)), float(np.std(s))) for s in samples if s is not None], strict=True)
    # exact: means subtract and variances add; the accuracy of duty cancels
    assert found.value == pytest.approx(means[0] - means[1], abs=0.1 * deviations[1])
    assert found.u == pytest.approx(math.hypot(*deviations), rel=0.02)


def test_widened_sample_has_both_uncertainties() -> None:
    """A sample plus an error has the variances' sum."""
    sample = combine.equally_likely(np.linspace(0.0, 1.0, 1001))
    assert float(np.std(combine.widened(sample, 0.5))) == pytest.approx(math.sqrt(1 / 12 + 0.25), rel=5e-3)  # exact
    assert combine.widened(sample, 0.0) is sample


def test_carried_sample_follows_the_curve() -> None:
    """A normal sample through a square has the mean m² + u² that first order would miss."""
    normal = combine.widened(np.zeros(256), 0.3) + 1.0
    squared = combine.carried(normal, np.square, lambda x: 0.0 * x)
    assert float(np.mean(squared)) == pytest.approx(1.0 + 0.09, rel=5e-3)  # exact: second moment of a normal
