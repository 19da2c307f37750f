"""The schedule: total, flat, with settled ties; and what a night asks for, in order."""

from __future__ import annotations

import random
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.holds import (
    Approach,
    Condition,
    Decision,
    EndsWhen,
    Finished,
    Hold,
    NeedsPerson,
    Outcome,
    Purpose,
    Status,
    Verdict,
)  # fmt: skip
from sweeprig.plan import CurvePlan, Plan, RunIn, SettlePlan, StallPlan, StartPlan
from sweeprig.schedule import History, next_hold

SLOW = Condition(300.0, 12.0)
FAST = Condition(25_000.0, 12.0)
DUTIES = (100.0, 60.0, 30.0, 20.0, 12.0, 8.0, 4.0)


def a_plan(**changes: object) -> Plan:
    plan = Plan(
        seed=1, conditions=(SLOW, FAST), roles={"drive": "board", "speed": "board.speed", "current": "supply.amps"},
        duty_low_percent=0.0, duty_high_percent=100.0, time_constant_s=0.5, lowest_rpm=60.0, zero_time_s=3.0,
        run_in=RunIn(60.0, 240.0), curve=CurvePlan(DUTIES, 2.0, 20.0),
        stall=StallPlan("ladder", 20.0, 0.5, 8, 12.0, 4.0),
        start=StartPlan("ladder", 5.0, 5.0, 0.5, 6), settle=SettlePlan(1.0),
    )  # fmt: skip
    return replace(plan, **changes)  # type: ignore[arg-type]  # keywords are the dataclass's own


def outcome_of(
    hold: Hold, plan: Plan, status: Status = Status.DONE, stall: float = 10.2, start: float = 15.2
) -> Outcome:
    """What a motor without any scatter would give."""
    from_rest = hold.approach is not Approach.FALLING
    turns = hold.duty_percent >= (start if from_rest else stall)
    if hold.purpose is Purpose.START:
        verdict = Verdict.STARTED if turns else Verdict.DID_NOT_START
    else:
        verdict = Verdict.TURNING if turns else Verdict.STOPPED
    return Outcome(
        hold.number, hold, plan.session, status, verdict, 0.0, 1.0, 0.0, 1.0, hold.most_s, (hold.most_s, None)
    )


def work(plan: Plan, outcomes: list[Outcome], most: int = 500) -> list[Outcome]:
    """Ask and answer until finished."""
    outcomes = list(outcomes)
    for _ in range(most):
        decision = next_hold(plan, outcomes, 0.0)
        if not isinstance(decision, Hold):
            assert isinstance(decision, (Finished, NeedsPerson))
            return outcomes
        outcomes.append(outcome_of(decision, plan))
    raise AssertionError(f"not finished after {most} holds")


def hold_of(decision: Decision) -> Hold:
    assert isinstance(decision, Hold)
    return decision


def test_a_night_in_order() -> None:
    """Zero check, run-in, the curve down and up at each condition; then the ladders of all conditions in turn."""
    outcomes = work(a_plan(), [])
    seen = [(o.hold.condition.pwm_hz, str(o.hold.purpose), str(o.hold.approach)) for o in outcomes]
    order = list(dict.fromkeys(seen))
    assert order == [
        (300.0, "zero", "from_rest"), (300.0, "run_in", "from_rest"),
        (300.0, "curve", "falling"), (300.0, "curve", "rising"),
        (25_000.0, "curve", "falling"), (25_000.0, "curve", "rising"),
        (300.0, "stall", "falling"), (300.0, "start", "from_rest"),
        (25_000.0, "stall", "falling"), (25_000.0, "start", "from_rest"),
    ]  # fmt: skip
    assert [o.number for o in outcomes] == list(range(1, len(outcomes) + 1))


def test_ladders_advance_in_turn() -> None:
    """At no time is one condition's ladder more than one trial's share ahead of another's."""
    done = dict.fromkeys(((c, p) for c in (SLOW, FAST) for p in (Purpose.STALL, Purpose.START)), 0)
    asked = {Purpose.STALL: 8, Purpose.START: 6}
    for outcome in work(a_plan(), []):
        key = outcome.hold.condition, outcome.hold.purpose
        if key in done:
            done[key] += 1
            parts = [count / asked[purpose] for (_, purpose), count in done.items()]
            assert max(parts) - min(parts) <= 1 / 6 + 1e-9


