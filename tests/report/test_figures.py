"""The figures: labelled axes, intervals drawn, kinds told apart without colour."""

from __future__ import annotations

import copy
import io
from collections.abc import Callable
from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.container import ErrorbarContainer
from matplotlib.figure import Figure

from sweeprig.report import figures, marks
from sweeprig.report.svg import inline_svg

DRAWN = [
    (figures.speed_curve, "duty (%)", "speed (rpm)"),
    (figures.thresholds, "PWM frequency (Hz)", "duty (%)"),
    (figures.voltages, "duty (%)", "mean motor voltage (V)"),
    (figures.timeline, "time since the start (h)", ""),
]


@pytest.mark.parametrize(("draw", "x", "y"), DRAWN)
def test_axes_carry_their_units(draw: Callable[..., Axes], x: str, y: str, run: Any) -> None:
    """Each figure comes back as Axes whose labels name quantity and unit."""
    ax = draw(run)
    assert (ax.get_xlabel(), ax.get_ylabel()) == (x, y)


@pytest.mark.parametrize("draw", [draw for draw, _, _ in DRAWN])
def test_draws_on_the_axes_it_is_given(draw: Callable[..., Axes], run: Any) -> None:
    """With an Axes of the caller's, that one is drawn on and returned."""
    own = Figure().subplots()
    assert draw(run, own) is own


@pytest.mark.parametrize(
    ("draw", "said"),
    [(figures.speed_curve, "no condition was measured"), (figures.thresholds, "no condition was measured"),
     (figures.voltages, "no motor voltage was read"), (figures.timeline, "no hold was made")],
)  # fmt: skip
def test_an_empty_run_is_drawn_without_failing(
    draw: Callable[..., Axes], said: str, make_run: Callable[[], Any]
) -> None:
    """A run without outcomes and findings gives a figure that says so, not an error."""
    run = make_run()
    run.outcomes = []
    run.findings_table["conditions"] = []
    ax = draw(run)
    figure = Figure()
    draw(run, figure.subplots())
    figure.savefig(io.BytesIO(), format="svg")
    assert said in [text.get_text() for text in ax.texts]


def heights(ax: Axes) -> list[float]:
    """Height of every error bar that is drawn, in data units."""
    bars = [c for c in ax.containers if isinstance(c, ErrorbarContainer)]
    spans = [line.get_segments() for bar in bars for line in bar.lines[2]]
    return [float(segment[:, 1].max() - segment[:, 1].min()) for span in spans for segment in span]


def test_thresholds_draw_the_interval_of_each_finding(run: Any) -> None:
    """The stall duty's bar at 300 Hz is as long as its 95 % interval: 2 × 1.96 × 0.0765 % (the fixture's numbers)."""
    assert any(height == pytest.approx(2 * 1.96 * 0.0765) for height in heights(figures.thresholds(run)))


def test_thresholds_say_what_is_missing(run: Any) -> None:
    """A threshold that was not found at a frequency is named on the figure."""
    texts = [text.get_text() for text in figures.thresholds(run).texts]
    assert any("start duty (50 %): not found at 25 kHz" in text for text in texts)


def test_thresholds_say_which_supply_is_which(run: Any) -> None:
    """Two supply voltages at one frequency are told apart by the legend's title; one voltage needs none."""
    value = copy.deepcopy(run.findings.as_json())
    value["conditions"] += [entry | {"supply_v": 10.8} for entry in value["conditions"]]
    both = SimpleNamespace(findings=SimpleNamespace(as_json=lambda: value))
    legends = [figures.thresholds(each).get_legend() for each in (both, run)]
    titles = [legend.get_title().get_text() for legend in legends if legend is not None]
    assert titles == ["left to right:\n12 V\n10.8 V", ""]


