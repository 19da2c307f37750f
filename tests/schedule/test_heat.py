"""The budget of locked-rotor heat: counted from outcomes alone, over restarts; rests where it would be exceeded."""

from __future__ import annotations

import math
import random
from dataclasses import replace

import pytest

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, Expected, HeatPlan, Plan, RunIn, SettlePlan, StartPlan
from sweeprig.schedule import heat as heat_module
from sweeprig.schedule import next_hold, preview
from sweeprig.schedule.heat import full_exposure, heat, rest_before, worst_case

AT_12 = Condition(1000.0, 12.0)
HEAT = HeatPlan(budget_s=30.0, cooling_s=120.0, locked_s=12.0, highest_v=12.0)


def a_hold(number: int, duty: float, most_s: float, purpose: Purpose = Purpose.START, **more: object) -> Hold:
    hold = Hold(
        number, purpose, Approach.FROM_REST, AT_12, duty, most_s, most_s, EndsWhen.TIME, ("speed",), "", ((0.0, 5.0),)
    )
    return replace(hold, **more)  # type: ignore[arg-type]  # keywords are the dataclass's own


def left(hold: Hold, ended: float, verdict: Verdict = Verdict.DID_NOT_START, status: Status = Status.DONE) -> Outcome:
    began = ended - hold.most_s
    return Outcome(hold.number, hold, 1, status, verdict, began, ended, began, ended, hold.most_s)


def plan(**changes: object) -> Plan:
    found = Plan(
        seed=1, conditions=(AT_12,), roles={"drive": "board", "speed": "board.speed"}, duty_low_percent=0.0,
        duty_high_percent=100.0, time_constant_s=0.5, lowest_rpm=60.0, zero_time_s=3.0, run_in=RunIn(60.0, 60.0),
        curve=CurvePlan((100.0, 50.0), 2.0, 20.0), stall=None, start=StartPlan("ladder", 5.0, 5.0, 0.5, 40),
        settle=SettlePlan(1.0), heat=HEAT,
    )  # fmt: skip
    return replace(found, **changes)  # type: ignore[arg-type]  # keywords are the dataclass's own


def test_the_weights_by_hand() -> None:
    """Seconds times duty times (V/V_max)²: 10 s at 50 % of 12 V where 24 V are allowed are 10 · 0.5 · 0.25 = 1.25 s,
    and a lead of 4 s at 100 % adds 4 · 0.25 (by hand: independent)."""
    half = replace(HEAT, highest_v=24.0)
    assert full_exposure(a_hold(1, 50.0, 10.0), half) == pytest.approx(1.25)
    assert full_exposure(a_hold(1, 50.0, 10.0, lead=((100.0, 4.0),)), half) == pytest.approx(2.25)


def test_protection_bounds_the_worst_case() -> None:
    """No hold is locked for longer than the locked-rotor time in force, at its highest duty."""
    assert worst_case(a_hold(1, 60.0, 240.0), HEAT) == pytest.approx(0.6 * 12.0)
    assert worst_case(a_hold(1, 60.0, 5.0), HEAT) == pytest.approx(3.0)


@pytest.mark.parametrize(
    ("status", "verdict", "counts"),
    [
        (Status.DONE, Verdict.STOPPED, 100.0), (Status.DONE, Verdict.DID_NOT_START, 100.0),
        (Status.TRIPPED, Verdict.UNDECIDED, 100.0), (Status.ABANDONED, Verdict.UNDECIDED, 100.0),
        (Status.DONE, Verdict.UNDECIDED, 100.0), (Status.DISCARDED, Verdict.UNDECIDED, 12.0),
        (Status.DONE, Verdict.TURNING, 0.0), (Status.DONE, Verdict.STARTED, 0.0),
    ],
)  # fmt: skip
def test_what_counts(status: Status, verdict: Verdict, counts: float) -> None:
    """A rotor that stopped, did not start, tripped, or was abandoned counts in full; one discarded under protection's
    eyes with its worst case; one that turned not at all."""
    hold = a_hold(1, 100.0, 100.0)
    assert heat([left(hold, 500.0, verdict, status)], HEAT, 500.0) == pytest.approx(counts)


