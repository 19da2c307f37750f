"""A small plan and a maker of outcomes for the tests of this room. No simulated bench in here."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

import pytest

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, Plan, SettlePlan, StallPlan, StartPlan
from sweeprig.quantities import Reading

CONDITION = Condition(pwm_hz=300.0, supply_v=12.0)
PLAN = Plan(
    seed=1,
    conditions=(CONDITION,),
    roles={"drive": "board", "supply": "supply", "speed": "board.speed", "motor_voltage": "meter.volts"},
    duty_low_percent=0.0,
    duty_high_percent=100.0,
    time_constant_s=0.5,
    lowest_rpm=60.0,
    zero_time_s=3.0,
    run_in=None,
    curve=CurvePlan((100.0, 60.0, 30.0), 2.0, 20.0),
    stall=StallPlan("ladder", 20.0, 0.5, 24, 12.0, 4.0),
    start=StartPlan("ladder", 3.0, 5.0, 0.5, 24),
    settle=SettlePlan(1.0),
    duty_step_percent=(0.1,),
)

MakeOutcome = Callable[..., Outcome]


@pytest.fixture
def plan() -> Plan:
    """One condition, stall holds of 20 s, start trials of 3 s, duty as commanded."""
    return PLAN


def make_outcome(
    number: int,
    purpose: Purpose,
    duty_percent: float,
    verdict: Verdict,
    *,
    approach: Approach = Approach.FALLING,
    event_between_s: tuple[float, float | None] = (20.0, None),
    exposed_s: float = 20.0,
    values: Mapping[str, tuple[float, float, str]] | None = None,
    status: Status = Status.DONE,
    condition: Condition = CONDITION,
    least_s: float = 2.0,
    lead: tuple[tuple[float, float], ...] = (),
    restarts: int = 0,
) -> Outcome:
    """values: channel → (value, u, unit). Times follow from the number: one hold a minute."""
    hold = Hold(number, purpose, approach, condition, duty_percent, least_s, 20.0, EndsWhen.STOPPED, (), "test", lead)
    means = {
        channel: Reading(value, u, unit, 60.0 * number, channel) for channel, (value, u, unit) in (values or {}).items()
    }
    began = 60.0 * number
    return Outcome(
        number=number,
        hold=hold,
        session=1,
        status=status,
        verdict=verdict,
        began=began,
        ended=began + exposed_s,
        began_utc=began,
        ended_utc=began + exposed_s,
        exposed_s=exposed_s,
        event_between_s=event_between_s,
        restarts=restarts,
        means=means,
    )


@pytest.fixture
def outcome() -> MakeOutcome:
    """Maker of one outcome: (number, purpose, duty, verdict, …)."""
    return make_outcome


@pytest.fixture
def night(outcome: MakeOutcome) -> list[Outcome]:
    """A curve both ways, a stall ladder with three stops, start trials with both results; speeds straight in duty."""

    def speed(duty: float) -> dict[str, tuple[float, float, str]]:
        return {"board.speed": (40.0 * duty, 0.5, "rpm"), "meter.volts": (0.1 * duty, 0.004, "V")}

    made: list[Outcome] = []
    for approach, duties in (
        (Approach.FALLING, (100.0, 80.0, 60.0, 40.0, 20.0)),
        (Approach.RISING, (20.0, 40.0, 60.0, 80.0, 100.0)),
    ):
        for duty in duties:
            values = speed(duty)
            made.append(outcome(len(made), Purpose.CURVE, duty, Verdict.TURNING, approach=approach, values=values))
    for stop in (9.0, 8.5, 9.0):
        duty = 12.0
        while duty > stop:
            made.append(outcome(len(made), Purpose.STALL, duty, Verdict.TURNING, values=speed(duty)))
            duty -= 0.5
        event = {"event_between_s": (3.0, 3.3), "exposed_s": 3.3}
        made.append(outcome(len(made), Purpose.STALL, stop, Verdict.STOPPED, **event))
    for duty in (17.0, 16.0, 15.0, 14.0, 15.5, 16.5, 15.0, 13.0):
        verdict = Verdict.STARTED if duty > 15.2 else Verdict.DID_NOT_START
        made.append(outcome(len(made), Purpose.START, duty, verdict, approach=Approach.FROM_REST))
    return [replace(one, number=index) for index, one in enumerate(made)]
