"""A small run made by hand: findings as JSON, outcomes and plan. Invented numbers, no simulation, no other room."""

from __future__ import annotations

import copy
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from types import SimpleNamespace
from typing import Any

import pytest

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, Plan, RunIn, SettlePlan, StallPlan, StartPlan
from sweeprig.quantities import Reading

START_UTC = 1_772_470_800.0
FREQUENCIES = (300.0, 1_000.0, 25_000.0)
ROLES = {
    "drive": "board", "supply": "supply", "speed": "board.speed", "duty": "scope.duty",
    "motor_voltage": "meter.volts", "current": "supply.amps",
}  # fmt: skip
DUTIES = (100.0, 80.0, 60.0, 45.0, 32.0, 24.0, 18.0, 14.0)


def two_sided(value: float, u: float, **more: Any) -> dict[str, Any]:
    """F with a symmetric 95 % interval, k = 1.96."""
    made = {
        "value": value, "u": u, "low": value - 1.96 * u, "high": value + 1.96 * u, "bound": "two_sided",
        "coverage_probability": 0.95, "coverage_factor": 1.96, "holds": 24, "method": "hazard law, grid posterior",
        "assumes": ["duty measured at scope.duty"], "flags": [],
    }  # fmt: skip
    return made | more


def bound(value: float, u: float, kind: str = "upper", **more: Any) -> dict[str, Any]:
    ends: dict[str, Any] = {"low": None, "high": None, "bound": kind, "coverage_factor": None}
    return two_sided(value, u) | ends | more


def nothing(reason: str) -> dict[str, Any]:
    return {"value": None, "reason": reason, "flags": []}


def condition_findings(pwm_hz: float, shift: float) -> dict[str, Any]:
    x = list(DUTIES)
    falling = [speed_at(d) - 20.0 * shift for d in x]
    return {
        "pwm_hz": pwm_hz, "supply_v": 12.0, "direction": "forward", "load": "free air", "thermal": "warm",
        "freewheel": "slow_decay", "hold_time_s": 20.0, "start_time_s": 3.0, "rest_time_s": 5.0,
        "stall_duty_percent": two_sided(12.3412 + shift, 0.0765),
        "sustain_99_duty_percent": two_sided(13.6 + shift, 0.31, low=13.2 + shift, high=14.9 + shift),
        "start_duty_percent": two_sided(22.871 + shift, 0.214),
        "start_99_duty_percent": two_sided(25.0 + shift, 0.8, flags=["law_assumed"]),
        "start_stall_hysteresis_percent": two_sided(10.53, 0.23),
        "stall_speed_rpm": two_sided(512.4 - 20 * shift, 17.3, flags=["extrapolated"]),
        "stall_voltage_volts": two_sided(2.0312 + 0.1 * shift, 0.0123),
        "lowest_reliable_speed_rpm": bound(571.3, 9.2),
        "top_speed_rpm": two_sided(3912.6 - 30 * shift, 4.1),
        "linearity_percent": nothing("fewer than five duties lie in the usable range"),
        "curve_hysteresis_rpm": two_sided(14.2, 5.5),
        "resolution_rpm_per_step": two_sided(0.412, 0.013),
        "repeatability_rpm": bound(6.21, 0.9),
        "usable_range": {
            "low_duty_percent": bound(14.612 + shift, 0.31),
            "low_duty_from_rest_percent": bound(26.71 + shift, 0.8),
            "high_duty_percent": two_sided(91.3 - shift, 1.4),
            "low_speed_rpm": bound(571.3, 9.2),
            "high_speed_rpm": two_sided(3834.0, 5.2),
            "turndown": two_sided(6.71, 0.11),
        },
        "speed_curve": {
            "duty_percent": x + x[::-1], "speed_rpm": falling + [s + 12.0 for s in falling[::-1]],
            "u_rpm": [8.0] * (2 * len(x)), "branch": ["falling"] * len(x) + ["rising"] * len(x),
        },
    }  # fmt: skip


def speed_at(duty: float) -> float:
    return 4_200.0 * (1.0 - math.exp(-duty / 38.0))


def findings_json() -> dict[str, Any]:
    conditions = [condition_findings(f, i * 0.8) for i, f in enumerate(FREQUENCIES)]
    conditions[2]["start_duty_percent"] = nothing("no start trial was done at 25 kHz: the run ended before")
    return {
        "version": 1, "job_hash": "ab" * 32, "simulated": True, "motor": "aspirating fan A", "rig": "shelter bench",
        "software": "sweeprig 0.1.0", "conditions": conditions,
        "limits": [
            {"finding": "stall_duty_percent", "condition": "300 Hz, 12 V", "limit": {"at_most": 15.0},
             "verdict": "pass", "rule": "guarded, w = U"},
            {"finding": "top_speed_rpm", "condition": "25 kHz, 12 V", "limit": {"at_least": 3890.0},
             "verdict": "not_decided", "rule": "guarded, w = U"},
        ],
        "suspicions": [{"rule": "mains_flicker", "what": "speed readings gather at 3000 rpm", "evidence": "7 of 48"}],
        "advice": ["Measure the start duty at 25 kHz: the run ended before it."],
    }  # fmt: skip


