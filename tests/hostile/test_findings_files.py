"""A findings.json from a stranger: refused with its key, or a report that is whole; never another error."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from sweeprig.errors import RunError
from sweeprig.logbook.findings_file import LARGEST_FILE
from sweeprig.opened import open_run
from sweeprig.report import tables
from sweeprig.report.answer import sentences
from sweeprig.report.page import render
from sweeprig.results import fit


@pytest.fixture
def findings(run_folder: Path) -> dict[str, Any]:
    """The findings of the kept run, written to its folder."""
    fitted: dict[str, Any] = fit(run_folder).findings.as_json()
    return fitted


def put(folder: Path, text: str) -> None:
    (folder / "findings.json").write_text(text, "utf-8", "surrogatepass")


TEXTS = {
    "nested without end": "[" * 100_000,
    "nested and closed": "[" * 900 + "]" * 900,
    "no object": "[1]",
    "nothing": "",
    "NaN": '{"version": 1, "advice": NaN}',
    "another version": '{"version": 99}',
    "thousands of digits": '{"version": 1, "advice": ' + "9" * 5_000 + "}",
    "a float without end": '{"version": 1, "advice": 1e999}',
    "no UTF-8": '{"version": 1, "motor": "\udcff"}',
}


@pytest.mark.parametrize("text", TEXTS.values(), ids=TEXTS)
def test_what_is_no_findings_is_refused(run_folder: Path, text: str) -> None:
    """Text that is no findings is a RunError with the file and what to do."""
    put(run_folder, text)
    with pytest.raises(RunError, match=r"findings\.json.*Delete it") as caught:
        _ = open_run(run_folder).findings
    assert len(str(caught.value)) < 1_000


WRONG: dict[str, Callable[[dict[str, Any]], object]] = {
    "a text for a value": lambda f: f["conditions"][0]["top_speed_rpm"].update(value="<b>1</b>"),
    "a number beyond use": lambda f: f["conditions"][0]["top_speed_rpm"].update(value=1e300),
    "a negative uncertainty": lambda f: f["conditions"][0]["top_speed_rpm"].update(u=-1.0),
    "an unknown bound": lambda f: f["conditions"][0]["top_speed_rpm"].update(bound="<script>"),
    "flags as a number": lambda f: f["conditions"][0]["top_speed_rpm"].update(flags=7),
    "a negative frequency": lambda f: f["conditions"][0].update(pwm_hz=-300.0),
    "a time as a text": lambda f: f["conditions"][0].update(hold_time_s="20 s"),
    "a direction as a list": lambda f: f["conditions"][0].update(direction=["forward"]),
    "columns of two lengths": lambda f: f["conditions"][0]["speed_curve"].update(duty_percent=[1.0, 2.0, 3.0]),
    "a column more": lambda f: f["conditions"][0]["speed_curve"].update(more=[]),
    "simulated as a text": lambda f: f.update(simulated="no"),
    "a limit that is a text": lambda f: f.update(limits=["pass"]),
    "a text without end": lambda f: f.update(motor="x" * 20_000),
    "conditions without end": lambda f: f.update(conditions=f["conditions"] * 2_000),
}


@pytest.mark.parametrize("wrong", WRONG.values(), ids=WRONG)
def test_a_key_of_another_kind_is_named(
    run_folder: Path, findings: dict[str, Any], wrong: Callable[[dict[str, Any]], object]
) -> None:
    """One key that holds another kind of value: a RunError that says which, before anything is drawn or printed."""
    wrong(findings)
    put(run_folder, json.dumps(findings))
    with pytest.raises(RunError, match=r"cannot be read: \w+"):
        _ = open_run(run_folder).findings


@pytest.mark.skipif(sys.platform != "linux", reason="address space is limited by a Linux call")
def test_a_file_of_a_gigabyte_is_not_read(run_folder: Path, limited: Callable[..., str]) -> None:
    """A file with a length of 1 GB (a sparse one) is refused in a process that may have 1 GB."""
    with (run_folder / "findings.json").open("wb") as file:
        file.truncate(1_000_000_000)
    code = "from sweeprig.opened import open_run; open_run(given[0]).findings"
    assert f"more than {LARGEST_FILE} bytes" in limited(1_000_000_000, code, run_folder)


LEAVES = (
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(max_size=20)
    | st.sampled_from([0.0, -0.0, 1e-300, 1e14, -1e14, "inf", "two_sided", "<b>", "$\\frac{1}{", "\x1b[31m", "\ud800"])
)
JSON = st.recursive(
    LEAVES, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4)
)


def places(value: Any) -> Iterator[tuple[Any, Any]]:
    """(holder, key) of every value in a JSON value."""
    for key, inner in value.items() if isinstance(value, dict) else enumerate(value):
        yield value, key
        if isinstance(inner, dict | list):
            yield from places(inner)


@settings(max_examples=120, derandomize=True, deadline=None, suppress_health_check=list(HealthCheck))
@given(data=st.data())
def test_any_key_may_hold_anything(run_folder: Path, findings: dict[str, Any], data: st.DataObject) -> None:
    """120 seeded spoilt findings: sentences and tables of text, or a RunError; nothing else ever escapes."""
    spoilt = json.loads(json.dumps(findings))
    everywhere = list(places(spoilt))
    for at in data.draw(st.lists(st.integers(0, len(everywhere) - 1), min_size=1, max_size=4)):
        holder, key = everywhere[at]
        holder[key] = data.draw(JSON)
    put(run_folder, json.dumps(spoilt))
    try:
        read = open_run(run_folder).findings.as_json()
    except RunError:
        return
    assert all(isinstance(text, str) for text in sentences(read, "motor"))
    assert all(isinstance(row.value, str) for condition in read["conditions"] for row in tables.rows(condition))


@settings(max_examples=8, derandomize=True, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    numbers=st.lists(st.floats(-1e15, 1e15) | st.sampled_from([0.0, 1e-12, 1e15]), min_size=6, max_size=6),
    two=st.booleans(),
)
def test_any_numbers_can_be_drawn(run_folder: Path, findings: dict[str, Any], numbers: list[float], two: bool) -> None:
    """8 seeded sets of numbers of any size in every finding of the file: the whole page with its pictures is made."""
    value, u, low, high, x, y = numbers
    for holder, key in list(places(findings)):
        if key == "value":
            holder.update(value=value, u=abs(u), low=low, high=high, bound="two_sided" if two else "upper")
            holder.update(coverage_factor=2.0, coverage_probability=0.95)
    curve = {"duty_percent": [x, y], "speed_rpm": [y, x], "u_rpm": [abs(u), 0.0], "branch": ["falling", "falling"]}
    findings["conditions"][0]["speed_curve"] = curve
    put(run_folder, json.dumps(findings))
    assert render(open_run(run_folder)).rstrip().endswith("</html>")
