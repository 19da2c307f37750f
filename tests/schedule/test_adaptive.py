"""The adaptive search as the schedule asks for it: by gain, breadth first, until all is known or time is out."""

from __future__ import annotations

from dataclasses import replace

import pytest

from sweeprig.holds import Approach, Condition, Finished, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, Expected, HeatPlan, Plan, SettlePlan, StallPlan, StartPlan
from sweeprig.schedule import History, next_hold
from sweeprig.schedule.predicted import PredictedMotor
from sweeprig.schedule.sharpness import answered, standard_errors

SLOW, FAST = Condition(300.0, 12.0), Condition(25_000.0, 12.0)
TIMES = (5.0, 10.0, 20.0, 40.0)
TYPICAL = Expected(
    stall_percent=(12.0, 0.2), stall_spread_percent=(0.3, 0.4), start_percent=(18.0, 0.2),
    start_spread_percent=(0.5, 0.4),
)  # fmt: skip


def a_plan(**changes: object) -> Plan:
    plan = Plan(
        seed=1, conditions=(SLOW, FAST), roles={"drive": "board", "speed": "board.speed"}, duty_low_percent=0.0,
        duty_high_percent=100.0, time_constant_s=0.5, lowest_rpm=60.0, zero_time_s=0.0, run_in=None,
        curve=CurvePlan((100.0, 60.0, 40.0, 28.0, 20.0, 14.0, 9.0, 5.0), 3.0, 20.0),
        stall=StallPlan("adaptive", 20.0, 0.1, 80, 12.0, 4.0, 0.3, TIMES),
        start=StartPlan("adaptive", 5.0, 5.0, 0.1, 80, 0.5), settle=SettlePlan(1.0), expected=TYPICAL,
    )  # fmt: skip
    return replace(plan, **changes)  # type: ignore[arg-type]  # keywords are the dataclass's own


def night(plan: Plan, number: int = 0, most: int = 800) -> tuple[list[Outcome], Finished]:
    motor, history, clock = PredictedMotor(plan, number), History(), 0.0
    for _ in range(most):
        decision = next_hold(plan, history, clock)
        if isinstance(decision, Finished):
            return list(history), decision
        assert isinstance(decision, Hold)
        history.append(motor.outcome(decision, 1, clock, 0.0))
        clock = history[-1].ended
    raise AssertionError("the night never ended")


@pytest.mark.parametrize("number", range(4))
def test_the_search_ends_with_what_was_asked(number: int) -> None:
    """Every condition has stops and survivals, starts and failures, and the 99 % duties are known as asked unless the
    trials ran out."""
    plan = a_plan()
    outcomes, _ = night(plan, number)
    assert answered(plan, outcomes)
    errors = standard_errors(plan, outcomes)
    for condition in plan.conditions:
        for purpose, most in ((Purpose.STALL, 80), (Purpose.START, 80)):
            count = sum(o.hold.purpose is purpose and o.hold.condition == condition for o in outcomes)
            assert count <= most
    assert errors["sustain_99_duty_percent"] <= 0.3 + 1e-9 or _stalls(outcomes) >= 80


@pytest.mark.parametrize(
    ("most", "says"), [(80, "as well as asked"), (6, "known less well than asked: stall at 300 Hz")]
)
def test_it_says_what_the_searches_ended_at(most: int, says: str) -> None:
    """Standard error reached or trials used up: the reason of the end says which, and by how much it fell short."""
    plan = a_plan(conditions=(SLOW,), start=None)
    assert plan.stall is not None
    _, finished = night(replace(plan, stall=replace(plan.stall, holds=most)), 1)
    assert says in finished.reason
    assert ("instead of 0.3 %" in finished.reason) == (most == 6)


def _stalls(outcomes: list[Outcome]) -> int:
    return sum(o.hold.purpose is Purpose.STALL for o in outcomes)


def test_holds_lie_in_the_tail_and_below_it() -> None:
    """Some of the trials are made where they rarely fail, some where they mostly do: the one carries the 99 % duty, the
    other tells how steep the law is."""
    plan = a_plan(conditions=(SLOW,))
    outcomes, _ = night(plan, 1)
    place = PredictedMotor(plan, 1).of(SLOW)["stall_percent"]
    stalls = [o.hold.duty_percent for o in outcomes if o.hold.purpose is Purpose.STALL]
    assert min(stalls) < place + 0.2 < max(stalls)