def test_usable_range_is_shaded_where_all_conditions_have_it(run: Any) -> None:
    """Drawn together, the shade runs from the highest low end to the lowest high end (the fixture's numbers)."""
    ax = figures.speed_curve(run)
    shade = ax.patches[0].get_extents().transformed(ax.transData.inverted())
    assert (shade.x0, shade.x1) == pytest.approx((14.612 + 1.6, 91.3 - 1.6))


def test_readings_carry_bars_of_two_u(run: Any) -> None:
    """Measured speeds are drawn with ± 2 u: bars of 20 rpm for u = 5 rpm (the fixture's numbers)."""
    assert any(height == pytest.approx(20.0) for height in heights(figures.speed_curve(run, condition=0)))


def first_line(ax: Axes) -> np.ndarray[Any, Any]:
    """Ordinates of the first line with more than two points."""
    lines = [np.asarray(line.get_ydata(), dtype=float) for line in ax.lines]
    return next(line for line in lines if line.size > 2)


def test_voltage_from_the_switch_node_is_supply_less_node(make_run: Callable[[], Any]) -> None:
    """With the meter at the switch node the drawn voltage is V_supply - V_node (bench practice 8)."""
    run = make_run()
    across = first_line(figures.voltages(run))
    run.plan = replace(run.plan, voltage_at="switch_node")
    assert first_line(figures.voltages(run)) == pytest.approx(12.0 - across)


def test_time_line_marks_each_session_and_each_kind(run: Any) -> None:
    """Sessions are named at their lines; the legend counts verdicts and holds that are no data."""
    ax = figures.timeline(run)
    assert {text.get_text() for text in ax.texts} == {"session 1", "session 2"}
    legend = ax.get_legend()
    assert legend is not None
    shown = {text.get_text() for text in legend.get_texts()}
    assert {"discarded (3)", "abandoned (1)", "turning (63)"} <= shown


def test_six_panels_a_figure_at_most(make_run: Callable[[], Any]) -> None:
    """Seven conditions give two figures, and no condition is left out."""
    run = make_run()
    run.findings_table["conditions"] *= 3
    panels = [[ax for ax in figure.axes if ax.get_visible()] for figure in figures.curve_figures(run)]
    assert [len(each) for each in panels] == [6, 3]


@pytest.mark.parametrize("kinds", [marks.BRANCHES, marks.THRESHOLDS, marks.VERDICTS | marks.NOT_DATA])
def test_kinds_differ_without_colour(kinds: dict[str, marks.Mark]) -> None:
    """No two kinds of one figure share mark, line and filling."""
    looks = [(mark.marker, mark.line, mark.filled) for mark in kinds.values()]
    assert len(set(looks)) == len(looks)


def luminance(colour: str) -> float:
    """Relative luminance after WCAG 2.1 (formula from memory)."""
    parts = [int(colour[i : i + 2], 16) / 255.0 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize(
    ("colour", "least"), [(marks.INK, 4.5), (marks.GREY, 4.5), (marks.BLUE, 4.5), (marks.VERMILION, 3.0)]
)
def test_contrast_on_paper(colour: str, least: float) -> None:
    """Text colours reach 4.5 : 1 on paper, marks 3 : 1 (WCAG 2.1, 1.4.3 and 1.4.11; from memory)."""
    assert 1.05 / (luminance(colour) + 0.05) >= least


def test_a_dollar_sign_in_a_label_is_a_dollar_sign(make_run: Callable[[], Any]) -> None:
    """A load called `$\\frac{$` is drawn as written; as a formula it would end the report with an error."""
    run = make_run()
    for condition in run.findings_table["conditions"]:
        condition["load"] = r"$\frac{$"
    svg = inline_svg(figures.curve_figures(run)[0], "x", "a curve")
    assert svg.startswith("<svg")


def test_svg_names_no_address_and_escapes_its_description(run: Any) -> None:
    """The picture carries no namespace address, no comment, and a description that cannot break out."""
    svg = inline_svg(figures.figure_of(figures.timeline, run), "t", '"><script>x</script>')
    assert "://" not in svg
    assert "<!--" not in svg
    assert "<script" not in svg
