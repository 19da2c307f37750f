"""The report of a run that a stranger filled with markup: no element, attribute or comment of the page is theirs.

The page is read by the standard library's HTML parser, and every tag with its attributes must be one that the same run
with plain words has too.
"""

from __future__ import annotations

import copy
import json
import re
import shutil
import tomllib
from collections.abc import Callable, Iterator
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest
import tomli_w
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from sweeprig.errors import ConfigError
from sweeprig.job import load
from sweeprig.opened import open_run
from sweeprig.report import page as page_module
from sweeprig.report.page import render
from sweeprig.results import fit

MARK = "zqj"
PAYLOADS = (
    f"<script>{MARK}()</script>",
    f"<img src=x onerror={MARK}()>",
    f'"><svg onload="{MARK}()">',
    f"' onclick='{MARK}()",
    f"</title></style></textarea><b>{MARK}",
    f"<!-- {MARK} -->",
    f"--><i>{MARK}</i><!--",
    f"<a href='javascript:{MARK}'>",
    f"{{{{ {MARK} }}}}{{% raw %}}",
    f"&lt;b&gt;{MARK}&#x3c;i&#x3e;",
    f"$\\frac{{{MARK}}}{{$",
    f"<![CDATA[<b>{MARK}]]>",
    f"<iframe srcdoc='{MARK}'>",
    f"{MARK}%s%n{{0.__class__}}",
    f"</svg><b>{MARK}</b>",
    f"_{MARK}_{{}}_",
    f"$<b>{MARK}$",
)
ALPHABET = "<>\"'&/=`{}%$\\!-#;: ()[]_" + MARK
TEXTS = st.sampled_from(PAYLOADS) | st.text(ALPHABET, max_size=30).map(lambda text: f"<{text}{MARK}>")
FREE = (
    "title",
    "client",
    "place",
    "operator",
    "rig.name",
    "motor.name",
    "motor.maker",
    "motor.part_number",
    "motor.serial",
    "motor.lot",
    "sweep.name",
    "motor.load",
    "rig.instruments.meter.calibration.certificate",
)


class Shape(HTMLParser):
    """What a page is made of: tags with their attributes, in pictures without their values; comments."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.parts: set[tuple[str, ...]] = set()
        self.values: list[str] = []
        self.comments: list[str] = []
        self.words: list[str] = []
        self._within = 0
        self.feed(page)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self._within += tag == "svg"
        self.values += [value or "" for _, value in attrs]
        if self._within:
            self.parts |= {("in a picture", tag, name) for name, _ in attrs} | {("in a picture", tag)}
        else:
            self.parts.add((tag, *(f"{name}={value}" for name, value in attrs)))

    def handle_endtag(self, tag: str) -> None:
        self._within -= tag == "svg"

    def handle_comment(self, data: str) -> None:
        self.comments.append(data)

    def handle_decl(self, decl: str) -> None:
        self.values.append(decl)

    def unknown_decl(self, data: str) -> None:
        self.comments.append(data)

    def handle_data(self, data: str) -> None:
        self.words.append(data)


def put(table: dict[str, Any], dotted: str, value: str) -> None:
    *above, last = dotted.split(".")
    for key in above:
        table = table.setdefault(key, {})
    table[last] = value


def job_with(folder: Path, text: str) -> int:
    """Put `text` into every free text of the run's job; how many of them took it (the loader refuses some texts)."""
    file = folder / "job.toml"
    table = tomllib.loads(file.read_text("utf-8"))
    taken = 0
    for dotted in FREE:
        tried = copy.deepcopy(table)
        put(tried, dotted, text)
        file.write_text(tomli_w.dumps(tried), "utf-8")
        try:
            load(file)
        except ConfigError:
            continue
        table, taken = tried, taken + 1
    file.write_text(tomli_w.dumps(table), "utf-8")
    return taken


def logbook_with(spoil: Callable[..., Path], text: str) -> None:
    """Put `text` into every text of the logbook that a report may show."""
    quoted = json.dumps(text)
    for key in ("direction", "load", "thermal", "freewheel"):
        spoil((f"UPDATE holds SET hold = json_set(hold, '$.condition.{key}', ?)", (text,)))
    spoil(
        ("UPDATE holds SET hold = json_set(hold, '$.why', ?, '$.roles', json_array(?))", (text, text)),
        (
            "UPDATE outcomes SET outcome = json_set(outcome, '$.reason', ?, '$.flags', json_array(?, ?))",
            (text, text, text + ":3"),
        ),
        "UPDATE outcomes SET outcome = json_set(outcome, '$.status', 'discarded') WHERE number = 1",
        (
            "UPDATE instruments SET maker = ?, model = ?, serial = ?, firmware = ?, settings = json_object(?, ?)",
            (text,) * 6,
        ),
        ("UPDATE run SET value = ? WHERE key != 'job_text'", (text,)),
        ("UPDATE events SET kind = ?, data = ?", (text, f"{{{quoted}: {quoted}}}")),
        ("UPDATE readings SET raw = ?, flags = json_array(?)", (text, text)),
    )


