"""Which outcomes count for what, and at which duty."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import pytest

from sweeprig.characterise.evidence import (
    duties,
    speed_points,
    stall_trials,
    start_trials,
    turning_before,
    voltage_points,
)
from sweeprig.holds import Approach, Outcome, Purpose, Status, Verdict
from sweeprig.laws import Trial
from sweeprig.plan import Plan

MakeOutcome = Callable[..., Outcome]


def untimed(trials: tuple[Trial, ...]) -> tuple[Trial, ...]:
    return tuple(replace(trial, at_s=0.0) for trial in trials)


def trials_of(plan: Plan, made: list[Outcome]) -> tuple[Trial, ...]:
    return untimed(stall_trials(plan, duties(plan, plan.conditions[0], made), made, turning_before(made)).trials)


def measured(plan: Plan) -> Plan:
    return replace(plan, roles={**plan.roles, "duty": "scope.duty"})


def test_stall_holds_are_exposures_in_parts_of_the_hold_time(plan: Plan, outcome: MakeOutcome) -> None:
    """A survival counts the whole hold, a stop the part before it and the interval it was seen in."""
    made = [
        outcome(1, Purpose.STALL, 12.0, Verdict.TURNING),
        outcome(2, Purpose.STALL, 10.0, Verdict.STOPPED, event_between_s=(5.0, 6.0), exposed_s=6.0),
        outcome(3, Purpose.STALL, 11.0, Verdict.TURNING, event_between_s=(0.0, None), exposed_s=10.0),
    ]
    assert trials_of(plan, made) == (
        Trial(1, 12.0, 1.0),
        Trial(2, 10.0, 0.25, 0.05),
        Trial(3, 11.0, 0.5),
    )


def test_early_stop_tells_only_that_it_was_early(plan: Plan, outcome: MakeOutcome) -> None:
    """A stop while the rotor still comes down (five time constants, 2.5 s) counts as by then, whenever it was seen."""
    for event in ((0.0, 0.1), (0.3, 0.4), (2.0, 2.2)):
        made = [outcome(1, Purpose.STALL, 10.0, Verdict.STOPPED, event_between_s=event, exposed_s=event[1])]
        assert trials_of(plan, made) == (Trial(1, 10.0, 0.0, 2.5 / 20.0),)
    late = [outcome(1, Purpose.STALL, 10.0, Verdict.STOPPED, event_between_s=(2.0, 3.0), exposed_s=3.0)]
    assert trials_of(plan, late) == (Trial(1, 10.0, 0.0, 3.0 / 20.0),)


def test_other_approaches_and_verdicts_are_no_trials(plan: Plan, outcome: MakeOutcome) -> None:
    """A rising hold, a stepping rotor and an undecided one say nothing for the law, and what is left out is flagged; a
    long hold from above says what any other exposure does."""
    made = [
        outcome(1, Purpose.STALL, 12.0, Verdict.TURNING, approach=Approach.RISING),
        outcome(2, Purpose.STALL, 12.0, Verdict.STEPPING),
        outcome(3, Purpose.STALL, 12.0, Verdict.UNDECIDED, event_between_s=(0.0, None)),
        outcome(4, Purpose.LONG, 12.0, Verdict.TURNING),
        outcome(5, Purpose.STALL, 12.0, Verdict.TURNING, event_between_s=(0.0, None), exposed_s=0.0),
    ]
    chosen = stall_trials(plan, duties(plan, plan.conditions[0], made), made, turning_before(made))
    assert [trial.hold for trial in chosen.trials] == [4]
    assert {"stepping_left_out", "undecided_left_out"} <= set(chosen.flags)


def test_undecided_holds_count_as_far_as_the_rotor_was_seen_turning(plan: Plan, outcome: MakeOutcome) -> None:
    """An undecided hold is an exposure up to its last sure edge, whatever followed; one undecided before the rotor had
    come down (2.5 s), or that restarted, says nothing."""
    made = [
        outcome(1, Purpose.STALL, 12.0, Verdict.UNDECIDED, event_between_s=(15.0, None)),
        outcome(2, Purpose.STALL, 11.0, Verdict.UNDECIDED, event_between_s=(8.0, 12.0)),
        outcome(3, Purpose.STALL, 11.0, Verdict.UNDECIDED, event_between_s=(2.0, None)),
        outcome(4, Purpose.STALL, 11.0, Verdict.UNDECIDED, event_between_s=(9.0, 10.0), restarts=1),
    ]
    chosen = stall_trials(plan, duties(plan, plan.conditions[0], made), made, turning_before(made))
    assert untimed(chosen.trials) == (Trial(1, 12.0, 0.75), Trial(2, 11.0, 0.4))
    assert "undecided_left_out" in chosen.flags
    assert any("2 undecided" in words for words in chosen.assumes)


def test_trials_know_when_they_were_made(plan: Plan, outcome: MakeOutcome) -> None:
    """The time of a trial is the middle of its hold on the run clock."""
    made = [outcome(3, Purpose.STALL, 12.0, Verdict.TURNING)]
    chosen = stall_trials(plan, duties(plan, plan.conditions[0], made), made, turning_before(made))
    assert [trial.at_s for trial in chosen.trials] == [190.0]  # exact: begun at 180 s, 20 s long


def test_motor_that_restarts_by_itself_has_stopped(plan: Plan, outcome: MakeOutcome) -> None:
    """A rotor that turns at the end but stopped in between counts as a stop, and is flagged."""
    made = [outcome(1, Purpose.STALL, 10.0, Verdict.TURNING, restarts=1, event_between_s=(4.0, 5.0))]
    chosen = stall_trials(plan, duties(plan, plan.conditions[0], made), made, turning_before(made))
    assert untimed(chosen.trials) == (Trial(1, 10.0, 0.2, 0.05),)
    assert "self_restart" in chosen.flags


@pytest.mark.parametrize(
    ("least_s", "before", "counts"),
    [(2.5, Verdict.TURNING, True), (2.0, Verdict.TURNING, False), (2.5, Verdict.STOPPED, False)],
    ids=["qualifies", "shorter than five time constants", "the rotor already stood"],
)
@pytest.mark.parametrize("after", [Verdict.TURNING, Verdict.STOPPED])
def test_curve_holds_count_by_design_not_by_ending(
    plan: Plan, outcome: MakeOutcome, least_s: float, before: Verdict, counts: bool, after: Verdict
) -> None:
    """A falling curve hold is an exposure when it was long enough by design and began with a turning rotor."""
    made = [
        outcome(1, Purpose.CURVE, 40.0, before, least_s=0.1),
        outcome(2, Purpose.CURVE, 10.0, after, least_s=least_s, event_between_s=(1.0, 2.0), exposed_s=8.0),
    ]
    assert (2 in {trial.hold for trial in trials_of(plan, made)}) == counts


def test_hold_after_a_gap_is_not_known_to_begin_turning(outcome: MakeOutcome) -> None:
    """Only the hold just before, done and in the same session, or an own relaunch shows that the rotor turned."""
    made = [
        outcome(1, Purpose.CURVE, 40.0, Verdict.TURNING),
        outcome(3, Purpose.CURVE, 30.0, Verdict.TURNING),
        replace(outcome(4, Purpose.CURVE, 20.0, Verdict.TURNING), session=2),
        outcome(5, Purpose.CURVE, 15.0, Verdict.TURNING, status=Status.DISCARDED),
        outcome(6, Purpose.CURVE, 12.0, Verdict.TURNING),
        outcome(7, Purpose.CURVE, 11.0, Verdict.TURNING),
        outcome(9, Purpose.CURVE, 10.0, Verdict.TURNING, lead=((22.0, 4.0),)),
    ]
    assert turning_before(made) == {7, 9}


def test_duty_is_the_measured_one(plan: Plan, outcome: MakeOutcome) -> None:
    """Readings at one setting are taken together; one never read takes its neighbours' offset; 0 and 100 % stay."""
    made = [
        outcome(1, Purpose.STALL, 12.0, Verdict.TURNING, values={"scope.duty": (12.31, 0.03, "%")}),
        outcome(2, Purpose.STALL, 12.0, Verdict.TURNING, values={"scope.duty": (12.29, 0.03, "%")}),
        outcome(3, Purpose.STALL, 10.0, Verdict.TURNING, values={"scope.duty": (10.10, 0.03, "%")}),
        outcome(4, Purpose.STALL, 11.0, Verdict.STOPPED),
        outcome(5, Purpose.STALL, 9.0, Verdict.STOPPED),
        outcome(6, Purpose.CURVE, 100.0, Verdict.TURNING),
        outcome(7, Purpose.CURVE, 0.0, Verdict.STOPPED),
    ]
    known = duties(measured(plan), plan.conditions[0], made)
    assert known.of == pytest.approx({1: 12.3, 2: 12.3, 3: 10.1, 4: 11.2, 5: 9.1, 6: 100.0, 7: 0.0})
    assert known.u == 0.03
    assert known.flags == ()
    assert "scope.duty" in known.assumes


