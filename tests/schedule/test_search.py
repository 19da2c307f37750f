"""The choice of the next trial from sums alone: where, how long, what it is worth, and when it is enough."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from sweeprig.characterise.thresholds import STALL_PRIOR, START_PRIOR, posterior
from sweeprig.laws import EXPONENTIAL, LOGISTIC, Law, log_likelihood
from sweeprig.schedule import posterior as posterior_module
from sweeprig.schedule.adaptive import END_WITHIN
from sweeprig.schedule.keys import Key, evidence_of, key_of
from sweeprig.schedule.posterior import NO_TRIALS, Prior, cells
from sweeprig.schedule.search import BINARY, Choice, Question, best
from sweeprig.schedule.tally import Sums

HOLD_S, DOWN_S = 20.0, 1.0
STALL = Question(
    law=EXPONENTIAL, prior=Prior(0.0, 100.0, STALL_PRIOR.median_percent, STALL_PRIOR.log_sd),
    low=0.0, high=100.0, step=0.1, parts=(0.25, 0.5, 1.0, 2.0), whole_s=HOLD_S,
    before_s=5.5, after_failure_s=10.0, coming_down_s=DOWN_S, wanted=((0.99, 0.25),), unit=HOLD_S,
)  # fmt: skip
START = Question(
    law=LOGISTIC, prior=Prior(0.0, 100.0, START_PRIOR.median_percent, START_PRIOR.log_sd),
    low=0.0, high=100.0, step=0.1, parts=(1.0,),
    whole_s=5.0, before_s=13.0, after_failure_s=10.0, coming_down_s=0.0, wanted=((0.99, 0.5),), likelihood=BINARY,
)  # fmt: skip


def trial(sums: Sums, duty: float, seconds: float, place: float, spread: float, rng: np.random.Generator) -> None:
    """One stall trial by the law of definitions.md: exponential stop time, half of the holds survived at `place`."""
    hazard = math.log(2.0) / HOLD_S * math.exp(min(-1.2825498 * (duty - place) / spread, 600.0))
    stops = rng.exponential() / max(hazard, 1e-300)
    if stops > seconds:
        sums.add(duty, seconds, None)
    elif stops < DOWN_S:
        sums.add(duty, 0.0, DOWN_S)
    else:
        sums.add(duty, math.floor(stops / 0.2) * 0.2, 0.2)


def searched(question: Question, place: float, spread: float, seed: int, most: int = 300) -> tuple[Sums, list[Choice]]:
    sums, rng, choices = Sums(), np.random.default_rng(seed), []
    for _ in range(most):
        choices.append(best(question, key_of(sums)))
        if choices[-1].reached:
            break
        trial(sums, choices[-1].duty_percent, choices[-1].part * HOLD_S, place, spread, rng)
    return sums, choices


@pytest.mark.parametrize("spread", [0.1, 0.4, 0.8])
@pytest.mark.parametrize("count", [30, 60])
def test_the_belief_is_that_of_the_findings(spread: float, count: int) -> None:
    """Place and 99 % duty have the mean and the standard error that the findings' own fit gives to the same trials.

    Compared are the cells that the search keeps, those above exp(−9) of the best. Tolerance: a tenth of the standard
    error, which no choice of a hold notices (common practice, no source). Seeded.
    """
    sums, rng = Sums(), np.random.default_rng((11, count))
    for duty in rng.uniform(15.0 - 3.0 * spread, 15.0 + 4.0 * spread, count):
        trial(sums, round(float(duty), 2), 20.0, 15.0, spread, rng)
    key = key_of(sums)
    quick = cells(EXPONENTIAL, key, HOLD_S, STALL.prior, DOWN_S / HOLD_S)
    full = posterior(EXPONENTIAL, evidence_of(key, HOLD_S), STALL_PRIOR)
    kept = full.weight > math.exp(-9.0) * full.weight.max()
    weight = full.weight[kept]
    for probability in (0.5, 0.99):
        duty, exact = quick.duty(probability), full.duty(probability)[kept]
        mean, exactly = float(quick.weight @ duty), float(np.average(exact, weights=weight))
        u = math.sqrt(float(np.average((exact - exactly) ** 2, weights=weight)))
        assert mean == pytest.approx(exactly, abs=0.1 * u)
        assert math.sqrt(float(quick.weight @ (duty - mean) ** 2)) == pytest.approx(u, rel=0.1)


def test_the_belief_of_starts_is_that_of_the_findings() -> None:
    """Starts, which only succeed or fail, likewise; tolerance as above."""
    rng, sums = np.random.default_rng(12), Sums()
    for duty in np.round(rng.uniform(16.0, 20.0, 30), 1).tolist():
        began = rng.random() < 1.0 / (1.0 + math.exp(-1.8138 * (duty - 18.0) / 0.6))
        sums.add(duty, float(began), None if began else 1.0)
    quick = cells(LOGISTIC, key_of(sums), 1.0, START.prior)
    full = posterior(LOGISTIC, evidence_of(key_of(sums), 1.0), START_PRIOR)
    exact = full.duty(0.99)
    mean = float(np.sum(full.weight * exact))
    u = math.sqrt(float(np.sum(full.weight * (exact - mean) ** 2)))
    assert float(quick.weight @ quick.duty(0.99)) == pytest.approx(mean, abs=0.1 * u)
    assert best(START, key_of(sums)).u[0.99] == pytest.approx(u, rel=0.1)


@pytest.mark.parametrize("spread", [0.02, 0.1, 0.4, 0.8, 3.0])
def test_every_search_ends_with_both_results_and_the_tail_tried(spread: float) -> None:
    """From nothing known, narrow and wide laws alike: it ends, with stops and survivals, and with time in the tail
    where a whole hold fails with a chance of 2 to 20 %, if the step of duty has a place there."""
    sums, choices = searched(STALL, 17.3, spread, 5, 1500)
    assert choices[-1].reached
    assert choices[-1].u[0.99] <= 0.25
    assert sums.successes > 0
    assert sums.failures > 0
    believed = cells(EXPONENTIAL, key_of(sums), HOLD_S, STALL.prior, DOWN_S / HOLD_S)
    failing = believed.failing(np.array(sorted(sums.exposure)))
    tail = bool(np.any((failing >= 0.02) & (failing <= 0.2)))
    grid = believed.failing(np.round(np.arange(150, 400) * STALL.step, 9))
    assert tail or not np.any((grid >= 0.02) & (grid <= 0.2))


def test_a_first_trial_halves_what_is_possible() -> None:
    """With nothing known the place may be anywhere: the first trial lies well inside, and the chance is about even."""
    choice = best(replace(STALL, wanted=((0.5, 0.2),)), NO_TRIALS)
    assert 30.0 < choice.duty_percent < 70.0
    assert 0.3 < choice.failing < 0.7
    assert not choice.reached


@pytest.mark.parametrize("law", [EXPONENTIAL, LOGISTIC])
def test_a_motor_that_never_fails_is_left_at_the_lowest_duty(law: Law) -> None:
    """Every trial succeeds: the search goes down to the lowest duty allowed, and is then done."""
    question = replace(
        STALL if law is EXPONENTIAL else START, low=10.0, prior=Prior(10.0, 100.0, 0.3), end_within=END_WITHIN
    )
    sums = Sums()
    for _ in range(40):
        choice = best(question, key_of(sums))
        if choice.reached:
            break
        sums.add(choice.duty_percent, choice.part * question.unit, None)
    assert choice.reached
    assert min(sums.exposure) == 10.0
    assert sums.successes <= 25


def test_a_motor_that_never_starts_is_left_at_the_highest_duty() -> None:
    """Every trial fails: the search goes up to the highest duty allowed, and is done after three there at most."""
    question = replace(START, high=40.0, prior=Prior(0.0, 40.0, 0.8), end_within=END_WITHIN)
    sums = Sums()
    for _ in range(40):
        choice = best(question, key_of(sums))
        if choice.reached:
            break
        sums.add(choice.duty_percent, 0.0, 1.0)
    assert choice.reached
    assert 1 <= sums.events[40.0, 1.0] <= 3
    assert sums.failures <= 20


def test_long_holds_where_failures_are_rare_and_relaunching_is_dear() -> None:
    """The dearer the relaunch, the longer the exposure that is chosen at a duty."""
    sums, rng = Sums(), np.random.default_rng(3)
    for duty in np.repeat([14.5, 15.0, 15.5, 16.0], 4).tolist():
        trial(sums, duty, 20.0, 15.0, 0.4, rng)
    there = replace(STALL, step=16.0)
    cheap = best(replace(there, before_s=0.5, after_failure_s=0.0), key_of(sums))
    dear = best(replace(there, before_s=300.0), key_of(sums))
    assert (cheap.duty_percent, dear.duty_percent) == (16.0, 16.0)
    assert cheap.part < dear.part == 2.0
    assert cheap.gain_per_s > dear.gain_per_s


def test_expected_seconds_are_counted_whole() -> None:
    """A trial that can only survive takes relaunch and hold; one that fails at once takes relaunch and cool-down."""
    sums = Sums()
    for _ in range(30):
        sums.add(15.0, 20.0, None)
        sums.add(14.0, 0.0, DOWN_S)
    sure = best(replace(STALL, low=30.0, high=30.0, parts=(0.5,)), key_of(sums))
    assert sure.duty_percent == 30.0
    assert sure.failing == pytest.approx(0.0, abs=0.01)
    assert sure.seconds == pytest.approx(5.5 + 10.0, abs=0.2)
    lost = best(replace(STALL, low=5.0, high=5.0, parts=(0.5,)), key_of(sums))
    assert lost.failing == pytest.approx(1.0, abs=0.01)
    assert lost.seconds == pytest.approx(5.5 + 10.0, abs=0.2)


def test_ties_go_to_the_lower_duty_and_the_shorter_hold() -> None:
    """Where no trial tells anything (the place is known already), the lowest of the duties and the shortest of the
    lengths are taken."""
    question = replace(STALL, low=79.5, high=80.5, prior=Prior(80.0, 80.0, 0.3, 1e-9), wanted=((0.5, 0.2),))
    choice = best(question, key_of(Sums({80.0: 20.0, 79.9: 0.0}, {(79.9, 1.0): 1})))
    assert choice.gain_per_s == 0.0
    assert (choice.duty_percent, choice.part) == (79.6, 0.25)


def test_neighbours_draw_the_first_trial_near_and_rule_nothing_out() -> None:
    """With another condition's place the first trials lie nearer to it, a place far off keeps a chance of a fifth, and
    many trials elsewhere outweigh it at once."""
    told = replace(STALL, prior=replace(STALL.prior, neighbours=((14.0, 0.2),)), wanted=((0.5, 0.2),))
    plain = replace(STALL, wanted=((0.5, 0.2),))
    assert abs(best(told, NO_TRIALS).duty_percent - 14.0) < abs(best(plain, NO_TRIALS).duty_percent - 14.0)
    believed = cells(EXPONENTIAL, NO_TRIALS, HOLD_S, told.prior)
    assert float(believed.weight @ (believed.median > 40.0)) > 0.2
    sums, rng = Sums(), np.random.default_rng(4)
    for duty in np.repeat([59.0, 59.6, 60.0, 60.4], 5).tolist():
        trial(sums, duty, 20.0, 60.0, 0.4, rng)
    with_it = cells(EXPONENTIAL, key_of(sums), HOLD_S, told.prior, DOWN_S / HOLD_S)
    without = cells(EXPONENTIAL, key_of(sums), HOLD_S, plain.prior, DOWN_S / HOLD_S)
    assert float(with_it.weight @ with_it.median) == pytest.approx(float(without.weight @ without.median), abs=0.02)


def test_the_same_sums_give_the_same_choice() -> None:
    """Nothing but the sums decides, and what was worked out once is remembered."""
    sums, _ = searched(STALL, 12.0, 0.3, 6, 10)
    again = Sums(dict(reversed(sums.exposure.items())), dict(reversed(sums.events.items())))
    assert best(STALL, key_of(sums)) is best(STALL, key_of(again))
    assert best.__wrapped__(STALL, key_of(sums)) == best(STALL, key_of(sums))


duties = some.floats(0.0, 100.0).map(lambda duty: round(duty, 3))


@some.composite
def any_sums(draw: some.DrawFn) -> Key:
    exposures = draw(some.dictionaries(duties, some.sampled_from([0.0, 0.2, 5.0, 20.0, 4000.0]), max_size=12))
    events = draw(some.dictionaries(some.tuples(duties, some.sampled_from([0.001, 0.2, 1.0, 20.0])),
                                    some.integers(1, 50), max_size=12))  # fmt: skip
    return tuple(sorted(exposures.items())), tuple(sorted((d, w, n) for (d, w), n in events.items()))


@settings(max_examples=150, deadline=None, derandomize=True)
@given(any_sums(), some.sampled_from([STALL, START]))
def test_any_sums_have_a_choice(key: Key, question: Question) -> None:
    """Also sums that no motor gives: the choice is allowed, and its numbers are numbers."""
    choice = best.__wrapped__(question, key)
    assert question.low <= choice.duty_percent <= question.high
    assert choice.duty_percent == pytest.approx(round(choice.duty_percent / question.step) * question.step, abs=1e-9)
    assert choice.part in question.parts
    assert math.isfinite(choice.gain_per_s)
    assert choice.gain_per_s >= -1e-6
    assert math.isfinite(choice.u[0.99])
    assert 0.0 <= choice.failing <= 1.0 + 1e-9
    assert choice.seconds >= question.before_s


def test_the_short_cut_for_starts_is_the_likelihood() -> None:
    """Successes and failures at many duties: the collapsed sums give what the general likelihood gives (independent
    method: laws.log_likelihood), to rounding, also far from the place where e^z has no room."""
    rng = np.random.default_rng(11)
    sums = Sums()
    for duty in rng.uniform(10.0, 60.0, 40).round(1).tolist():
        started = rng.random() < 1.0 / (1.0 + math.exp(-(duty - 30.0) / 4.0))
        sums.add(duty, float(started), None if started else 1.0)
    sums.add(5.0, 0.0, 1.0)
    evidence = evidence_of(key_of(sums), 1.0)
    median, spread = np.linspace(0.0, 100.0, 31)[None, :], np.geomspace(0.02, 20.0, 13)[:, None]
    ours = posterior_module._likely(LOGISTIC, evidence, posterior_module.NARROW)(median, spread)
    general = log_likelihood(LOGISTIC, evidence, median, spread)
    possible = general > -600.0  # below, the general one holds chances at 1e-300
    assert possible.sum() > 50
    assert ours[possible] == pytest.approx(general[possible], rel=1e-9, abs=1e-9)
    assert np.all(ours[~possible] <= -600.0)