def test_it_decays_with_the_cooling_time() -> None:
    """After one time constant 1/e is left, and two holds add up, in any order of the list (e^(−t/τ): by hand)."""
    first, second = left(a_hold(1, 100.0, 10.0), 100.0), left(a_hold(2, 100.0, 6.0), 220.0)
    assert heat([first], HEAT, 220.0) == pytest.approx(10.0 / math.e)
    expected = 10.0 / math.e + 6.0
    assert heat([first, second], HEAT, 220.0) == pytest.approx(expected)
    assert heat([second, first], HEAT, 220.0) == pytest.approx(expected)


def test_a_clock_set_back_never_cools() -> None:
    """Outcomes that lie in the future of a clock that was set back keep all their heat; a rest that was held cools by
    its own length."""
    hot = left(a_hold(1, 100.0, 20.0), 10_000.0)
    assert heat([hot], HEAT, 500.0) == pytest.approx(20.0)
    rest = left(a_hold(2, 0.0, 120.0, Purpose.REST), 620.0, Verdict.STOPPED)
    assert heat([hot, rest], HEAT, 620.0) == pytest.approx(20.0 / math.e)


def test_an_abandoned_hold_has_cooled_since_it_was_over() -> None:
    """It is concluded at the next start, hours later; it ended at the latest when all of it would have been done."""
    hold = a_hold(1, 100.0, 20.0, lead=((0.0, 5.0),))
    gone = Outcome(1, hold, 1, Status.ABANDONED, Verdict.UNDECIDED, 0.0, 7200.0, 1000.0, 8200.0)
    assert heat([gone], HEAT, 8200.0) < 1e-6 * 20.0
    assert heat([replace(gone, ended_utc=1010.0)], HEAT, 1010.0) == pytest.approx(20.0)


def test_a_rest_comes_before_what_would_exceed_the_budget() -> None:
    """The rest is as long as the heat needs to fall to budget less worst case, in whole seconds, with the drive off and
    with a reason in words; a second before its end the budget would be exceeded, at its end it is not."""
    hot = left(a_hold(1, 100.0, 25.0), 1000.0)
    wanted = a_hold(2, 100.0, 10.0)
    rest = rest_before(wanted, [hot], HEAT, 1000.0)
    assert rest is not None
    assert (rest.purpose, rest.duty_percent, rest.number) == (Purpose.REST, 0.0, 2)
    assert rest.why.startswith("Rest: ")
    assert "30 s are allowed" in rest.why
    seconds = rest.most_s
    assert 25.0 * math.exp(-seconds / 120.0) + 10.0 <= 30.0 < 25.0 * math.exp(-(seconds - 1.0) / 120.0) + 10.0
    done = left(rest, 1000.0 + seconds, Verdict.STOPPED)
    assert rest_before(replace(wanted, number=3), [hot, done], HEAT, 1000.0 + seconds) is None


@pytest.mark.parametrize("purpose", [Purpose.START, Purpose.STALL, Purpose.RUN_IN, Purpose.CURVE])
def test_which_holds_wait(purpose: Purpose) -> None:
    """Start, stall, run-in and the rising curve wait; the falling curve, from a rotor that turns, does not."""
    hot = left(a_hold(1, 100.0, 30.0), 1000.0)
    assert rest_before(a_hold(2, 50.0, 5.0, purpose), [hot], HEAT, 1000.0) is not None
    falling = a_hold(2, 50.0, 5.0, Purpose.CURVE, approach=Approach.FALLING)
    assert rest_before(falling, [hot], HEAT, 1000.0) is None


