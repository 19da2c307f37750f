"""The answer as rows: nothing is left out, the worst is the worst, reasons stay."""

from __future__ import annotations

import copy
from typing import Any

import pytest

from sweeprig.report import answer, tables
from sweeprig.report.catalogue import MEANINGS, flag_text, meaning


def by_name(rows: list[tables.Row]) -> dict[str, tables.Row]:
    return {row.finding: row for row in rows}


@pytest.fixture
def findings(run: Any) -> dict[str, Any]:
    return dict(run.findings.as_json())


def test_every_finding_has_a_row(findings: dict[str, Any]) -> None:
    """Each F of a condition, also those in the usable range, is one row with its full name."""
    condition = findings["conditions"][0]
    wanted = {key for key, value in condition.items() if isinstance(value, dict) and "value" in value}
    wanted |= {f"usable_range.{key}" for key in condition["usable_range"]}
    assert {row.finding for row in tables.rows(condition)} == wanted


def test_null_finding_keeps_its_row_with_the_reason(findings: dict[str, Any]) -> None:
    """What could not be found says why in its own row."""
    row = by_name(tables.rows(findings["conditions"][2]))["start_duty_percent"]
    assert not row.found
    assert row.value == tables.NOT_FOUND
    assert row.remarks == ("no start trial was done at 25 kHz: the run ended before",)


def test_what_nobody_asked_for_has_no_row(findings: dict[str, Any]) -> None:
    """A finding that the sweep does not ask for stays in findings.json and takes no row of the page."""
    condition = copy.deepcopy(findings["conditions"][0])
    condition["kick_99_s"] = {"value": None, "reason": "the sweep asks for no kick"}
    assert "kick_99_s" not in by_name(tables.rows(condition))
    condition["kick_99_s"]["reason"] = "every kick failed"
    assert "kick_99_s" in by_name(tables.rows(condition))


def test_null_finding_without_reason_says_so() -> None:
    """A missing reason is named as missing, not hidden."""
    row = tables.row("lapse", {"value": None}, "somewhere")
    assert row.remarks == ("no reason is on record",)


@pytest.mark.parametrize(
    ("key", "condition"),
    [("stall_duty_percent", "25 kHz"), ("top_speed_rpm", "25 kHz"), ("usable_range.high_duty_percent", "25 kHz"),
     ("stall_speed_rpm", "300 Hz"), ("start_duty_percent", "1 kHz")],
)  # fmt: skip
def test_worst_case_is_taken_on_the_worse_side(findings: dict[str, Any], key: str, condition: str) -> None:
    """Highest stall duty, lowest top speed, smallest upper end; a condition without the finding does not win."""
    assert by_name(tables.worst_rows(findings))[key].condition == condition


def test_worst_case_names_conditions_without_the_finding(findings: dict[str, Any]) -> None:
    """A worst case that not all conditions took part in says how many did not."""
    row = by_name(tables.worst_rows(findings))["start_duty_percent"]
    assert "not found under 1 of 3 conditions" in row.remarks


def test_worst_case_found_nowhere_keeps_its_reason(findings: dict[str, Any]) -> None:
    """A finding that no condition has keeps its row and its reason in the table of worst cases."""
    row = by_name(tables.worst_rows(findings))["linearity_percent"]
    assert (row.found, row.condition) == (False, "all")
    assert row.remarks == ("fewer than five duties lie in the usable range",)


def test_bound_is_written_as_a_bound(findings: dict[str, Any]) -> None:
    """A one-sided finding carries its sign and says that it is one-sided, and shows no k."""
    row = by_name(tables.rows(findings["conditions"][0]))["usable_range.low_duty_percent"]
    assert (row.value, row.interval, row.k) == ("≤ 14.62", "one-sided 95 %", "–")


def test_holds_are_counted(findings: dict[str, Any]) -> None:
    """`holds` may be a count or the list of hold numbers; both show the count."""
    finding = findings["conditions"][0]["stall_duty_percent"] | {"holds": [3, 4, 9]}
    assert tables.row("stall_duty_percent", finding, "").holds == "3"


def test_a_finding_of_a_later_version_is_shown(findings: dict[str, Any]) -> None:
    """A name that this version does not list keeps its row, with the unit that its ending says."""
    condition = findings["conditions"][0] | {"dead_band_percent": findings["conditions"][0]["stall_duty_percent"]}
    row = by_name(tables.rows(condition))["dead_band_percent"]
    assert (row.name, row.unit, row.value) == ("Dead band", "%", "12.34 ± 0.15")


def test_range_findings_are_known_by_their_short_name() -> None:
    """A limit names `high_duty_percent` without its table; the meaning is the same."""
    assert meaning("high_duty_percent") is MEANINGS["usable_range.high_duty_percent"]


def test_flag_with_a_figure_keeps_it() -> None:
    """A flag that carries a figure after a colon shows it."""
    assert flag_text("not_settled_to_tolerance:3.2%") == "did not settle to the tolerance (3.2%)"


def test_terminal_lines_carry_the_same_numbers(findings: dict[str, Any]) -> None:
    """The terminal's lines and the page's rows show the same value for every finding."""
    lines = tables.as_lines(findings)
    rows = tables.worst_rows(findings)
    assert len(lines) == len(rows)
    assert all(row.value in line and row.name in line for row, line in zip(rows, lines, strict=True))


def test_sentences_answer_in_plain_words(findings: dict[str, Any]) -> None:
    """The answer names the two lowest duties, the upper end and the speeds of the worst conditions."""
    text = " ".join(answer.sentences(findings, "fan A"))
    assert "keeps turning at 16.22 % duty and above" in text
    assert "at least 99 of 100 holds of 20 s" in text
    assert "it starts at 28.32 % duty and above" in text
    assert "Above 89.7 % duty" in text
    assert "worst of the 3 conditions" in text


def test_sentences_say_what_was_not_found(findings: dict[str, Any]) -> None:
    """Where no lowest duty was found anywhere, the answer says so with the reason."""
    changed = copy.deepcopy(findings)
    for condition in changed["conditions"]:
        condition["usable_range"]["low_duty_percent"] = {"value": None, "reason": "no stall trial was done"}
    assert "No lowest reliable duty can be given for fan A: no stall trial was done." in answer.sentences(
        changed, "fan A"
    )


def test_sentences_never_turn_a_lower_bound_into_a_promise(findings: dict[str, Any]) -> None:
    """A motor that never started is not said to start at the highest duty tried."""
    changed = copy.deepcopy(findings)
    never = {"value": 100.0, "u": None, "bound": "lower", "flags": ["never_started"]}
    for condition in changed["conditions"]:
        condition["usable_range"]["low_duty_from_rest_percent"] = never
    text = " ".join(answer.sentences(changed, "fan A"))
    assert "it starts at" not in text
    assert "lies above 100" in text


def test_no_condition_is_said() -> None:
    """Findings without any condition give one honest sentence."""
    assert answer.sentences({"conditions": []}, "fan A") == [
        "Nothing can be said about fan A: no condition has findings."
    ]


def test_figure_that_is_only_counted_has_no_interval() -> None:
    """A finding whose interval is a point is written as its value alone; one with a width keeps it."""
    counted = {"value": 8491.0, "low": 8491.0, "high": 8491.0, "flags": []}
    line = tables.row("long_run_extrapolation_factor", counted, "")
    assert (line.value, line.interval) == ("8491", "–")
    wide = tables.row("long_run_extrapolation_factor", {**counted, "low": 8400.0}, "")
    assert wide.interval.startswith("84")
