"""The bound for a service of hours, and what stands beside it."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from sweeprig.characterise.evidence import duties, stall_trials, turning_before
from sweeprig.characterise.findings import EXTRAPOLATED
from sweeprig.characterise.limits import judge
from sweeprig.characterise.long_run import LongRun, long_run
from sweeprig.characterise.thresholds import STALL_PRIOR
from sweeprig.holds import Outcome, Purpose, Verdict
from sweeprig.plan import LongRunPlan, Plan

MakeOutcome = Callable[..., Outcome]
DAY = 86_400.0
LEAD = ((30.0, 4.0),)


@pytest.fixture
def service(plan: Plan) -> Plan:
    """24 h at 99 %; stall holds of 20 s, long holds of 30 min."""
    return replace(plan, long_run=LongRunPlan(DAY, 1800.0, 6, 0.99))


def of(plan: Plan, made: Sequence[Outcome]) -> LongRun:
    known = duties(plan, plan.conditions[0], made)
    return long_run(plan, known, stall_trials(plan, known, made, turning_before(made)), made)


@pytest.fixture
def hold(outcome: MakeOutcome) -> Callable[..., Outcome]:
    """(number, duty, seconds turned, whether it then stopped, purpose): one exposure, with the length it was meant."""

    def make(number: int, duty: float, seconds: float, stops: bool, purpose: Purpose = Purpose.STALL) -> Outcome:
        between = (seconds, seconds + 0.25 if stops else None)
        verdict = Verdict.STOPPED if stops else Verdict.TURNING
        one = outcome(number, purpose, duty, verdict, event_between_s=between, exposed_s=seconds, lead=LEAD)
        return replace(one, hold=replace(one.hold, most_s=20.0 if purpose is Purpose.STALL else 1800.0))

    return make


STOPS = ((10.0, 3.0), (10.2, 12.0), (10.4, 8.0), (10.2, 5.0), (9.8, 3.5))
SURVIVED = (10.2, 10.4, 10.4, 10.6, 10.6, 10.8, 10.8, 11.0)
LONG = ((11.6, 1800.0, False), (11.4, 700.0, True), (11.6, 1100.0, True), (11.8, 1800.0, False))


@pytest.fixture
def searched(hold: Callable[..., Outcome]) -> list[Outcome]:
    """Five stops and eight survivals of 20 s holds, four long holds."""
    made = [hold(i, duty, seconds, True) for i, (duty, seconds) in enumerate(STOPS)]
    made += [hold(10 + i, duty, 20.0, False) for i, duty in enumerate(SURVIVED)]
    made += [hold(30 + i, *row, Purpose.LONG) for i, row in enumerate(LONG)]
    return made


def brute_force(made: Sequence[Outcome], logistic: bool = False) -> float:
    """The 95 % point of the duty of the service on a dense plain grid, by the definitions' formulas alone: hazard
    ln 2/T·exp(−(π/√6)·(D − D50)/spread), or a logistic chance of a whole hold; flat in D50, ln spread normal."""
    place = np.linspace(4.0, 12.0, 1601)[:, None]
    centre, sd = math.log(STALL_PRIOR.median_percent), STALL_PRIOR.log_sd
    log_spread = np.linspace(centre - 4.0 * sd, centre + 4.0 * sd, 961)[None, :]
    spread = np.exp(log_spread)
    total = -0.5 * ((log_spread - centre) / sd) ** 2
    for one in made:
        begin, end = one.event_between_s
        above = (one.hold.duty_percent - place) / spread
        if logistic:
            survived = -np.logaddexp(0.0, -math.pi / math.sqrt(3.0) * above)
            total = total + (survived if end is None else np.log(np.maximum(-np.expm1(survived), 1e-300)))
            continue
        hazard = math.log(2.0) / 20.0 * np.exp(np.minimum(-math.pi / math.sqrt(6.0) * above, 300.0))
        stopped = 0.0 if end is None else np.log(np.maximum(-np.expm1(-hazard * (end - begin)), 1e-300))
        total = total - hazard * begin + stopped
    weight = np.exp(total - total.max())
    part = 20.0 / DAY
    if logistic:
        chance = 0.99**part
        duty = place + math.sqrt(3.0) / math.pi * math.log(chance / (1.0 - chance)) * spread
    else:
        duty = place + math.sqrt(6.0) / math.pi * math.log(math.log(2.0) / (-math.log(0.99) * part)) * spread
    order = np.argsort(duty, axis=None)
    share = np.cumsum(weight.ravel()[order])
    return float(duty.ravel()[order][np.searchsorted(share, 0.95 * share[-1])])


def test_bound_against_brute_force(service: Plan, searched: list[Outcome]) -> None:
    """The bound is the 95 % point of the posterior carried out to the service (independent method: a plain sum over a
    dense grid, in the definitions' own formulas). 0.05 % duty: both grids' steps times 9.8 spreads."""
    found = of(service, searched).duty
    assert found.bound == "upper"
    assert found.value == pytest.approx(brute_force(searched), abs=0.05)
    assert found.value == found.high
    assert set(found.holds) == {one.number for one in searched}


def test_binary_model_against_brute_force(service: Plan, searched: list[Outcome]) -> None:
    """The plain binary model beside it knows whole stall holds only, survived or not (independent method: as above)."""
    found = of(service, searched).binary
    whole = [one for one in searched if one.hold.purpose is Purpose.STALL]
    assert found.value == pytest.approx(brute_force(whole, logistic=True), rel=0.02)
    assert set(found.holds) == {one.number for one in whole}


def test_accuracy_of_duty_widens_the_bound(service: Plan, searched: list[Outcome]) -> None:
    """A duty that is only known to a rectangle of ±0.8 % moves the bound up."""
    loose = replace(service, switch_delay_s=0.8 / 300.0 / 100.0)
    here, there = of(service, searched).duty.value, of(loose, searched).duty.value
    assert here is not None
    assert there is not None
    assert there > here + 0.1


def test_long_holds_pin_the_slope(service: Plan, searched: list[Outcome]) -> None:
    """Without its long holds the same night gives a bound that is further out."""
    short = [one for one in searched if one.hold.purpose is Purpose.STALL]
    here, without = of(service, searched).duty.value, of(service, short).duty.value
    assert here is not None
    assert without is not None
    assert without > here + 0.5


def test_assumptions_stand_beside_it(service: Plan, searched: list[Outcome]) -> None:
    """Both assumptions are named, and that it reaches beyond every hold."""
    found = of(service, searched).duty
    assert any("at least as fast" in one for one in found.assumes)
    assert any("duty does not cure" in one for one in found.assumes)
    assert EXTRAPOLATED in found.flags


@pytest.mark.parametrize("stops", [0, 2])
def test_model_free_bound(service: Plan, hold: Callable[..., Outcome], stops: int) -> None:
    """From T hours at or above the duty with n stops: rate at most χ²(0.95, 2n + 2)/(2T), exact Poisson (independent
    method: scipy's chi-square). Holds below the duty do not count."""
    made = [hold(i, 10.0, 3.0, True) for i in range(6)] + [hold(10 + i, 10.4, 20.0, False) for i in range(4)]
    made += [hold(20 + i, 14.0, 43_200.0, i < stops, Purpose.LONG) for i in range(3000)]
    found = of(service, made).model_free
    rate = stats.chi2.ppf(0.95, 2 * stops + 2) / 2.0 / (3000 * 43_200.0)
    assert found.bound == "lower"
    assert found.value == pytest.approx(100.0 * math.exp(-DAY * rate), rel=1e-6)
    assert set(found.holds) == set(range(20, 3020))


@pytest.mark.parametrize(("survived", "enough"), [(298, False), (299, True)])
def test_model_free_bound_is_the_success_run(
    service: Plan, hold: Callable[..., Outcome], survived: int, enough: bool
) -> None:
    """Holds of the whole service count one by one: 299 without a stop show 99 % at 95 % confidence, 298 do not (common
    practice, and exact: 0.99^299 < 0.05)."""
    made = [hold(i, 40.0, DAY, False, Purpose.LONG) for i in range(survived)]
    found = of(service, [*made, hold(900, 10.0, 3.0, True)]).model_free
    assert found.value is not None
    assert (found.value >= 99.0) is enough


def test_extrapolation_factor(service: Plan, searched: list[Outcome], hold: Callable[..., Outcome]) -> None:
    """Service time over what was turned near the duty: 24 h over 2 h are 12; with no hold near it is flagged."""
    bound = of(service, searched).duty.value
    assert bound is not None
    near = [*searched, hold(50, round(bound, 2), 7200.0, False, Purpose.LONG)]
    assert of(service, near).factor.value == pytest.approx(12.0, rel=0.05)
    assert "no_hold_near" in of(service, searched).factor.flags
    assert "no_hold_near" not in of(service, near).factor.flags


def test_an_extrapolation_decides_no_limit(
    service: Plan, searched: list[Outcome], hold: Callable[..., Outcome]
) -> None:
    """Against a limit far above it the bound is not decided, until a hold of the service time was survived below it."""
    assert judge(of(service, searched).duty, None, 90.0).verdict == "not_decided"
    assert judge(of(service, searched).duty, 99.0, None).verdict == "not_decided"
    supported = of(service, [*searched, hold(60, 12.0, DAY, False, Purpose.LONG)]).duty
    assert supported.value is not None
    assert supported.value > 12.0
    assert judge(supported, None, 90.0).verdict == "pass"
    stopped = hold(61, supported.value + 1.0, 60.0, True, Purpose.LONG)
    contradicted = of(service, [*searched, hold(60, 12.0, DAY, False, Purpose.LONG), stopped]).duty
    assert judge(contradicted, None, 90.0).verdict == "not_decided"


def test_never_stopped(service: Plan, hold: Callable[..., Outcome]) -> None:
    """A motor that never stopped still gives an upper bound, flagged; more time at the same duty brings it down."""
    few = of(service, [hold(i, 6.0, 20.0, False) for i in range(10)]).duty
    more = of(service, [hold(i, 6.0, 1800.0, False, Purpose.LONG) for i in range(10)]).duty
    assert few.value is not None
    assert more.value is not None
    assert more.value < few.value
    assert "never_stopped" in few.flags


def test_not_found(plan: Plan, service: Plan, searched: list[Outcome], hold: Callable[..., Outcome]) -> None:
    """Not asked for, nothing done, or nothing but stops: four findings without a value, each with its reason."""
    stops = [hold(i, 10.0, 3.0, True) for i in range(5)]
    for found in (of(plan, searched), of(service, []), of(service, stops)):
        for one in (found.duty, found.factor, found.model_free, found.binary):
            assert not one.found
            assert one.reason


def test_a_bound_above_the_range_says_so(service: Plan, searched: list[Outcome]) -> None:
    """A bound above the highest duty allowed shows no duty that lasts, and is flagged."""
    assert "beyond_the_duties_allowed" not in of(service, searched).duty.flags
    assert "beyond_the_duties_allowed" in of(replace(service, duty_high_percent=12.0), searched).duty.flags