def test_a_history_answers_like_the_list_it_holds() -> None:
    """Tallies that are added to as outcomes come give the decisions of tallies counted anew."""
    plan, history = a_plan(), History()
    for _ in range(60):
        decision = next_hold(plan, history, 0.0)
        assert decision == next_hold(plan, list(history), 0.0)
        if not isinstance(decision, Hold):
            break
        history.append(outcome_of(decision, plan))
    assert len(history) == len(work(plan, []))


def test_the_falling_curve_ends_where_the_rotor_stopped() -> None:
    """No falling curve point below one where the rotor stopped: it would only be hot for nothing."""
    falling = [o.hold.duty_percent for o in work(a_plan(), []) if o.hold.purpose is Purpose.CURVE
               and o.hold.approach is Approach.FALLING and o.hold.condition == SLOW]  # fmt: skip
    assert falling == [100.0, 60.0, 30.0, 20.0, 12.0, 8.0]


def test_the_ladder_brackets_the_threshold() -> None:
    """Stall trials step down by one step until a stop, then start three steps higher."""
    trials = [o.hold.duty_percent for o in work(a_plan(), []) if o.hold.purpose is Purpose.STALL
              and o.hold.condition == SLOW]  # fmt: skip
    assert trials == [12.0, 11.5, 11.0, 10.5, 10.0, 11.5, 11.0, 10.5]


def test_every_stall_trial_relaunches_well_above() -> None:
    """A falling approach begins at least 10 % duty above, turning for at least five time constants (definitions)."""
    plan = a_plan()
    for outcome in work(plan, []):
        if outcome.hold.purpose is Purpose.STALL:
            duty, seconds = outcome.hold.lead[-1]
            assert duty >= outcome.hold.duty_percent + 10.0
            assert seconds >= 5 * plan.time_constant_s


def test_every_start_trial_begins_at_rest() -> None:
    """A start trial's lead is the drive off for the rest time."""
    leads = {o.hold.lead for o in work(a_plan(), []) if o.hold.purpose is Purpose.START}
    assert leads == {((0.0, 5.0),)}


def test_a_new_session_warms_up_again() -> None:
    """After a resume the zero check and the run-in are done again, and no done hold is repeated."""
    plan = a_plan()
    whole = work(plan, [])
    resumed = work(replace(plan, session=2), whole[:20])
    assert [str(o.hold.purpose) for o in resumed[20:22]] == ["zero", "run_in"]
    counted = [(o.hold.condition, o.hold.purpose) for o in resumed if o.hold.purpose is Purpose.STALL]
    assert len(counted) == 2 * 8


def test_three_strikes() -> None:
    """The same hold discarded three times is passed over."""
    plan = a_plan()
    outcomes = work(plan, [])[:2]
    first = hold_of(next_hold(plan, outcomes, 0.0))
    for _ in range(3):
        hold = hold_of(next_hold(plan, outcomes, 0.0))
        assert hold.same_setting(first)
        outcomes.append(outcome_of(hold, plan, Status.DISCARDED))
    assert not hold_of(next_hold(plan, outcomes, 0.0)).same_setting(first)


def test_never_stopping_and_never_starting_end() -> None:
    """A motor that never stops, or never starts, in the allowed range ends the search after three at the edge."""
    plan = a_plan(conditions=(SLOW,), duty_low_percent=10.5, stall=StallPlan("ladder", 20.0, 0.5, 50, 12.0, 4.0),
                  start=StartPlan("ladder", 5.0, 5.0, 0.5, 200))  # fmt: skip
    outcomes: list[Outcome] = []
    for _ in range(500):
        decision = next_hold(plan, outcomes, 0.0)
        if not isinstance(decision, Hold):
            break
        outcomes.append(outcome_of(decision, plan, stall=0.0, start=101.0))
    at_low = [o for o in outcomes if o.hold.purpose is Purpose.STALL and o.hold.duty_percent == 10.5]
    at_high = [o for o in outcomes if o.hold.purpose is Purpose.START and o.hold.duty_percent == 100.0]
    assert (len(at_low), len(at_high)) == (3, 3)
    assert isinstance(next_hold(plan, outcomes, 0.0), Finished)


