"""Kick trials: which kick duty, which pulse, at which run duty; and that it ends."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sweeprig.exposures import KICK_PULSE
from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import KickPlan, Plan, SettlePlan, StallPlan
from sweeprig.quantities import Reading
from sweeprig.schedule.budget import LEAST_KICKS
from sweeprig.schedule.history import History, past_of
from sweeprig.schedule.kick import kicks, next_pulse, tried
from sweeprig.schedule.proposal import Here, Proposal
from sweeprig.schedule.tally import Tally

AT = Condition(1000.0, 12.0)
KICK = KickPlan((60.0, 100.0), 1.0, 0.02, 2.0, 5.0, 10.0, 12)
PLAN = Plan(
    seed=1, conditions=(AT,), roles={"drive": "board", "speed": "board.speed"}, duty_low_percent=0.0,
    duty_high_percent=100.0, time_constant_s=0.2, lowest_rpm=60.0, zero_time_s=0.0, run_in=None, curve=None,
    stall=StallPlan("ladder", 20.0, 0.5, 24, 12.0, 4.0), start=None, settle=SettlePlan(1.0), kick=KICK,
)  # fmt: skip


def outcome(hold: Hold, verdict: Verdict, turned_s: float = 20.0, pulse_s: float | None = None) -> Outcome:
    at = 60.0 * hold.number
    between = (turned_s, turned_s + 0.3 if verdict is Verdict.STOPPED else None)
    means = {} if pulse_s is None else {KICK_PULSE: Reading(pulse_s, 0.001, "s", at, KICK_PULSE)}
    return Outcome(hold.number, hold, 1, Status.DONE, verdict, at, at, at, at, turned_s, between, means=means)


def exposed(number: int, duty: float, turned_s: float, stops: bool) -> Outcome:
    """A stall hold."""
    lead = ((duty + 12.0, 4.0),)
    hold = Hold(number, Purpose.STALL, Approach.FALLING, AT, duty, 0.0, 20.0, EndsWhen.STOPPED, (), "", lead)
    return outcome(hold, Verdict.STOPPED if stops else Verdict.TURNING, turned_s)


SEARCHED = [exposed(i + 1, 10.0 + 0.25 * (i % 5), 20.0 if i % 5 > 1 else 4.0, i % 5 <= 1) for i in range(30)]
"""Half of the holds at 10.25 % stop, none at 10.5 % and above."""


def asked(made: Sequence[Outcome], plan: Plan = PLAN) -> Proposal | None:
    past = past_of(History(made), plan)
    return kicks(plan, Here(AT, past.conditions.get(AT) or Tally(), past, len(made) + 1, 0.0))


def wanted(made: Sequence[Outcome], plan: Plan = PLAN) -> Hold:
    proposal = asked(made, plan)
    assert proposal is not None
    return proposal.hold


def test_a_kick_hold() -> None:
    """At rest for the rest time, the pulse at the kick duty, then the run duty for the hold time."""
    hold = wanted(SEARCHED)
    assert (hold.purpose, hold.approach, hold.ends_when) == (Purpose.KICK, Approach.FROM_REST, EndsWhen.STOPPED)
    assert hold.lead[0] == (0.0, 10.0)
    assert hold.lead[1][0] == 100.0
    assert (hold.least_s, hold.most_s) == (5.0, 5.0)


def test_run_duty_is_the_reliable_one_and_the_margin() -> None:
    """The run duty is a bound of the 99 % duty plus the margin, above every duty at which a hold stopped; once kicks
    were done it stays, whatever else is learned."""
    hold = wanted(SEARCHED)
    assert 10.25 + 1.0 < hold.duty_percent < 13.0
    more = [*SEARCHED, outcome(hold, Verdict.STARTED)]
    worse = [exposed(40 + i, 11.0, 4.0, True) for i in range(10)]
    assert wanted([*more, *worse]).duty_percent == hold.duty_percent
    assert wanted([*SEARCHED, *worse]).duty_percent > hold.duty_percent


def test_before_anything_is_known() -> None:
    """No kick without a duty that is known to sustain; where no hold ever stopped, the lowest that turned is taken."""
    assert asked([]) is None
    assert asked([exposed(1, 10.0, 4.0, True)]) is None
    assert wanted([exposed(1, 14.0, 20.0, False), exposed(2, 12.0, 20.0, False)]).duty_percent == 13.0
    assert asked(SEARCHED, replace(PLAN, kick=None)) is None


def motor(need_s: float, plan: Plan = PLAN, error_s: float = 0.0) -> list[Outcome]:
    """All kicks of a motor that wants just so long a pulse at full duty, and in proportion more below it."""
    made = list(SEARCHED)
    while (proposal := asked(made, plan)) is not None:
        duty, pulse = proposal.hold.lead[-1]
        starts = pulse + error_s >= need_s * 100.0 / duty
        made.append(outcome(proposal.hold, Verdict.STARTED if starts else Verdict.DID_NOT_START, 5.0, pulse + error_s))
        assert len(made) < 200
    return made[len(SEARCHED) :]


def test_kick_duties_in_turn() -> None:
    """Both kick duties advance together, the higher one first, each to its number of trials."""
    duties = [one.hold.lead[-1][0] for one in motor(0.11)]
    assert duties == [100.0, 60.0] * KICK.trials


@pytest.mark.parametrize("need_s", [0.025, 0.11, 0.6])
def test_search_closes_in(need_s: float) -> None:
    """After its first trials half of the pulses lie between what the motor wants and twice that, and none much above:
    it is the pulse that nearly always starts it that is looked for."""
    lengths = sorted(one.hold.lead[-1][1] for one in motor(need_s) if one.hold.lead[-1][0] == 100.0)[6:]
    assert 0.9 * need_s <= lengths[len(lengths) // 2] <= 2.0 * need_s
    assert sorted(lengths)[-2] <= 2.0 * need_s


def test_known_as_asked() -> None:
    """The search ends when the pulse is known as asked: after fewer trials where less is asked for."""
    many = replace(PLAN, kick=replace(KICK, trials=100))
    loose = replace(PLAN, kick=replace(KICK, trials=100, standard_error=1.0))
    assert 4 < len(motor(0.11, loose)) < len(motor(0.11, many)) < 200


def test_pulse_as_it_was() -> None:
    """The search goes by the pulse as it was timed, not by what was asked for."""
    hold = wanted(SEARCHED)
    made = [*SEARCHED, outcome(hold, Verdict.STARTED, 5.0, 0.37)]
    tally = past_of(History(made), PLAN).conditions[AT]
    assert tried(tally, 100.0, hold.duty_percent) == [(0.37, True)]
    assert tried(tally, 60.0, hold.duty_percent) == []
    assert tried(tally, 100.0, hold.duty_percent + 1.0) == []


def test_undecided_trials_count_but_say_nothing() -> None:
    """A kick that could not be judged changes nothing but the number of trials made, so that the search ends."""
    trials = [(0.1, False), (0.2, True)]
    assert next_pulse(KICK, [*trials, (0.5, None)]) == next_pulse(KICK, trials)
    doubtful = [outcome(replace(wanted(SEARCHED), number=31 + i), Verdict.UNDECIDED) for i in range(KICK.trials)]
    assert wanted([*SEARCHED, *doubtful]).lead[-1][0] == 60.0


def test_a_motor_that_no_pulse_starts() -> None:
    """Three failures in a row at the longest pulse end the search at that kick duty: more would only heat it."""
    made = motor(1e9)
    assert all(sum(one.hold.lead[-1][0] == duty for one in made) < KICK.trials for duty in KICK.duties_percent)
    assert made[-1].hold.lead[-1][1] >= 0.9 * KICK.longest_s


def test_a_motor_that_needs_no_kick() -> None:
    """Where every pulse starts it, ten with the shortest are enough at each kick duty: there is but a bound to find."""
    needs_none = motor(0.0, replace(PLAN, kick=replace(KICK, trials=60)))
    for duty in KICK.duties_percent:
        trials = [o for o in needs_none if o.hold.lead[-1][0] == duty]
        assert len(trials) < 25
        assert sum(o.hold.lead[-1][1] <= 1.1 * KICK.shortest_s for o in trials) >= 10


def test_shortest_and_longest() -> None:
    """No pulse is shorter or longer than the sweep allows, whatever the motor wants."""
    for need_s in (1e-4, 1e9):
        assert all(KICK.shortest_s <= one.hold.lead[-1][1] <= KICK.longest_s for one in motor(need_s))


def test_spare_once_answered() -> None:
    """A kick has no answer before a start was seen, nor before the trials are made that time is left for; afterwards
    its holds wait for others before a deadline."""
    made = motor(0.11)
    for count, spare in ((0, False), (4, False), (2 * LEAST_KICKS, True)):
        proposal = asked([*SEARCHED, *made[:count]])
        assert proposal is not None
        assert proposal.spare is spare


@given(st.lists(st.tuples(st.floats(1e-3, 5.0), st.sampled_from([True, False, None])), max_size=30))
@settings(max_examples=60, deadline=None)
def test_total(trials: list[tuple[float, bool | None]]) -> None:
    """Any history of pulses gives a next one within the range."""
    found, _ = next_pulse(KICK, trials)
    assert math.isfinite(found)
    assert KICK.shortest_s - 1e-4 <= found <= KICK.longest_s + 1e-4