def texts_in(value: Any) -> Iterator[tuple[Any, Any]]:
    """(holder, key) of every text in a JSON value but the two words that the format itself knows."""
    for key, inner in value.items() if isinstance(value, dict) else enumerate(value):
        if isinstance(inner, str) and key not in ("bound", "verdict"):
            yield value, key
        elif isinstance(inner, dict | list):
            yield from texts_in(inner)


def findings_with(folder: Path, text: str) -> None:
    """Put `text` into every text of findings.json, and into lists of it that are empty."""
    table = fit(folder).findings.as_json()
    for holder, key in list(texts_in(table)):
        holder[key] = text
    finding = next(value for value in table["conditions"][0].values() if isinstance(value, dict) and "flags" in value)
    finding["flags"] = [text, text + ":7"]
    table["conditions"][0][text] = {"value": 1.0, "u": 0.1, "method": text, "assumes": text}
    table |= {"suspicions": [{"rule": text, "what": text, text: text}], "advice": [{text: text}]}
    table["limits"] = [{"finding": text, "condition": text, "limit": {text: 1.0}, "verdict": text, "rule": text}]
    (folder / "findings.json").write_text(json.dumps(table), "utf-8")


def page_with(spoil: Callable[..., Path], text: str) -> str:
    folder = spoil()
    kept = [(file, file.read_bytes()) for file in (folder / "job.toml", folder / "logbook.sqlite")]
    try:
        job_with(folder, text)
        logbook_with(spoil, text)
        findings_with(folder, text)
        return render(open_run(folder))
    finally:
        for file, data in kept:
            file.write_bytes(data)


def test_the_payload_reaches_every_corner(run_folder: Path, spoil: Callable[..., Path]) -> None:
    """The texts of these tests are really shown: a plain word stands on the page dozens of times, in ten free texts."""
    beside = run_folder.with_name("beside")
    shutil.copytree(run_folder, beside)
    assert job_with(beside, f"plain {MARK}") >= 10
    page = page_with(spoil, f"plain {MARK}")
    assert page.count(MARK) > 40


def nothing_of_it(page: str, plain: str, text: str) -> None:
    """The page is made of the same parts as the plain one, and `text` stands in it as text."""
    shape = Shape(page)
    assert shape.parts <= Shape(plain).parts
    assert not [value for value in shape.values if MARK in value]
    assert not shape.comments
    assert text in "".join(shape.words)
    assert not re.search(rf"<[^>]*{MARK}", re.sub(r"<style>.*?</style>", "", page, flags=re.DOTALL))


@pytest.fixture
def no_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    """Pages without pictures, which take nearly all of the time."""
    empty = {"curves": [], "thresholds": "", "voltages": "", "timeline": ""}
    monkeypatch.setattr(page_module, "_figures", lambda _: empty)


@pytest.mark.usefixtures("no_pictures")
@settings(max_examples=40, derandomize=True, deadline=None, suppress_health_check=list(HealthCheck))
@given(text=TEXTS)
def test_no_element_comes_from_data(spoil: Callable[..., Path], text: str) -> None:
    """40 seeded markup payloads in every text at once: tags and attributes are those of the plain page, no comment."""
    if not PLAIN:
        PLAIN.append(page_with(spoil, f"plain {MARK}"))
    nothing_of_it(page_with(spoil, text), PLAIN[0], text)


PLAIN: list[str] = []
"""The page with plain words and no pictures, made once."""


@pytest.mark.parametrize(
    "text", [f"--><i>{MARK}</i><!--", f"$\\frac{{{MARK}}}{{$", f"</svg><b>{MARK}</b>", f"]]><b>{MARK}"]
)
def test_no_element_of_a_picture_comes_from_data(spoil: Callable[..., Path], text: str) -> None:
    """With its pictures a page has no part of the payload either: no comment ends early, no formula is drawn."""
    nothing_of_it(page_with(spoil, text), page_with(spoil, f"plain {MARK}"), text)


@pytest.mark.parametrize("text", PAYLOADS)
def test_the_notebooks_table_escapes_too(run_folder: Path, text: str) -> None:
    """A run folder with markup in its name is shown in a notebook as text."""
    folder = run_folder.with_name(text.replace("/", "⁄"))
    run_folder.rename(folder)
    shown = open_run(folder)._repr_html_()
    assert not Shape(shown).comments
    assert {part[0] for part in Shape(shown).parts} == {"table", "caption", "tr", "th", "td"}
