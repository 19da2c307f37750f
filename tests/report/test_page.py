"""The page: one file, the answer first, nothing hidden, nothing hostile, nothing loaded from elsewhere."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest

from sweeprig import manual, report
from sweeprig.report import context, tables

HOSTILE = '<script>alert("x")</script><img src=x onerror=1>'


class Parsed(HTMLParser):
    """Tags, attributes and text of a page, from the standard library's parser."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.attributes: list[tuple[str, str | None]] = []
        self.words: list[str] = []
        self.feed(page)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.attributes += attrs

    def handle_data(self, data: str) -> None:
        self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


@pytest.fixture(scope="module")
def page(fresh_run: Callable[[], Any]) -> str:
    """The page of the unchanged run; rendered once, since nothing may change it."""
    return report.render(fresh_run())


def test_answer_comes_first(page: str) -> None:
    """The sentence stands before any table, the tables before the pictures, the pictures before the method."""
    order = ["keeps turning at", "Worst case over all", "Every finding", "In pictures", "How it was measured"]
    places = [page.index(text) for text in order]
    assert places == sorted(places)


def test_every_finding_is_on_the_page(page: str, run: Any) -> None:
    """Each finding of the JSON is there by its full name and by its written value."""
    text = Parsed(page).text
    for condition in run.findings.as_json()["conditions"]:
        for row in tables.rows(condition):
            assert row.finding in text
            assert row.name in text
            assert row.value in text


def test_null_findings_show_their_reason(page: str) -> None:
    """What was not found stands on the page with the reason."""
    assert "no start trial was done at 25 kHz: the run ended before" in page
    assert "fewer than five duties lie in the usable range" in page


def hostile_run(run: Any) -> Any:
    """Markup in every text that comes from files, instruments and findings."""
    run.job.title = run.job.motor.name = run.job.rig.name = run.job.client = HOSTILE
    run.job.rig.instruments["meter"].adapter = HOSTILE
    run.job.rig.instruments["meter"].calibration.certificate = HOSTILE
    findings = run.findings_table
    findings["software"] = findings["advice"][0] = findings["suspicions"][0]["what"] = HOSTILE
    findings["limits"][0]["rule"] = HOSTILE
    for condition in findings["conditions"]:
        condition["load"] = HOSTILE
        condition["stall_duty_percent"] |= {"flags": [HOSTILE], "method": HOSTILE}
        condition["linearity_percent"]["reason"] = HOSTILE
    return run


def test_hostile_names_do_not_become_markup(make_run: Callable[[], Any], page: str) -> None:
    """Markup in names from files and instruments is shown as text: no new tag and no new kind of attribute."""
    honest, attacked = Parsed(page), Parsed(report.render(hostile_run(make_run())))
    assert "script" not in attacked.tags
    assert set(attacked.tags) == set(honest.tags)
    assert {name for name, _ in attacked.attributes} == {name for name, _ in honest.attributes}
    assert 'alert("x")' in attacked.text


def test_control_and_direction_characters_are_dropped(make_run: Callable[[], Any]) -> None:
    """Characters that turn the writing direction or control a terminal never reach the page."""
    run = make_run()
    run.job.motor.name = "fan\u202e\x1b[31m\x00 A"
    page = report.render(run)
    assert not re.search("[\u202e\x1b\x00]", page)
    assert "fan[31m A" in page


def addresses(page: str) -> Iterator[str]:
    parsed = Parsed(page)
    for name, value in parsed.attributes:
        if name in ("src", "href", "xlink:href", "action", "data", "srcset"):
            yield value or ""
    yield from re.findall(r"url\(([^)]*)\)", page)


def test_nothing_is_loaded_from_elsewhere(page: str) -> None:
    """No address of another place is on the page: links point into it or carry their data with them."""
    assert "://" not in page
    assert "@import" not in page
    assert [a for a in addresses(page) if not a.startswith(("#", "data:"))] == []


def test_page_is_small(page: str) -> None:
    """A run of a hundred holds stays well below the three megabytes that a report may have."""
    assert len(page.encode()) < 1_000_000