def test_a_resume_after_an_abandoned_start_rests_first() -> None:
    """A new session begins with the zero check, which heats nothing, then rests before the run-in."""
    hot = a_hold(1, 100.0, 28.0)
    gone = Outcome(1, hot, 1, Status.ABANDONED, Verdict.UNDECIDED, 0.0, 30.0, 1000.0, 1030.0)
    now, history, asked = 1030.0, [gone], []
    for _ in range(3):
        hold = next_hold(plan(session=2), history, now)
        assert isinstance(hold, Hold)
        asked.append(hold.purpose)
        now += hold.most_s
        history.append(replace(left(hold, now, Verdict.STOPPED), session=2))
    assert asked == [Purpose.ZERO, Purpose.REST, Purpose.RUN_IN]


def test_any_motor_comes_to_an_end() -> None:
    """A motor that never starts, with a clock that stands still: rests and trials take turns, and the night ends; at no
    trial do heat and worst case exceed the budget."""
    # Only a rest cools here, so the budget is reached within the 40 trials
    outcomes: list[Outcome] = []
    rests = 0
    asks = plan()
    for _ in range(400):
        hold = next_hold(asks, outcomes, 0.0)
        if not isinstance(hold, Hold):
            break
        if hold.purpose in (Purpose.START, Purpose.RUN_IN):
            assert heat(outcomes, HEAT, 0.0) + worst_case(hold, HEAT) <= HEAT.budget_s + 1e-9
        rests += hold.purpose is Purpose.REST
        verdict = Verdict.DID_NOT_START if hold.purpose is Purpose.START else Verdict.TURNING
        outcomes.append(left(hold, 0.0, Verdict.STOPPED if hold.purpose is Purpose.REST else verdict))
    else:
        raise AssertionError("not finished after 400 holds")
    assert rests >= 1


def test_a_hold_that_alone_uses_up_the_budget_waits_until_cold() -> None:
    """With a worst case as large as the budget the winding must be cold, to a hundredth; then it is asked for."""
    wanted = a_hold(2, 100.0, 60.0)
    tight = replace(HEAT, budget_s=12.0)
    hot = left(a_hold(1, 100.0, 10.0), 1000.0)
    rest = rest_before(wanted, [hot], tight, 1000.0)
    assert rest is not None
    assert rest.most_s == math.ceil(120.0 * math.log(10.0 / 0.12))
    assert rest_before(wanted, [], tight, 1000.0) is None


def test_preview_shows_the_rests() -> None:
    """A motor that cools slowly needs rests in its night: they are counted by purpose and in seconds."""
    long = StartPlan("ladder", 20.0, 5.0, 0.5, 40)
    slow = plan(start=long, heat=HeatPlan(6.0, 3600.0, 6.0, 12.0))
    late = Expected(start_percent=(49.0, 0.0))
    night, calm = (preview(replace(each, expected=late), 0.0) for each in (slow, plan(start=long, heat=None)))
    assert night.holds["rest"] >= 1
    assert night.rest_s > 0.0
    assert "rest" not in calm.holds
    assert night.hours.low > calm.hours.high


def test_the_walk_goes_back_only_as_far_as_the_decay_matters(monkeypatch: pytest.MonkeyPatch) -> None:
    """Of 3,000 holds half a minute apart only those of the last twelve time constants (24 min: 48 holds) are weighed,
    and leaving out the others changes nothing that matters (12 τ: e^-12 = 6e-6 of each)."""
    rng = random.Random(7)
    outcomes = [left(a_hold(n, 15.0, 5.0), 30.0 * n, rng.choice(list(Verdict))) for n in range(1, 3001)]
    weighed: list[int] = []
    weigh = heat_module.heat_of

    def counted(outcome: Outcome, budget: HeatPlan) -> float:
        weighed.append(outcome.number)
        return weigh(outcome, budget)

    monkeypatch.setattr(heat_module, "heat_of", counted)
    found = heat(outcomes, HEAT, 90_000.0)
    assert len(weighed) == 48
    whole = sum(weigh(o, HEAT) * math.exp(-(90_000.0 - o.ended_utc) / 120.0) for o in outcomes)
    assert found == pytest.approx(whole, rel=1e-4)
