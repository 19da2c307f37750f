"""Long holds: at which duty, how many, and never before they can tell something."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest
from scipy import integrate, stats

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.laws import SPREAD_LOG_SD
from sweeprig.plan import LongRunPlan, Plan, SettlePlan, StallPlan
from sweeprig.schedule.history import History, past_of
from sweeprig.schedule.keys import contrast, key_of
from sweeprig.schedule.long_run import WANTED_FAILURE, long_holds
from sweeprig.schedule.proposal import Here, Proposal
from sweeprig.schedule.quick_fit import quick_fit
from sweeprig.schedule.tally import Sums, Tally

AT = Condition(1000.0, 12.0)
LONG = LongRunPlan(86_400.0, 1800.0, 6)
PLAN = Plan(
    seed=1, conditions=(AT,), roles={"drive": "board", "speed": "board.speed"}, duty_low_percent=0.0,
    duty_high_percent=100.0, time_constant_s=0.2, lowest_rpm=60.0, zero_time_s=0.0, run_in=None, curve=None,
    stall=StallPlan("ladder", 20.0, 0.5, 24, 12.0, 4.0), start=None, settle=SettlePlan(1.0), long_run=LONG,
)  # fmt: skip
PLACE, SPREAD = 11.0, 0.4


def exposed(number: int, duty: float, turned_s: float, stops: bool, purpose: Purpose = Purpose.STALL) -> Outcome:
    most_s = 20.0 if purpose is Purpose.STALL else LONG.hold_time_s
    lead, at = ((duty + 12.0, 4.0),), 60.0 * number
    hold = Hold(number, purpose, Approach.FALLING, AT, duty, 0.0, most_s, EndsWhen.STOPPED, (), "", lead)
    verdict, between = (Verdict.STOPPED if stops else Verdict.TURNING), (turned_s, turned_s + 0.25 if stops else None)
    return Outcome(number, hold, 1, Status.DONE, verdict, at, at, at, at, turned_s, between)


def hazard(duty: float) -> float:
    """Definitions, Law of stalling, in plain numbers."""
    return math.log(2.0) / 20.0 * math.exp(-math.pi / math.sqrt(6.0) / SPREAD * (duty - PLACE))


def trials(count: int, seed: int) -> list[Outcome]:
    """Stall holds around the stall duty of a motor with that hazard."""
    rng, made = np.random.default_rng(seed), []
    for number in range(1, count + 1):
        duty = round(PLACE + rng.uniform(-0.5, 1.5), 2)
        stop = rng.exponential() / hazard(duty)
        made.append(exposed(number, duty, min(math.floor(4.0 * stop) / 4.0, 20.0), stop < 20.0))
    return made


def asked(made: Sequence[Outcome], plan: Plan = PLAN, now: float = 0.0) -> Proposal | None:
    past = past_of(History(made), plan)
    return long_holds(plan, Here(AT, past.conditions.get(AT) or Tally(), past, len(made) + 1, now))


def wanted(made: Sequence[Outcome], plan: Plan = PLAN) -> Hold:
    proposal = asked(made, plan)
    assert proposal is not None
    return proposal.hold


def test_a_long_hold() -> None:
    """A falling approach from well above, exposed for the long hold time; only a stop ends it sooner."""
    hold = wanted(trials(40, 1))
    assert (hold.purpose, hold.approach, hold.ends_when) == (Purpose.LONG, Approach.FALLING, EndsWhen.STOPPED)
    assert hold.most_s == LONG.hold_time_s
    assert hold.lead[-1][0] >= hold.duty_percent + 10.0


def test_duty_where_some_stop() -> None:
    """Of a motor that is well known, 20 to 60 % of the long holds stop at the duty asked for, by the motor's own law:
    three sets of 4,000 trials. Seeded; place and slope are then known to 1.5 %, so the wanted 40 % come within 4 %:
    the bounds are five standard deviations away (false alarms below 1e-5)."""
    for seed in range(3):
        duty = wanted(trials(4000, seed)).duty_percent
        assert 0.2 <= -math.expm1(-LONG.hold_time_s * hazard(duty)) <= 0.6


def test_quick_fit_against_integration() -> None:
    """The chance of a stop that is aimed at is the posterior's (independent method: scipy's quadrature over both
    parameters, in the definitions' formulas). 2 % of one: the quick grid's own coarseness."""
    made = trials(25, 3)
    duty = wanted(made).duty_percent

    def log_weight(place: float, log_spread: float) -> float:
        b = math.pi / math.sqrt(6.0) / math.exp(log_spread)
        total = float(stats.norm.logpdf(log_spread, math.log(0.3), SPREAD_LOG_SD))
        for one in made:
            h = math.log(2.0) / 20.0 * math.exp(min(-b * (one.hold.duty_percent - place), 300.0))
            begin, end = one.event_between_s
            if end is not None and begin < 1.0:
                begin, end = 0.0, max(end, 1.0)  # still coming down: stopped by then
            total += -h * begin + (0.0 if end is None else math.log(max(-math.expm1(-h * (end - begin)), 1e-300)))
        return total

    top = max(log_weight(p, s) for p in np.linspace(10.5, 11.5, 21) for s in np.linspace(-2.5, 0.5, 16))

    def part(weighted: bool) -> float:
        def inside(place: float, log_spread: float) -> float:
            weight = math.exp(log_weight(place, log_spread) - top)
            b = math.pi / math.sqrt(6.0) / math.exp(log_spread)
            h = math.log(2.0) / 20.0 * math.exp(min(-b * (duty - place), 300.0))
            return weight * (-math.expm1(-LONG.hold_time_s * h) if weighted else 1.0)

        return float(integrate.dblquad(inside, -3.3, 1.3, 9.3, 12.7, epsabs=1e-5, epsrel=1e-3)[0])

    assert part(True) / part(False) == pytest.approx(WANTED_FAILURE, abs=0.02)


def test_as_many_as_asked_for() -> None:
    """So many long holds and no more; each that survived brings the next one down, each that stopped up."""
    made = trials(60, 5)
    first = wanted(made).duty_percent
    survived = [*made, exposed(61, first, LONG.hold_time_s, False, Purpose.LONG)]
    stopped = [*made, exposed(61, first, 300.0, True, Purpose.LONG)]
    assert wanted(survived).duty_percent <= first <= wanted(stopped).duty_percent
    assert wanted(survived).duty_percent < wanted(stopped).duty_percent
    done = [exposed(61 + i, first, LONG.hold_time_s, False, Purpose.LONG) for i in range(LONG.holds)]
    assert asked([*made, *done[:-1]]) is not None
    assert asked([*made, *done]) is None


def test_nothing_to_pin() -> None:
    """No long hold where the sweep asks for none, before anything was held, or while nothing has stopped."""
    assert asked(trials(40, 1), replace(PLAN, long_run=None)) is None
    assert asked([]) is None
    assert asked([exposed(i + 1, 14.0, 20.0, False) for i in range(10)]) is None
    assert asked([exposed(i + 1, 10.0, 5.0, True) for i in range(10)]) is not None
    assert asked([exposed(i + 1, 10.0, 0.5, True) for i in range(10)]) is None


def test_within_the_duties_allowed() -> None:
    """The duty asked for lies within the range, also where the motor stops above it."""
    assert wanted(trials(40, 1), replace(PLAN, duty_high_percent=11.5)).duty_percent == 11.5


def test_before_a_deadline() -> None:
    """A long hold that could not end before the deadline is not begun."""
    plan = replace(PLAN, deadline_utc=2000.0)
    assert asked(trials(40, 1), plan, 100.0) is not None
    assert asked(trials(40, 1), plan, 300.0) is None


def test_past_settings_discarded_three_times() -> None:
    """A duty whose long holds were discarded three times is passed over, upwards."""
    made = trials(40, 1)
    hold = wanted(made)
    bad = [
        replace(exposed(41 + i, hold.duty_percent, 0.0, False, Purpose.LONG), status=Status.DISCARDED) for i in range(3)
    ]
    assert asked([*made, *bad[:2]]) is not None
    assert wanted([*made, *bad]).duty_percent > hold.duty_percent


def test_quantile_of_the_quick_fit() -> None:
    """The bound of the 99 % duty lies above the middle one, and rises with the confidence asked for."""
    sums = past_of(History(trials(40, 2)), PLAN).conditions[AT].stall.sums
    fitted = quick_fit(key_of(sums), 20.0)
    assert fitted.below(0.5, 0.5) < fitted.below(0.99, 0.5) < fitted.below(0.99, 0.95)
    assert fitted.weight.sum() == pytest.approx(1.0)
    assert not contrast(Sums())