def test_lengths_are_among_those_allowed() -> None:
    """The exposure of a trial is one of the plan's, and more than one of them is used."""
    stalls = [o.hold for o in night(a_plan())[0] if o.hold.purpose is Purpose.STALL]
    lengths = {hold.most_s for hold in stalls}
    assert lengths <= set(TIMES)
    assert len(lengths) > 1


def test_conditions_advance_together() -> None:
    """No condition's search is over before the other's has begun: drift over the night cannot pass for an effect."""
    outcomes, _ = night(a_plan(), 2)
    for purpose in (Purpose.STALL, Purpose.START):
        at = {
            c: [o.number for o in outcomes if o.hold.purpose is purpose and o.hold.condition == c] for c in (SLOW, FAST)
        }
        assert at[SLOW][0] < at[FAST][-1]
        assert at[FAST][0] < at[SLOW][-1]


def test_what_has_no_answer_goes_first() -> None:
    """As long as some kind of trial at some condition has not shown both results, no other is sharpened."""
    plan = a_plan()
    outcomes, _ = night(plan, 3)
    seen: dict[tuple[Condition, Purpose], set[bool]] = {
        (c, p): set() for c in plan.conditions for p in (Purpose.STALL, Purpose.START)
    }
    for outcome in outcomes:
        if outcome.hold.purpose is Purpose.CURVE and outcome.hold.approach is Approach.FALLING:
            seen[outcome.hold.condition, Purpose.STALL].add(outcome.verdict is Verdict.TURNING)
        key = outcome.hold.condition, outcome.hold.purpose
        if key not in seen:
            continue
        if any(len(results) < 2 for results in seen.values()):
            assert len(seen[key]) < 2
        seen[key].add(outcome.verdict in (Verdict.TURNING, Verdict.STARTED))


def test_a_deadline_is_kept_and_leaves_answers() -> None:
    """With twenty minutes for two conditions no hold ends later, and both have an answer."""
    plan = a_plan(deadline_utc=1200.0)
    outcomes, finished = night(plan, 1)
    assert outcomes[-1].ended_utc <= 1200.0
    assert "deadline" in finished.reason
    assert answered(plan, outcomes)


def test_time_that_is_left_is_spent() -> None:
    """With a deadline far away and `spend = all` the search goes on; with `needed` it ends when all is known."""
    plan = a_plan(conditions=(SLOW,), deadline_utc=14_400.0)
    plan = replace(plan, stall=replace(plan.stall, holds=10_000), start=replace(plan.start, trials=10_000))  # type: ignore[type-var]
    needed, _ = night(replace(plan, spend="needed"), 1, 3000)
    spent, _ = night(plan, 1, 3000)
    assert needed[-1].ended_utc < 10_000.0
    assert spent[-1].ended_utc > 14_000.0
    sharp, sharper = (standard_errors(plan, each)["sustain_99_duty_percent"] for each in (needed, spent))
    assert sharper < 0.8 * sharp


def test_a_discarded_duty_is_passed_over() -> None:
    """The trial that was discarded three times is made at the next higher duty."""
    plan = a_plan(conditions=(SLOW,), start=None)
    outcomes, _ = night(plan, 0)
    before = [o for o in outcomes if o.hold.purpose is Purpose.CURVE]
    first = next_hold(plan, before, 0.0)
    assert isinstance(first, Hold)
    for _ in range(3):
        wanted = next_hold(plan, before, 0.0)
        assert isinstance(wanted, Hold)
        assert wanted.purpose is Purpose.STALL
        lost = Outcome(wanted.number, wanted, 1, Status.DISCARDED, Verdict.UNDECIDED, 0.0, 1.0, 0.0, 1.0)
        before = [*before, lost]
    other = next_hold(plan, before, 0.0)
    assert isinstance(other, Hold)
    assert other.duty_percent == pytest.approx(first.duty_percent + 0.1)


def test_a_motor_that_never_stops_ends_the_search() -> None:
    """Where nothing stops down to the lowest duty allowed the search ends there, and soon."""
    plan = a_plan(
        conditions=(SLOW,), start=None, duty_low_percent=30.0, curve=CurvePlan((100.0, 60.0, 30.0), 3.0, 20.0)
    )
    outcomes, _ = night(plan, 0)
    assert _stalls(outcomes) <= 20


def test_locked_rotor_heat_is_kept() -> None:
    """With a small budget the rests come before the trials, and the night still ends."""
    plan = a_plan(conditions=(SLOW,), heat=HeatPlan(3.0, 600.0, 6.0, 12.0))
    outcomes, _ = night(plan, 0)
    assert any(o.hold.purpose is Purpose.REST for o in outcomes)
    assert answered(plan, outcomes)
