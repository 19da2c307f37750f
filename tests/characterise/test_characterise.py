"""The whole room: a night's outcomes in, findings and their JSON out."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from sweeprig.characterise import ConditionFindings, Findings, characterise, findings
from sweeprig.characterise.findings import FINDING_NAMES, RANGE_NAMES
from sweeprig.errors import ConfigError
from sweeprig.holds import Approach, Condition, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import CurvePlan, KickPlan, LongRunPlan, Plan

ABOUT = {"job_hash": "ab12", "simulated": True, "motor": {"name": "fan"}, "rig": "bench", "software": "0.1"}
MakeOutcome = Callable[..., Outcome]
SCHEMA: dict[str, Any] = json.loads(
    (Path(findings.__file__).parent / "findings.schema.json").read_text(encoding="utf-8")
)
ALL_NAMES = (*FINDING_NAMES, *RANGE_NAMES)
LONG_AND_KICK = {name for name in FINDING_NAMES if name.startswith(("long_run_", "kick_"))}
"""What a sweep without long run and kick does not ask for."""


def of(plan: Plan, outcomes: list[Outcome]) -> ConditionFindings:
    return characterise(plan, outcomes, ABOUT).conditions[0]


def moved(hold: Hold, shift: float) -> Hold:
    return replace(hold, duty_percent=hold.duty_percent + shift)


def test_night_gives_the_findings_it_supports(plan: Plan, night: list[Outcome]) -> None:
    """A night of curve, stall and start holds gives every finding that its holds bear on, near what was put in."""
    found = of(plan, night)
    missing = {name for name in ALL_NAMES if not found.finding(name).found}
    assert missing == {"cold_start_duty_percent", "coast_time_s", "drift_percent_per_hour", *LONG_AND_KICK}
    assert found.finding("stall_duty_percent").value == pytest.approx(9.0, abs=0.5)
    assert found.finding("stall_speed_rpm").value == pytest.approx(360.0, abs=20.0)
    assert found.finding("stall_voltage_volts").value == pytest.approx(0.9, abs=0.05)
    assert found.finding("start_duty_percent").value == pytest.approx(15.2, abs=0.5)
    assert found.finding("top_speed_rpm").value == pytest.approx(4000.0)
    assert (found.hold_time_s, found.start_time_s, found.rest_time_s) == (20.0, 3.0, 5.0)
    assert set(found.speed_curve.branch) == {"falling", "rising"}


def test_a_night_without_its_highest_duty_says_so(plan: Plan, night: list[Outcome]) -> None:
    """A curve whose highest duty gave no speed (discarded each time) does not pass the next one's speed for the motor's
    top speed: what ends at the top is flagged, and nothing is where the duty was measured."""
    names = ("top_speed_rpm", "high_duty_percent", "high_speed_rpm", "turndown")
    asked = sorted({one.hold.duty_percent for one in night if one.hold.purpose is Purpose.CURVE})
    top = asked[-1]
    plan = replace(plan, curve=CurvePlan(tuple(asked), 2.0, 20.0))
    whole = of(plan, night)
    without = of(plan, [o for o in night if o.hold.purpose is not Purpose.CURVE or o.hold.duty_percent < top])
    for name in names:
        assert "highest_duty_missing" not in whole.finding(name).flags
        assert "highest_duty_missing" in without.finding(name).flags
    assert "highest_duty_missing" not in without.finding("stall_speed_rpm").flags


@pytest.mark.parametrize("shift", [-3.0, 0.7, 20.0])
def test_shift_of_all_duties_shifts_the_duties_found(plan: Plan, night: list[Outcome], shift: float) -> None:
    """The same night at duties shifted by a constant: duties found shift, speeds and differences stay."""
    here = of(plan, night)
    there = of(plan, [replace(one, hold=moved(one.hold, shift)) for one in night])
    for name in ("stall_duty_percent", "sustain_99_duty_percent", "start_99_duty_percent", "low_duty_percent"):
        before, after = here.finding(name), there.finding(name)
        assert before.value is not None
        assert after.value == pytest.approx(before.value + shift, abs=0.03)
    for name in ("stall_speed_rpm", "start_stall_hysteresis_percent", "top_speed_rpm", "curve_hysteresis_rpm"):
        assert there.finding(name).value == pytest.approx(here.finding(name).value, abs=0.5)


@pytest.mark.parametrize("status", [Status.DISCARDED, Status.ABANDONED, Status.TRIPPED])
def test_only_done_holds_are_data(plan: Plan, night: list[Outcome], outcome: MakeOutcome, status: Status) -> None:
    """Holds that were discarded, abandoned or tripped change nothing."""
    wild = [
        outcome(900 + i, Purpose.STALL, 60.0, Verdict.STOPPED, event_between_s=(0.0, 0.1), status=status)
        for i in range(9)
    ]
    assert characterise(plan, night + wild, ABOUT) == characterise(plan, night, ABOUT)


def test_order_of_outcomes_does_not_matter(plan: Plan, night: list[Outcome]) -> None:
    """Findings are a function of the set of outcomes."""
    assert of(plan, night[::-1]).stall_duty_percent.value == of(plan, night).stall_duty_percent.value


def test_no_outcomes(plan: Plan) -> None:
    """Before anything was done every finding keeps its name and says why it is not there; the JSON is valid."""
    found = characterise(plan, [], ABOUT)
    assert all(not found.conditions[0].finding(name).found for name in ALL_NAMES)
    assert all(found.conditions[0].finding(name).reason for name in ALL_NAMES)
    jsonschema.validate(found.as_json(), SCHEMA)


def test_never_stopped(plan: Plan, outcome: MakeOutcome) -> None:
    """A motor that never stopped gives an upper bound, and the usable range still has its low end."""
    made = [outcome(i, Purpose.STALL, 6.0, Verdict.TURNING) for i in range(12)]
    found = of(plan, made)
    assert found.stall_duty_percent.bound == "upper"
    assert "never_stopped" in found.stall_duty_percent.flags
    assert found.stall_duty_percent.value is not None
    assert found.stall_duty_percent.value < 6.0
    assert found.usable_range.low_duty_percent.found


def test_never_started(plan: Plan, outcome: MakeOutcome) -> None:
    """A motor that never started gives a lower bound, and nothing can be relied on from rest."""
    made = [outcome(i, Purpose.START, 90.0, Verdict.DID_NOT_START, approach=Approach.FROM_REST) for i in range(9)]
    found = of(plan, made)
    assert found.start_duty_percent.bound == "lower"
    assert "never_started" in found.start_duty_percent.flags
    assert not found.usable_range.low_duty_from_rest_percent.found
    assert not found.start_stall_hysteresis_percent.found


def test_cold_starts_are_not_pooled(plan: Plan, night: list[Outcome], outcome: MakeOutcome) -> None:
    """A cold first start belongs to a condition of its own and leaves the warm findings as they were."""
    cold = replace(plan.conditions[0], thermal="cold")
    first = outcome(999, Purpose.START, 90.0, Verdict.DID_NOT_START, approach=Approach.FROM_REST, condition=cold)
    found = characterise(plan, [*night, first], ABOUT)
    assert [one.condition.thermal for one in found.conditions] == ["warm", "cold"]
    assert found.conditions[0] == of(plan, night)


def test_worst_case_over_conditions(plan: Plan, night: list[Outcome]) -> None:
    """The worst is the highest stall duty and the lowest top speed, and conditions without it are named."""
    second, third = Condition(1000.0, 12.0), Condition(25000.0, 12.0)
    wide = replace(plan, conditions=(plan.conditions[0], second, third))
    worse = [
        replace(
            one,
            number=one.number + 500,
            hold=replace(moved(one.hold, 5.0), condition=second),
            means={k: replace(r, value=(r.value or 0.0) * 0.9) for k, r in one.means.items()},
        )
        for one in night
    ]
    found = characterise(wide, [*night, *worse], ABOUT)
    for name in ("stall_duty_percent", "top_speed_rpm", "low_duty_percent", "start_duty_percent"):
        worst = found.worst_case(name)
        assert worst.condition == second
        assert worst.missing == (third,)
    assert found.worst_case("kick_99_s").condition is None


def test_json_round_trip_and_schema(plan: Plan, night: list[Outcome]) -> None:
    """Findings go to JSON after the shipped schema and come back equal."""
    found = characterise(plan, night, ABOUT)
    jsonschema.Draft202012Validator.check_schema(SCHEMA)
    jsonschema.validate(found.as_json(), SCHEMA)
    assert Findings.from_json(found.as_text()) == found
    assert Findings.from_json(found.as_json()) == found


def test_schema_names_what_the_code_does() -> None:
    """Schema and code list the same findings, and the schema refuses a null without a reason."""
    assert set(FINDING_NAMES) <= set(SCHEMA["$defs"]["condition"]["required"])
    assert set(SCHEMA["$defs"]["condition"]["properties"]["usable_range"]["required"]) == set(RANGE_NAMES)
    silent = Findings("h", True, "m", "r", "s", ()).as_json() | {"conditions": [{}]}
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(silent, SCHEMA)


def test_null_without_reason_breaks_the_schema(plan: Plan) -> None:
    """The schema refuses a finding that has neither a value nor a reason."""
    shown = characterise(plan, [], ABOUT).as_json()
    del shown["conditions"][0]["lapse"]["reason"]
    with pytest.raises(jsonschema.ValidationError, match="reason"):
        jsonschema.validate(shown, SCHEMA)


def test_another_version_is_refused(plan: Plan) -> None:
    """Findings written in another format are refused with what to do."""
    with pytest.raises(ConfigError, match=r"version 99 \(allowed: version 1\)\. Let this release"):
        Findings.from_json(characterise(plan, [], ABOUT).as_json() | {"version": 99})


def test_unknown_name_and_missing_about(plan: Plan) -> None:
    """A finding name that does not exist, and a run that does not say what it is about, are refused by name."""
    with pytest.raises(ConfigError, match="no finding has this name: stall"):
        of(plan, []).finding("stall")
    with pytest.raises(ConfigError, match="no rig, software"):
        characterise(plan, [], {"job_hash": "", "simulated": False, "motor": ""})


def test_long_run_and_kick_stand_beside_the_rest(plan: Plan, night: list[Outcome], outcome: MakeOutcome) -> None:
    """A sweep that asks for them gives the long run's four findings and those of its kick duties, in valid JSON that
    reads back; findings of an earlier release, which knew none of them, still read."""
    asked = replace(
        plan, long_run=LongRunPlan(86_400.0, 1800.0, 2), kick=KickPlan((100.0,), 1.0, 0.02, 2.0, 5.0, 5.0, 6)
    )
    kicked = [
        outcome(800 + i, Purpose.KICK, 12.0, Verdict.STARTED if i % 3 else Verdict.DID_NOT_START,
                approach=Approach.FROM_REST, lead=((0.0, 5.0), (100.0, 0.1 * (1 + i))))
        for i in range(6)
    ]  # fmt: skip
    found = characterise(asked, [*night, *kicked], ABOUT)
    there = {name for name in LONG_AND_KICK if found.conditions[0].finding(name).found}
    assert there == {
        "kick_99_s",
        "long_run_duty_percent",
        "long_run_extrapolation_factor",
        "long_run_binary_duty_percent",
    }
    assert all(found.conditions[0].finding(name).reason for name in LONG_AND_KICK - there)
    jsonschema.validate(found.as_json(), SCHEMA)
    assert Findings.from_json(found.as_text()) == found
    old = found.as_json()
    for name in LONG_AND_KICK - {"long_run_duty_percent", "kick_99_s"}:
        del old["conditions"][0][name]
    read = Findings.from_json(old).conditions[0]
    assert read.kick_99_s == found.conditions[0].kick_99_s
    assert not read.kick_99_third_s.found