@pytest.mark.parametrize(
    ("delay_s", "flags"), [(1e-6, {"duty_commanded"}), (1e-5, {"duty_commanded", "duty_not_measured"})]
)
def test_commanded_duty_carries_the_switch_delay(
    plan: Plan, outcome: MakeOutcome, delay_s: float, flags: set[str]
) -> None:
    """Without a duty reading the drive's own quantised duty is taken, with u from delay × frequency (300 Hz)."""
    made = [outcome(1, Purpose.STALL, 12.0, Verdict.TURNING, values={"board.duty_set": (11.98, 0.0, "%")})]
    known = duties(replace(plan, switch_delay_s=delay_s), plan.conditions[0], made)
    assert known.of == {1: 11.98}
    assert known.u == pytest.approx(delay_s * 300.0 * 100.0 / 3**0.5)  # exact: rectangle
    assert set(known.flags) == flags


def test_start_trials_are_from_rest(plan: Plan, outcome: MakeOutcome) -> None:
    """Only attempts from rest count, each as one success or one failure; an undecided one is left out and flagged."""
    made = [
        outcome(1, Purpose.START, 20.0, Verdict.STARTED, approach=Approach.FROM_REST),
        outcome(2, Purpose.START, 18.0, Verdict.DID_NOT_START, approach=Approach.FROM_REST),
        outcome(3, Purpose.START, 18.0, Verdict.UNDECIDED, approach=Approach.FROM_REST),
        outcome(4, Purpose.KICK, 18.0, Verdict.STARTED, approach=Approach.FROM_REST),
    ]
    chosen = start_trials(duties(plan, plan.conditions[0], made), made)
    assert untimed(chosen.trials) == (Trial(1, 20.0, 1.0), Trial(2, 18.0, 0.0, 1.0))
    assert "undecided_left_out" in chosen.flags