def test_page_of_a_long_night_is_small(make_run: Callable[[], Any]) -> None:
    """Three thousand holds and twelve conditions stay below three megabytes."""
    run = make_run()
    run.outcomes = (run.outcomes * 30)[:3000]
    run.findings_table["conditions"] *= 4
    assert len(report.render(run).encode()) < 3_000_000


def test_simulated_is_said_on_top_and_across(page: str, make_run: Callable[[], Any]) -> None:
    """A simulated run carries the banner, the mark across the page and the word in its title; a real one none."""
    assert page.count("SIMULATED") >= 3
    assert "<title>SIMULATED" in page
    run = make_run()
    run.findings_table["simulated"] = False
    assert "SIMULATED" not in report.render(run)


def test_what_a_client_wants_is_there(page: str) -> None:
    """Item, date, conditions, traceability, rule, scope, release and hashes are on the page (bench practice 17)."""
    text = Parsed(page).text
    wanted = [
        "aspirating fan A", "2026-03-02 17:00", "own use", "certificate SIM-0002", "guarded, w = U", "not decided",
        "the results concern only the item tested", "This motor, this night", "it is not aerodynamic stall",
        "the brief's effective voltage", "Released by", "ab" * 32, "the drive's heartbeat lapsed", "abandoned",
    ]  # fmt: skip
    assert [words for words in wanted if words not in text] == []


def test_cautions_are_on_the_page(page: str) -> None:
    """Every short caution of the manual is in the report."""
    text = Parsed(page).text
    assert [caution for caution in manual.cautions() if caution not in text] == []


def test_definitions_carry_the_times_of_this_run(page: str) -> None:
    """The definition of the stall duty names this run's hold time, that of a start its rest time."""
    text = Parsed(page).text
    assert "half of all holds of 20 s" in text
    assert "no edge for 5 s" in text


def test_flags_with_figures_are_one_line(run: Any) -> None:
    """Holds that did not settle, each with its own figure, are counted in one line with their numbers."""
    flags = [("not_settled_to_tolerance:3.2%",), ("not_settled_to_tolerance:8%", "self_restart"), ()]
    outcomes = [replace(o, flags=f) for o, f in zip(run.outcomes[:3], flags, strict=True)]
    assert context.flagged(outcomes) == [
        ("did not settle to the tolerance", 2, "1, 2"),
        ("the rotor stopped and restarted by itself", 1, "2"),
    ]


def test_methods_that_differ_in_figures_only_are_one_line(run: Any) -> None:
    """A method whose text holds other figures under each condition is listed once, and says that they differ."""
    findings = run.findings_table
    for i, condition in enumerate(findings["conditions"]):
        condition["top_speed_rpm"]["method"] = f"pooled, {10 + i}.5 rpm"
    lines = [line for line in context.methods(findings) if line[0] == "Top speed"]
    assert [how for _, how, _ in lines] == ["pooled, 10.5 rpm (the figures differ from condition to condition)"]


def test_same_outcomes_same_hash(run: Any) -> None:
    """The hash tells data apart: equal for equal outcomes, different when one duty differs."""
    first, *others = run.outcomes
    changed = replace(first, hold=replace(first.hold, duty_percent=first.hold.duty_percent + 1e-6))
    assert context.outcomes_hash(run.outcomes) == context.outcomes_hash(list(run.outcomes))
    assert context.outcomes_hash([changed, *others]) != context.outcomes_hash(run.outcomes)


def test_write_leaves_one_whole_file(run: Any, tmp_path: Path) -> None:
    """Writing replaces an older report by a whole new one and leaves nothing else behind."""
    target = tmp_path / "report.html"
    target.write_text("old")
    assert report.write(run, target) == target
    assert target.read_text(encoding="utf-8").rstrip().endswith("</html>")
    assert [each.name for each in tmp_path.iterdir()] == ["report.html"]


def test_run_without_findings_is_still_a_page(make_run: Callable[[], Any]) -> None:
    """A run that ended before anything was found gives a page that says so."""
    run = make_run()
    run.outcomes, run.findings_table["conditions"] = [], []
    text = Parsed(report.render(run)).text
    assert "Nothing can be said about aspirating fan A" in text
    assert "no hold was made" in text
