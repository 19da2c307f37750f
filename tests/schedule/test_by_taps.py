"""Duties become taps: the map's own holds first, one place after the choice, and searches that count what was given."""

from __future__ import annotations

from dataclasses import replace

import pytest

from sweeprig.holds import Approach, Finished, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, Plan, ReferencePlan, RunIn, StallPlan, StartPlan, TapPlan
from sweeprig.quantities import Reading
from sweeprig.schedule import History, next_hold, preview
from sweeprig.schedule.history import past_of
from tests.schedule.test_next_hold import DUTIES, a_plan, outcome_of

ENDS = (2.0, 98.0)
STEP = 96.0 / 255.0
FIRST = (255, 170, 90)


def by_taps(**changes: object) -> Plan:
    roles = {"drive": "board", "speed": "board.speed", "duty": "scope.duty", "pwm_frequency": "scope.frequency"}
    plan = a_plan(
        conditions=(a_plan().conditions[0],), roles=roles, curve=CurvePlan((98.0, *DUTIES[1:]), 2.5, 20.0),
        taps=TapPlan(ENDS, 255, (0.0, 100.0), 1000.0, FIRST, 5.0), duty_low_percent=2.0, duty_high_percent=98.0,
        stall=StallPlan("ladder", 20.0, 0.5, 12, 12.0, 4.0), start=StartPlan("ladder", 5.0, 5.0, 0.5, 6),
    )  # fmt: skip
    return replace(plan, **changes)  # type: ignore[arg-type]  # keywords are the dataclass's own


def given(tap: int) -> float:
    """What the true potentiometer gives, %: its middle lies 1.2 % higher than the parts say."""
    x = tap / 255.0
    return ENDS[0] + (ENDS[1] - ENDS[0]) * x + 4.8 * x * (1.0 - x)


def answered(hold: Hold, plan: Plan) -> Outcome:
    """A motor without scatter, which sees the duty that its tap gives, as a scope reads it."""
    if hold.tap is None:
        return outcome_of(hold, plan)
    duty = given(hold.tap)
    seen = outcome_of(replace(hold, duty_percent=duty), plan)
    means = {
        "scope.duty": Reading(duty, 0.03, "%", 1.0, "scope.duty"),
        "scope.frequency": Reading(1010.0, 0.1, "Hz", 1.0, "scope.frequency"),
        "board.speed": Reading(40.0 * duty, 0.1, "rpm", 1.0, "board.speed"),
    }
    return replace(seen, hold=hold, means=means)


def night(plan: Plan, most: int = 300) -> list[Outcome]:
    outcomes: list[Outcome] = []
    while len(outcomes) < most:
        decision = next_hold(plan, outcomes, 0.0)
        if isinstance(decision, Finished):
            return outcomes
        assert isinstance(decision, Hold)
        outcomes.append(answered(decision, plan))
    raise AssertionError("not finished")


def test_the_map_comes_first() -> None:
    """After warm-up the stated taps are visited in their order, once each; then the curve begins."""
    purposes = [(outcome.hold.purpose, outcome.hold.tap) for outcome in night(by_taps())]
    taps = [tap for purpose, tap in purposes if purpose is Purpose.TAP_MAP]
    assert taps == list(FIRST)
    assert [purpose for purpose, _ in purposes[:5]] == [Purpose.ZERO, Purpose.RUN_IN, *[Purpose.TAP_MAP] * 3]
    assert purposes[5][0] is Purpose.CURVE


def test_every_duty_is_a_tap() -> None:
    """Each duty above 0 that a hold drives at, in lead or target, is at the nearest tap by what is known then; what is
    expected of it is within its u (three of them) of what it gives. The duty itself stays as it was asked for."""
    for outcome in night(by_taps()):
        hold = outcome.hold
        driven = [duty for duty in (*(duty for duty, _ in hold.lead), hold.duty_percent) if duty > 0.0]
        for duty in driven:
            at = hold.at_tap(duty)
            assert at is not None
            assert abs(at.duty_percent - given(at.tap)) <= 3.0 * at.u_percent
            if hold.purpose is not Purpose.TAP_MAP and at.u_percent < 0.3:
                assert abs(given(at.tap) - duty) <= 0.5 * STEP * 1.06 + 3.0 * at.u_percent
        assert (hold.tap is None) == (hold.duty_percent == 0.0)