def test_the_deadline_ends_the_night() -> None:
    """At the deadline, in UTC, nothing more is begun."""
    decision = next_hold(a_plan(deadline_utc=1000.0), [], 1000.0)
    assert decision == Finished("the deadline has come")


def test_order_of_the_history_does_not_matter() -> None:
    """The decision depends on what happened, not on how the list is sorted."""
    plan = a_plan()
    history = work(plan, [])[:25]
    shuffled = list(history)
    random.Random(5).shuffle(shuffled)
    assert next_hold(plan, history, 0.0) == next_hold(plan, shuffled, 0.0)


conditions = st.sampled_from([SLOW, FAST, Condition(1234.0, 5.0)])
duties = st.floats(0.0, 100.0).map(lambda duty: round(duty * 2) / 2)


@st.composite
def any_outcome(draw: st.DrawFn) -> Outcome:
    hold = Hold(
        draw(st.integers(1, 400)), draw(st.sampled_from(Purpose)), draw(st.sampled_from(Approach)), draw(conditions),
        draw(duties), 0.0, 20.0, draw(st.sampled_from(EndsWhen)), ("speed",), "",
    )  # fmt: skip
    return Outcome(
        hold.number, hold, draw(st.integers(1, 3)), draw(st.sampled_from(Status)), draw(st.sampled_from(Verdict)),
        0.0, 1.0, 0.0, 1.0, 20.0, (20.0, None),
    )  # fmt: skip


@given(st.lists(any_outcome(), max_size=40))
def test_total(history: list[Outcome]) -> None:
    """Any history, also one the schedule would not have produced, gets a sensible answer within the allowed range."""
    plan = a_plan()
    decision = next_hold(plan, history, 0.0)
    assert isinstance(decision, (Hold, Finished, NeedsPerson))
    if isinstance(decision, Hold):
        assert decision.number > max((o.number for o in history), default=0)
        assert plan.duty_low_percent <= decision.duty_percent <= plan.duty_high_percent
        assert decision.condition in plan.conditions
        assert decision.why


@given(st.lists(any_outcome(), max_size=30))
def test_any_history_ends(history: list[Outcome]) -> None:
    """From any history the schedule comes to an end."""
    plan = a_plan()
    renumbered = [replace(o, number=i + 1, hold=replace(o.hold, number=i + 1)) for i, o in enumerate(history)]
    assert len(work(plan, renumbered)) >= len(history)


def test_a_plan_without_searches_is_done_after_the_curve() -> None:
    """Absent tables of the sweep are absent holds."""
    outcomes = work(a_plan(stall=None, start=None), [])
    assert {str(o.hold.purpose) for o in outcomes} == {"zero", "run_in", "curve"}


@pytest.mark.parametrize("number", [0, 20])
def test_same_question_same_answer(number: int) -> None:
    """The decision is a function: asked twice it says the same."""
    plan = a_plan()
    history = work(plan, [])[:number]
    assert next_hold(plan, history, 0.0) == next_hold(plan, history, 0.0)


@pytest.mark.parametrize(("purpose", "number"), [(Purpose.ZERO, 0), (Purpose.RUN_IN, 1)])
def test_a_session_that_cannot_open_needs_a_person(purpose: Purpose, number: int) -> None:
    """A zero check or a run-in that failed three times in a session: nothing that follows would mean anything."""
    plan = a_plan()
    outcomes = work(plan, [])[:number]
    for _ in range(3):
        hold = hold_of(next_hold(plan, outcomes, 0.0))
        assert hold.purpose is purpose
        outcomes.append(outcome_of(hold, plan, Status.DISCARDED))
    decision = next_hold(plan, outcomes, 0.0)
    assert isinstance(decision, NeedsPerson)
    assert "3 times" in decision.why
    assert hold_of(next_hold(replace(plan, session=2), outcomes, 0.0)).purpose is Purpose.ZERO