def plan() -> Plan:
    return Plan(
        seed=1, conditions=tuple(Condition(f, 12.0) for f in FREQUENCIES), roles=ROLES, duty_low_percent=0.0,
        duty_high_percent=100.0, time_constant_s=0.6, lowest_rpm=60.0, zero_time_s=3.0, run_in=RunIn(60.0, 240.0),
        curve=CurvePlan(DUTIES, 2.0, 20.0), stall=StallPlan("ladder", 20.0, 0.5, 24, 12.0, 4.0),
        start=StartPlan("ladder", 3.0, 5.0, 0.5, 24), settle=SettlePlan(1.0), duty_step_percent=(0.01, 0.01, 0.16),
    )  # fmt: skip


def outcome(number: int, purpose: Purpose, condition: Condition, duty: float, at: float, **more: Any) -> Outcome:
    approach = more.pop("approach", Approach.FALLING)
    hold = Hold(number, purpose, approach, condition, duty, 0.0, 20.0, EndsWhen.SETTLED, ("speed",), "made by hand")
    speed = speed_at(duty)
    means = {
        "board.speed": Reading(speed, 5.0, "rpm", at, "board.speed"),
        "scope.duty": Reading(duty + 0.02, 0.03, "%", at, "scope.duty"),
        "meter.volts": Reading(0.13 * duty * 0.8 + 1.2, 0.05, "V", at, "meter.volts"),
    }
    fields: dict[str, Any] = {
        "session": 1, "status": Status.DONE, "verdict": Verdict.TURNING, "ended": at + 18.0,
        "began_utc": START_UTC + at, "ended_utc": START_UTC + at + 18.0, "exposed_s": 18.0, "means": means,
    }  # fmt: skip
    return Outcome(number=number, hold=hold, began=at, **(fields | more))


def outcomes() -> list[Outcome]:
    made: list[Outcome] = []

    def add(purpose: Purpose, condition: Condition, duty: float, **more: Any) -> None:
        number = len(made) + 1
        made.append(outcome(number, purpose, condition, duty, 30.0 * number, session=1 + (number > 60), **more))

    for f in FREQUENCIES:
        c = Condition(f, 12.0)
        add(Purpose.ZERO, c, 0.0, means={}, verdict=Verdict.STOPPED)
        add(Purpose.RUN_IN, c, 60.0)
        for duty in DUTIES:
            add(Purpose.CURVE, c, duty)
        for duty in DUTIES[::-1]:
            add(Purpose.CURVE, c, duty, approach=Approach.RISING)
        for i in range(12):
            add(Purpose.STALL, c, 12.0 + 0.1 * i, verdict=Verdict.STOPPED if i % 3 else Verdict.TURNING)
        add(
            Purpose.STALL, c, 12.5, status=Status.DISCARDED, reason="the drive's heartbeat lapsed", flags=("heartbeat",)
        )
        for i in range(8):
            add(Purpose.START, c, 22.0 + 0.2 * i, approach=Approach.FROM_REST,
                verdict=Verdict.STARTED if i % 2 else Verdict.DID_NOT_START,
                flags=("supply_limited",) * (i == 3))  # fmt: skip
    add(Purpose.STALL, Condition(300.0, 12.0), 12.5, status=Status.ABANDONED, verdict=Verdict.UNDECIDED,
        reason="found without an outcome at the next start")  # fmt: skip
    return made


@dataclass
class FakeRun:
    """What the report needs of an opened run."""

    findings_table: dict[str, Any]
    job: SimpleNamespace
    plan: Plan = field(default_factory=plan)
    outcomes: list[Outcome] = field(default_factory=outcomes)
    instruments: Any = None
    path: str = "runs/20260302T170000Z-aspirating-fan-a"

    @property
    def findings(self) -> SimpleNamespace:
        return SimpleNamespace(as_json=lambda: copy.deepcopy(self.findings_table))


def job() -> SimpleNamespace:
    meter = SimpleNamespace(
        adapter="scpi-multimeter", dialect="read-aperture", address="simbench:meter", connected_to="across_motor",
        accuracy={"volts": SimpleNamespace(percent_of_reading=0.02, plus=0.003)},
        calibration=SimpleNamespace(certificate="SIM-0002", date="2026-03-02", due="2027-03-02"),
    )  # fmt: skip
    board = SimpleNamespace(adapter="board", dialect=None, accuracy={}, calibration=None, connected_to="none")
    rig = SimpleNamespace(name="shelter bench", instruments={"board": board, "meter": meter})
    motor = SimpleNamespace(name="aspirating fan A")
    title = "Aspirating fan for the weather-station shelter, first sample"
    return SimpleNamespace(title=title, rig=rig, motor=motor, sweep=SimpleNamespace(name="evening"), client="own use")


@pytest.fixture(scope="session")
def fresh_run() -> Callable[[], FakeRun]:
    return lambda: FakeRun(findings_json(), job())


@pytest.fixture
def make_run(fresh_run: Callable[[], FakeRun]) -> Callable[[], FakeRun]:
    """Makes a fresh run that a test may change."""
    return fresh_run


@pytest.fixture
def run(fresh_run: Callable[[], FakeRun]) -> FakeRun:
    return fresh_run()
