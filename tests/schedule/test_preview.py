"""The night ahead: counts, time and words."""

from __future__ import annotations

from sweeprig.holds import Condition
from sweeprig.plan import CurvePlan, Plan, RunIn, SettlePlan, StallPlan, StartPlan
from sweeprig.schedule import preview


def a_plan(roles: dict[str, str]) -> Plan:
    return Plan(
        seed=1, conditions=(Condition(300.0, 12.0),), roles=roles, duty_low_percent=0.0, duty_high_percent=100.0,
        time_constant_s=0.5, lowest_rpm=60.0, zero_time_s=3.0, run_in=RunIn(60.0, 240.0),
        curve=CurvePlan((100.0, 50.0, 20.0, 10.0), 2.0, 20.0), stall=StallPlan("ladder", 20.0, 0.5, 10, 12.0, 4.0),
        start=StartPlan("ladder", 5.0, 5.0, 0.5, 7), settle=SettlePlan(1.0),
    )  # fmt: skip


def test_counts_and_time() -> None:
    """The predicted holds are those of the sweep, and the time lies between shortest and longest holds."""
    night = preview(a_plan({"drive": "board", "speed": "board.speed"}), 0.0)
    assert night.holds == {"zero": 1, "run_in": 1, "curve": 8, "stall": 10, "start": 7}
    least = 3 + 240 + 8 * 2 + 10 * (4 + 20 / 3) + 7 * (5 + 5)
    most = 3 + 240 + 8 * 20 + 10 * (1 + 4 + 20) + 7 * (5 + 3 + 5) + 2 * 8
    assert least < night.seconds < most


def test_it_says_what_is_missing() -> None:
    """A rig without a voltmeter is told so, by the finding it will not get and the role that is missing."""
    night = preview(a_plan({"drive": "board", "speed": "board.speed", "current": "supply.amps"}), 0.0)
    assert any("stall voltage" in line and "motor voltage" in line for line in night.cannot)
    assert any(line.startswith("current") for line in night.can)
