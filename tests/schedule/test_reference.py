"""When reference holds are asked for, and how the run-in goes on: by the decision function alone, with a clock."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import pytest

from sweeprig.holds import Approach, Condition, Finished, Hold, NeedsPerson, Outcome, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, Plan, ReferencePlan, RunIn, SettlePlan, StallPlan, StartPlan
from sweeprig.quantities import Reading
from sweeprig.schedule import next_hold
from sweeprig.steady import STEADY_SPEED

SLOW = Condition(300.0, 12.0)
FAST = Condition(25_000.0, 12.0)
EVERY_S = 600.0


def a_plan(**changes: object) -> Plan:
    plan = Plan(
        seed=1, conditions=(SLOW, FAST), roles={"drive": "board", "speed": "board.speed"},
        duty_low_percent=0.0, duty_high_percent=100.0, time_constant_s=0.5, lowest_rpm=60.0, zero_time_s=3.0,
        run_in=RunIn(60.0, 240.0), curve=CurvePlan((100.0, 60.0, 30.0, 20.0, 12.0, 8.0), 2.0, 20.0),
        stall=StallPlan("ladder", 20.0, 0.5, 40, 12.0, 4.0), start=StartPlan("ladder", 5.0, 5.0, 0.5, 40),
        settle=SettlePlan(1.0), reference=ReferencePlan(60.0, EVERY_S, 30.0),
    )  # fmt: skip
    return replace(plan, **changes)  # type: ignore[arg-type]  # keywords are the dataclass's own


def answered(hold: Hold, plan: Plan, now: float, status: Status = Status.DONE, speed: float = 1800.0) -> Outcome:
    """What a motor that stalls at 10.2 % and starts at 15.2 % gives; it takes as long as the hold and its lead."""
    turns = hold.duty_percent >= (10.2 if hold.approach is Approach.FALLING else 15.2)
    verdict = Verdict.TURNING if turns else Verdict.STOPPED
    if hold.purpose is Purpose.START:
        verdict = Verdict.STARTED if turns else Verdict.DID_NOT_START
    ended = now + sum(seconds for _, seconds in hold.lead) + hold.most_s
    means = {STEADY_SPEED: Reading(speed, 0.1, "rpm", ended, STEADY_SPEED)}
    return Outcome(hold.number, hold, plan.session, status, verdict, now, ended, now, ended, hold.most_s,
                   (hold.most_s, None), means=means)  # fmt: skip


def work(plan: Plan, outcomes: list[Outcome] | None = None, spoil: Purpose | None = None) -> tuple[Plan, list[Outcome]]:
    """Ask and answer until finished; a person does what is asked. spoil: holds of this purpose are all discarded."""
    done = list(outcomes or [])
    now = done[-1].ended_utc if done else 0.0
    for _ in range(800):
        decision = next_hold(plan, done, now)
        if isinstance(decision, Finished):
            return plan, done
        if isinstance(decision, NeedsPerson):
            plan = replace(plan, hands=decision.hands, session=plan.session + 1)
            continue
        status = Status.DISCARDED if decision.purpose is spoil else Status.DONE
        done.append(answered(decision, plan, now, status))
        now = done[-1].ended_utc
    raise AssertionError("not finished after 800 decisions")


def references(outcomes: list[Outcome], condition: Condition = SLOW) -> list[Outcome]:
    return [o for o in outcomes if o.hold.purpose is Purpose.REFERENCE and o.hold.condition == condition]


def test_the_first_come_right_after_the_run_in() -> None:
    """One at each condition in turn, before anything else counts; all are reached from well above."""
    _, night = work(a_plan())
    assert [str(o.hold.purpose) for o in night[:5]] == ["zero", "run_in", "reference", "reference", "curve"]
    assert [o.hold.condition for o in night[2:4]] == [SLOW, FAST]
    every = [*references(night), *references(night, FAST)]
    assert {(o.hold.approach, o.hold.duty_percent, o.hold.most_s) for o in every} == {(Approach.FALLING, 60.0, 30.0)}
    assert all(o.hold.lead[-1][0] > o.hold.duty_percent for o in every)


@pytest.mark.parametrize("condition", [SLOW, FAST], ids=["first condition", "last condition"])
def test_they_come_again_and_at_the_end(condition: Condition) -> None:
    """None sooner than `every` after the last, none much later while the condition is at work, and the last hold at
    each condition is one, so that every other lies between two."""
    _, night = work(a_plan())
    found = references(night, condition)
    assert len(found) > 4
    gaps = [later.began_utc - earlier.ended_utc for earlier, later in pairwise(found)]
    assert all(gap >= EVERY_S for gap in gaps[:-1])
    assert max(gaps) < EVERY_S + 250.0  # a pass of the curve at most: 12 holds of 20 s and a relaunch
    assert [o for o in night if o.hold.condition == condition][-1] is found[-1]


def test_the_way_up_is_not_broken_into() -> None:
    """A pass of the curve goes through from its first hold to its last, however often references are due."""
    _, night = work(a_plan(reference=ReferencePlan(60.0, 60.0, 30.0)))
    for condition in (SLOW, FAST):
        numbers = [o.number for o in night if o.hold.purpose is Purpose.CURVE and o.hold.condition == condition]
        assert numbers == list(range(numbers[0], numbers[0] + len(numbers)))


def test_none_without_the_table() -> None:
    """A sweep without [reference] has no reference hold."""
    _, night = work(a_plan(reference=None))
    assert not references(night)


def test_a_finished_run_stays_finished() -> None:
    """A resume of a run that has everything asks for no reference for its own sake."""
    plan, night = work(a_plan())
    _, again = work(replace(plan, session=2), night)
    assert [str(o.hold.purpose) for o in again[len(night) :]] == ["zero", "run_in"]


def test_a_new_session_begins_with_one() -> None:
    """After a resume the motor was warmed up again: a reference at each condition before anything else."""
    plan, night = work(a_plan())
    _, more = work(replace(plan, session=2), night[:60])
    assert [str(o.hold.purpose) for o in more[60:64]] == ["zero", "run_in", "reference", "reference"]


def test_conditions_set_by_hand_do_not_call_each_other_back() -> None:
    """Each change by hand is a session of its own; references of the conditions before are not asked for again."""
    loads = (SLOW, replace(SLOW, load="duct"))
    _, night = work(a_plan(conditions=loads, by_hand=("load",)))
    seen = [o.hold.condition for o in night if o.hold.purpose not in (Purpose.ZERO, Purpose.RUN_IN)]
    assert list(dict.fromkeys(seen)) == list(loads)
    assert seen == sorted(seen, key=loads.index)


def test_references_that_always_fail_are_given_up() -> None:
    """Three strikes at each condition, and the night goes on to its end without them."""
    _, night = work(a_plan(), spoil=Purpose.REFERENCE)
    assert [len(references(night, condition)) for condition in (SLOW, FAST)] == [3, 3]
    assert sum(o.hold.purpose is Purpose.STALL for o in night) == 80


def test_glitches_over_a_night_do_not_end_the_references() -> None:
    """Each reference that was done takes back one strike."""
    _, night = work(a_plan())
    spoiled = [replace(o, status=Status.DISCARDED) if o in references(night)[1:4] else o for o in night[:-3]]
    _, more = work(a_plan(), spoiled)
    assert references(more)[-1].number > night[-4].number


@pytest.mark.parametrize("deadline", [1800.0, 2400.0], ids=["in the curve", "in the ladders"])
def test_the_deadline_leaves_time_for_the_last_ones(deadline: float) -> None:
    """A night that its deadline cuts short still ends with a reference at each condition that was at work."""
    _, night = work(a_plan(deadline_utc=deadline))
    worked = {o.hold.condition for o in night if o.hold.purpose in (Purpose.CURVE, Purpose.STALL, Purpose.START)}
    last = [next(o for o in reversed(night) if o.hold.condition == condition) for condition in worked]
    assert all(o.hold.purpose is Purpose.REFERENCE for o in last)
    assert deadline - 150.0 < night[-1].ended_utc <= deadline


def test_the_run_in_goes_on_in_pieces_until_the_speed_is_steady() -> None:
    """Pieces of `time`, each saying how it stands; over when the drift between them is surely below the asked one."""
    plan = a_plan(run_in=RunIn(60.0, 120.0, 2.0, 1200.0))
    outcomes: list[Outcome] = []
    now, pieces = 0.0, []
    for speed in (0.0, 1700.0, 1780.0, 1799.0, 1799.9, 1800.0):
        decision = next_hold(plan, outcomes, now)
        assert isinstance(decision, Hold)
        pieces.append(decision)
        outcomes.append(answered(decision, plan, now, speed=speed))
        now = outcomes[-1].ended_utc
    assert [str(one.purpose) for one in pieces] == ["zero", *(["run_in"] * 4), "reference"]
    assert {one.most_s for one in pieces[1:5]} == {120.0}
    assert "on for 120 s at 60 % (1200 s at most in all)" in pieces[3].why
    assert "the speed drifted by" in pieces[3].why
    assert ", under the 2 %/h asked for" in pieces[5].why


def test_the_longest_run_in_is_the_last_word() -> None:
    """A speed that never comes to rest holds the night up for `longest`, no longer; the reference says so."""
    plan = a_plan(run_in=RunIn(60.0, 120.0, 2.0, 500.0))
    outcomes: list[Outcome] = []
    decision = next_hold(plan, outcomes, 0.0)
    while isinstance(decision, Hold) and decision.purpose in (Purpose.ZERO, Purpose.RUN_IN):
        outcomes.append(answered(decision, plan, 130.0 * len(outcomes), speed=1700.0 + 5.0 * len(outcomes)))
        decision = next_hold(plan, outcomes, outcomes[-1].ended_utc)
    assert sum(o.hold.purpose is Purpose.RUN_IN for o in outcomes) == 4
    assert isinstance(decision, Hold)
    assert "not surely under the 2 %/h" in decision.why
