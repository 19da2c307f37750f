"""Freezing: conditions, curve duties, drive steps and every number's way from the files into the plan."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.job import freeze, load, shipped
from sweeprig.job.amounts import ANY_UNITS, exact_text
from sweeprig.job.freeze import board_step_percent, curve_duties
from sweeprig.plan import HeatPlan, RunIn
from sweeprig.quantities import UNITS, parse_quantity

Spoil = Callable[[str, str, str], None]


def test_pwm_changes_within_supply_within_direction_within_load(configs: Path, spoil: Spoil) -> None:
    """The product of all axes, in the order that disturbs the rig least: the load, changed by hand, last of all."""
    spoil("sweeps/evening.toml", '["12 V"]', '["12 V", "10.8 V"]')
    spoil("sweeps/evening.toml", '["forward"]', '["forward", "reverse"]')
    spoil("sweeps/evening.toml", '["free air"]', '["free air", "filter"]')
    plan = freeze(load(configs / "demo.toml"))
    axes = [(c.load, c.direction, c.supply_v, c.pwm_hz) for c in plan.conditions]
    assert axes == [
        (load_, direction, supply, pwm)
        for load_ in ("free air", "filter")
        for direction in ("forward", "reverse")
        for supply in (12.0, 10.8)
        for pwm in (300.0, 1000.0, 25_000.0)
    ]
    assert {(c.thermal, c.freewheel) for c in plan.conditions} == {("warm", "slow_decay")}
    assert len(plan.duty_step_percent) == len(plan.conditions) == 24


def test_numbers_reach_the_plan(configs: Path, spoil: Spoil) -> None:
    """Each figure of the files stands in the plan in the unit that its name says."""
    spoil("sweeps/evening.toml", "start_time = ", 'start_time = "5500 ms" #')
    plan = freeze(load(configs / "demo.toml"), session=3)
    assert (plan.seed, plan.session, plan.lowest_rpm, plan.zero_time_s) == (1, 3, 60.0, 3.0)
    assert plan.run_in == RunIn(60.0, 240.0)
    assert plan.stall is not None
    assert (plan.stall.search, plan.stall.hold_time_s, plan.stall.step_percent) == ("adaptive", 20.0, 0.1)
    assert (plan.stall.standard_error_percent, plan.stall.relaunch_above_percent, plan.stall.relaunch_s) == (
        0.3,
        12.0,
        4.0,
    )
    assert plan.stall.times_s == (5.0, 10.0, 20.0, 40.0)
    assert plan.start is not None
    assert (plan.start.start_time_s, plan.start.rest_time_s, plan.start.trials) == (5.5, 5.0, 80)
    assert plan.settle.tolerance_percent == 1.0
    assert (plan.voltage_at, plan.current_at, plan.switch_delay_s) == ("across_motor", "supply_lead", 1e-6)
    assert plan.roles["current"] == "supply.amps"
    assert (plan.duty_low_percent, plan.duty_high_percent, plan.saturation_percent) == (0.0, 100.0, 2.0)
    assert (plan.deadline_utc, plan.extra, plan.attended) == (None, {}, False)


@pytest.mark.parametrize("table", ["run_in", "curve", "stall", "start"])
def test_a_table_that_is_left_out_is_not_done(configs: Path, table: str) -> None:
    """Without its table a part of the sweep is None in the plan, and the others stay."""
    sweep = configs / "sweeps" / "evening.toml"
    parts = sweep.read_text(encoding="utf-8").split("\n[")
    sweep.write_text("\n[".join(part for part in parts if not part.startswith(f"{table}]")), encoding="utf-8")
    plan = freeze(load(configs / "demo.toml"))
    assert [name for name in ("run_in", "curve", "stall", "start") if getattr(plan, name) is None] == [table]


@given(st.integers(3, 100), st.floats(0.0, 40.0), st.floats(50.0, 100.0))
def test_curve_duties_fall_and_get_denser(points: int, low: float, high: float) -> None:
    """From the high to the low end, strictly falling, with steps that shrink (to the rounding of 0.0001 %)."""
    duties = curve_duties(points, low, high)
    steps = [above - below for above, below in pairwise(duties)]
    assert len(duties) == points
    assert duties[0] == pytest.approx(high, abs=1e-4)
    assert duties[-1] == pytest.approx(low, abs=1e-4)
    assert min(steps) > 0
    assert all(later < earlier + 2.1e-4 for earlier, later in pairwise(steps))


def test_curve_duties_by_hand() -> None:
    """Five points from 100 % to 20 %: 20 + 80·(i/4)², worked out by hand."""
    assert curve_duties(5, 20.0, 100.0) == (100.0, 65.0, 40.0, 25.0, 20.0)


def test_listed_duties_are_visited_downwards(configs: Path, spoil: Spoil) -> None:
    """A list is taken as it is, from the top down, whatever its order."""
    spoil("sweeps/evening.toml", "points = 12", 'duties = ["20 %", "100 %", "7.5 %", "50 %"]')
    plan = freeze(load(configs / "demo.toml"))
    assert plan.curve is not None
    assert plan.curve.duties_percent == (100.0, 50.0, 20.0, 7.5)


def test_lowest_of_the_curve_can_be_stated(configs: Path, spoil: Spoil) -> None:
    """`lowest` moves the low end; without it the curve ends at 2 %."""
    before = freeze(load(configs / "demo.toml")).curve
    spoil("sweeps/evening.toml", "points = 12", 'points = 12\nlowest = "8 %"')
    after = freeze(load(configs / "demo.toml")).curve
    assert before is not None
    assert after is not None
    assert (before.duties_percent[-1], after.duties_percent[-1]) == (2.0, 8.0)


@pytest.mark.parametrize(
    ("pwm_hz", "ticks"),
    [(25_000.0, 640), (1000.0, 16_000), (300.0, 53_333), (244.2, 8190), (30.53, 65_509), (30.52, 8191), (20.0, 12_500)],
)
def test_board_step_is_one_timer_tick(pwm_hz: float, ticks: int) -> None:
    """100 % over the whole ticks in a period, by hand from the firmware's table (16 MHz; 1, 8 or 64): derived."""
    assert board_step_percent(pwm_hz) == pytest.approx(100.0 / ticks, rel=1e-12)