def test_no_tap_without_a_potentiometer() -> None:
    """A plan without taps asks for no tap, and for no hold of a map."""
    outcomes = night(by_taps(taps=None))
    assert {outcome.hold.tap for outcome in outcomes} == {None}
    assert Purpose.TAP_MAP not in {outcome.hold.purpose for outcome in outcomes}


def test_sums_are_of_the_duty_given() -> None:
    """What the searches sum up stands under the duty that was measured; lists of duties under what was asked."""
    plan = by_taps()
    outcomes = night(plan)
    tally = past_of(outcomes, plan).conditions[plan.conditions[0]]
    taps = {round(given(tap), 6) for tap in range(256)}
    assert set(tally.stall.sums.exposure) <= taps
    assert set(tally.start.sums.exposure) <= taps
    assert set(tally.speeds) <= taps
    assert set(tally.rising) == {round(duty, 6) for duty in (98.0, *DUTIES[1:])}
    assert tally.stall.count == 12


def test_history_and_list_agree() -> None:
    """Added up as they come, the outcomes lead to the same holds as counted anew."""
    plan, history = by_taps(), History()
    for outcome in night(plan):
        assert next_hold(plan, history, 0.0) == outcome.hold
        history.append(outcome)


def test_compared_holds_stay_at_their_tap() -> None:
    """References are all at the tap of the first, and so are the pieces of a run-in, although the map is learned
    meanwhile: what is compared differs in nothing but time."""
    plan = by_taps(reference=ReferencePlan(50.0, 60.0, 4.0), run_in=RunIn(50.0, 60.0, 0.5, 240.0))
    outcomes = night(plan)
    for purpose in (Purpose.REFERENCE, Purpose.RUN_IN):
        taps = [outcome.hold.tap for outcome in outcomes if outcome.hold.purpose is purpose]
        assert len(taps) > 1
        assert len(set(taps)) == 1
    nearest = min(range(256), key=lambda tap: abs(given(tap) - 50.0))
    assert taps[0] != nearest  # by the parts alone; a later hold would lie elsewhere


def test_a_tap_that_spoils_its_holds_is_left() -> None:
    """After three discarded trials at a tap a trial at the same duty goes to the next tap; another purpose stays."""
    plan = by_taps()
    outcomes = night(plan)
    trial = next(outcome for outcome in outcomes if outcome.hold.purpose is Purpose.STALL)
    before = [outcome for outcome in outcomes if outcome.number < trial.number]
    spoiled = [
        Outcome(trial.number + i, replace(trial.hold, number=trial.number + i, duty_percent=99.0), 1, Status.DISCARDED,
                Verdict.UNDECIDED, 0.0, 1.0, 0.0, 1.0)
        for i in range(3)
    ]  # fmt: skip
    again = next_hold(plan, [*before, *spoiled], 0.0)
    assert isinstance(again, Hold)
    assert (again.purpose, again.duty_percent) == (Purpose.STALL, trial.hold.duty_percent)
    assert abs((again.tap or 0) - (trial.hold.tap or 0)) == 1


def test_a_map_hold_that_fails_is_passed_over() -> None:
    """A tap of the map that is discarded three times is left, and the others are visited."""
    plan = by_taps(run_in=None, zero_time_s=0.0)
    first = next_hold(plan, [], 0.0)
    assert isinstance(first, Hold)
    assert (first.purpose, first.tap, first.approach) == (Purpose.TAP_MAP, 255, Approach.FROM_REST)
    failed = [
        Outcome(i + 1, replace(first, number=i + 1), 1, Status.DISCARDED, Verdict.UNDECIDED, 0.0, 1.0, 0.0, 1.0)
        for i in range(3)
    ]
    second = next_hold(plan, failed, 0.0)
    assert isinstance(second, Hold)
    assert (second.purpose, second.tap) == (Purpose.TAP_MAP, 170)


def test_the_night_can_be_predicted() -> None:
    """The preview counts the map's holds, and shows what the plan remarks."""
    night_ahead = preview(by_taps(remarks=("the timer's frequency",)), 0.0, 3)
    assert night_ahead.holds["tap_map"] == len(FIRST)
    assert night_ahead.remarks == ("the timer's frequency",)
    assert night_ahead.holds["stall"] == pytest.approx(12)