def test_points_are_of_a_rotor_that_turned(plan: Plan, outcome: MakeOutcome) -> None:
    """Readings of a stall hold that stopped count for the time before, if it was long enough to settle."""
    speed = {"board.speed": (500.0, 1.0, "rpm")}
    made = [
        outcome(1, Purpose.CURVE, 40.0, Verdict.TURNING, values=speed),
        outcome(2, Purpose.CURVE, 10.0, Verdict.STOPPED, values=speed),
        outcome(3, Purpose.STALL, 10.0, Verdict.STOPPED, values=speed, event_between_s=(8.0, 8.2)),
        outcome(4, Purpose.STALL, 10.0, Verdict.STOPPED, values=speed, event_between_s=(2.0, 2.2)),
        outcome(5, Purpose.STALL, 12.0, Verdict.TURNING),
        outcome(6, Purpose.CURVE, 40.0, Verdict.TURNING, values=speed, approach=Approach.RISING),
        outcome(7, Purpose.STALL, 12.0, Verdict.STEPPING, values=speed),
    ]
    known = duties(plan, plan.conditions[0], made)
    falling = speed_points(plan, known, made, Approach.FALLING)
    assert [(point.hold, point.weight) for point in falling] == [(1, 20.0), (3, 8.0)]
    assert [point.hold for point in speed_points(plan, known, made, Approach.RISING)] == [6]


def test_voltage_points_keep_their_flags(plan: Plan, outcome: MakeOutcome) -> None:
    """At the switch node without a supply reading the point leans on the supply's setting, and says so."""
    made = [outcome(1, Purpose.CURVE, 40.0, Verdict.TURNING, values={"meter.volts": (7.0, 0.01, "V")})]
    node = replace(plan, voltage_at="switch_node")
    (point,) = voltage_points(node, plan.conditions[0], duties(node, plan.conditions[0], made), made, Approach.FALLING)
    assert (point.value, point.flags) == (5.0, ("supply_setting_assumed",))