def test_stated_drive_step_outdoes_the_boards(configs: Path, spoil: Spoil) -> None:
    """A rig that states its step is believed; one with an unknown drive and no statement gives no steps."""
    spoil("rigs/shelter-bench.toml", 'adapter = "board"', 'adapter = "my-board"')
    assert freeze(load(configs / "demo.toml")).duty_step_percent == ()
    spoil("rigs/shelter-bench.toml", 'name = "shelter bench"', 'name = "shelter bench"\ndrive_step = "0.4 %"')
    assert freeze(load(configs / "demo.toml")).duty_step_percent == (0.4, 0.4, 0.4)


def test_night_has_six_conditions() -> None:
    """The shipped night: three PWM frequencies at two supply voltages."""
    plan = freeze(load(shipped("night")))
    assert {c.supply_v for c in plan.conditions} == {12.0, 10.8}
    assert len({c.pwm_hz for c in plan.conditions}) == 3
    assert len(plan.conditions) == 6


@given(st.floats(-1e9, 1e9), st.sampled_from(ANY_UNITS))
def test_written_quantities_read_back_exactly(value: float, unit: str) -> None:
    """A float written for the frozen text is read back to the last bit, in every unit."""
    assert parse_quantity(exact_text(value, unit), unit) == value


def test_units_of_amounts_include_all_units_of_readings() -> None:
    """What a reading can be in, an accuracy can be stated in."""
    assert set(UNITS) <= set(ANY_UNITS)


def test_the_budget_of_locked_rotor_heat(configs: Path, spoil: Spoil) -> None:
    """The motor's own locked-rotor time is the budget, the lower one of rig and motor bounds each hold; cooling takes
    120 s unless the motor file says otherwise."""
    assert freeze(load(configs / "demo.toml")).heat == HeatPlan(30.0, 120.0, 12.0, 13.5)
    spoil("motors/aspirator-fan.toml", "locked_rotor_time =", 'cooling_time = "5 min"\nlocked_rotor_time =')
    assert freeze(load(configs / "demo.toml")).heat == HeatPlan(30.0, 300.0, 12.0, 13.5)
