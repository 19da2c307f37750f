"""How it was measured: every table of the sweep has its line, with the figures that were asked for."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from sweeprig.plan import KickPlan, LongRunPlan, ReferencePlan
from sweeprig.report import how


@pytest.fixture
def asked(run: Any) -> dict[str, str]:
    """The lines of a plan that asks for everything."""
    plan = run.plan
    run.plan = replace(
        plan,
        run_in=replace(plan.run_in, drift_percent_per_hour=0.5, most_s=1440.0),
        curve=replace(plan.curve, standard_error_percent=1.0, most_points=48),
        stall=replace(plan.stall, search="adaptive", holds=80, standard_error_percent=0.3, times_s=(5.0, 20.0, 40.0)),
        start=replace(plan.start, search="adaptive", trials=70, standard_error_percent=0.6),
        kick=KickPlan((60.0, 100.0), 1.5, 0.02, 2.0, 5.0, 10.0, 33),
        long_run=LongRunPlan(86_400.0, 300.0, 2),
        reference=ReferencePlan(45.0, 7200.0, 30.0),
        sharpen=("stall_duty_percent", "start_99_duty_percent"),
        deadline_utc=1_772_520_300.0,
        spend="all",
    )
    return dict(how.settings(run))


@pytest.mark.parametrize(
    ("line", "says"),
    [
        ("Run-in", ("240 s at 60 %", "less than 0.5 %/h", "1440 s at most")),
        ("Reference holds", ("30 s at 45 %", "every 2 h")),
        ("Speed curve", ("standard error is 1 % of the highest speed",)),
        ("Stall trials", ("at most 80 holds", "5 s to 40 s", "hold time 20 s", "0.3 %, and on to the deadline")),
        ("Start trials", ("at most 70 trials", "search: adaptive", "0.6 %, and on to the deadline")),
        ("Kick trials", ("at most 33 pulses", "20 ms to 2 s", "60, 100 %", "1.5 % above", "for 5 s")),
        ("Long run", ("2 holds of 300 s", "99 % of services of 24 h")),
        ("To be sharpened", ("Stall duty, Start duty, 99 %",)),
        ("Deadline", ("2026-03-03 06:45 UTC",)),
    ],
)
def test_everything_asked_for_has_its_line(asked: dict[str, str], line: str, says: tuple[str, ...]) -> None:
    """Each stage of the sweep is told with its own figures."""
    assert [text for text in says if text not in asked[line]] == []


def test_search_without_a_deadline_ends_when_known(run: Any) -> None:
    """`spend = all` changes nothing where there is no deadline to go on to."""
    run.plan = replace(run.plan, stall=replace(run.plan.stall, search="adaptive"), spend="all", deadline_utc=None)
    assert "deadline" not in dict(how.settings(run))["Stall trials"]


def test_ladder_makes_its_trials_and_nothing_else_is_told(run: Any) -> None:
    """A ladder's line has its number as it is, and what the sweep does not ask for has no line."""
    lines = dict(how.settings(run))
    assert lines["Stall trials"].startswith("24 holds of 20 s a condition, search: ladder;")
    assert not {"Kick trials", "Long run", "Reference holds", "To be sharpened", "Deadline"} & set(lines)
