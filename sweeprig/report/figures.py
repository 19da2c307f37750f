"""The four figures of a run, each drawn on an Axes: speed against duty, thresholds, voltages, the time line.

Figure objects only, no pyplot and no global state; what marks look like is in `marks`. Every measured value is drawn
with its interval. What is handed in: `run` with `.plan`, `.outcomes` and `.findings.as_json()`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

from sweeprig.holds import Approach, Condition, Outcome, Purpose, Status, Verdict
from sweeprig.quantities import Reading, show_quantity
from sweeprig.report import marks
from sweeprig.report.tables import condition_label, telling_fields

Json = Mapping[str, Any]
K = 2.0
"""Bars of measured points are ± K standard uncertainties."""
COVER = "95 %"
_GRID_KEYS = ("duty_percent", "speed_rpm", "u_rpm", "branch")


def speed_curve(run: Any, ax: Axes | None = None, condition: int | None = None) -> Axes:
    """Speed (rpm) against duty (%), both branches, usable range shaded, the stall point with both its intervals.

    condition  index into the findings' conditions; None draws all of them and shades what all have in common
    """
    ax = _prepared(ax, "duty (%)", "speed (rpm)")
    conditions: Sequence[Json] = run.findings.as_json().get("conditions") or ()
    chosen = list(conditions) if condition is None else [conditions[condition]]
    if not chosen:
        _say(ax, "no condition was measured")
    _shade(ax, chosen)
    for entry in chosen:
        _branches(ax, entry)
        _curve_points(ax, run, entry)
        _stall_point(ax, entry)
    _duty_axis(ax)
    if condition is not None:
        ax.set_title(marks.literal(condition_label(chosen[0])), loc="left", fontsize=8.5)
    return ax


def thresholds(run: Any, ax: Axes | None = None) -> Axes:
    """Stall and start duty (%) with their intervals against PWM frequency (Hz); bounds end in a caret.

    Several conditions at one frequency stand side by side, in the order of the findings.
    """
    ax = _prepared(ax, "PWM frequency (Hz)", "duty (%)")
    conditions: Sequence[Json] = run.findings.as_json().get("conditions") or ()
    frequencies = sorted({float(entry["pwm_hz"]) for entry in conditions})
    spots = _spots(conditions, len(marks.THRESHOLDS))
    for order, (key, mark) in enumerate(marks.THRESHOLDS.items()):
        for entry, spot in zip(conditions, spots, strict=True):
            _threshold(ax, entry.get(key), spot[order], mark)
        ax.plot([], [], label=mark.label, **_no_line(mark))
    _frequency_axis(ax, frequencies)
    ax.set_ylim(bottom=0)
    _missing_note(ax, conditions)
    ax.legend(
        frameon=False, fontsize=8, loc="upper left", bbox_to_anchor=(1.0, 1.0), title=_side_by_side(conditions),
        title_fontsize=7, alignment="left",
    )  # fmt: skip
    return ax


def _side_by_side(conditions: Sequence[Json]) -> str | None:
    """Which condition is which where several share a frequency, in their order from left to right."""
    fields = [field for field in telling_fields(conditions) if field != "pwm_hz"]
    labels = list(dict.fromkeys(condition_label(entry, fields) for entry in conditions))
    return "left to right:\n" + "\n".join(labels) if fields and len(labels) > 1 else None


def voltages(run: Any, ax: Axes | None = None) -> Axes:
    """Mean motor voltage (V) against duty (%), one mark a condition, bars ± 2 u; thin: duty times supply voltage."""
    ax = _prepared(ax, "duty (%)", "mean motor voltage (V)")
    plan = run.plan
    for index, condition in enumerate(plan.conditions):
        points = [point for o in run.outcomes if o.hold.condition == condition for point in _voltage_point(o, plan)]
        if not points:
            continue
        mark = marks.of_condition(index)
        x, y, u = (np.array(column) for column in zip(*sorted(points), strict=True))
        ax.errorbar(x, y, yerr=K * u, label=_short(condition, plan.conditions), elinewidth=0.8, **mark.style(3.6))
    for volts in sorted({c.supply_v for c in plan.conditions}):
        label = f"duty × {volts:g} V"
        ax.plot([0, 100], [0, volts], color=marks.GREY, linewidth=1.0, linestyle=(0, (1, 2)), label=label)
    _duty_axis(ax)
    ax.legend(frameon=False, fontsize=8, loc="upper left", bbox_to_anchor=(1.0, 1.0))
    if not any(_voltage_point(o, plan) for o in run.outcomes):
        _say(ax, "no motor voltage was read")
    return ax


def timeline(run: Any, ax: Axes | None = None) -> Axes:
    """The night: purpose and verdict of every hold against time since the start; sessions marked by upright lines."""
    outcomes: Sequence[Outcome] = run.outcomes
    ax = _prepared(ax, "time since the start (h)", "")
    if not outcomes:
        _say(ax, "no hold was made")
        return ax
    start = min(o.began_utc for o in outcomes)
    purposes = [p for p in Purpose if any(o.hold.purpose == p for o in outcomes)]
    rows = {purpose: len(purposes) - 1 - i for i, purpose in enumerate(purposes)}
    ends = [(o.ended_utc - start) / 3600.0 for o in outcomes]
    heights = [rows[o.hold.purpose] for o in outcomes]
    begins = [(o.began_utc - start) / 3600.0 for o in outcomes]
    many = len(outcomes) > 800
    ax.hlines(heights, begins, ends, color=marks.RULE, linewidth=4, rasterized=many)
    _verdict_marks(ax, outcomes, ends, heights, many)
    _sessions(ax, outcomes, start)
    ax.set_yticks(list(rows.values()), [p.value.replace("_", "-") for p in rows])
    ax.set_ylim(-0.6, len(purposes) - 0.2)
    ax.grid(axis="y", visible=False)
    ax.legend(frameon=False, fontsize=8, loc="upper left", bbox_to_anchor=(1.0, 1.0))
    return ax


def curve_figures(run: Any) -> list[Figure]:
    """Speed curves as small multiples on common scales, at most six panels a figure, a common legend below."""
    count = len(run.findings.as_json().get("conditions") or ())
    return [_panels(run, range(first, min(first + 6, count))) for first in range(0, count, 6)]


def figure_of(draw: Callable[[Any, Axes], Axes], run: Any, height: float = 3.2) -> Figure:
    """One of the above on a figure of its own, 9 inches wide."""
    figure = Figure(figsize=(9.0, height), layout="constrained")
    draw(run, figure.subplots())
    return figure


def _panels(run: Any, indices: range) -> Figure:
    columns = min(3, len(indices))
    lines = -(-len(indices) // columns)
    width = 9.0 if columns > 1 else 6.0
    figure = Figure(figsize=(width, 0.6 + (2.6 if columns == 3 else 3.2) * lines), layout="constrained")
    panels = figure.subplots(lines, columns, sharex=True, sharey=True, squeeze=False)
    for place, index in enumerate(indices):
        panel = panels.flat[place]
        speed_curve(run, panel, index)
        panel.label_outer()
    for panel in list(panels.flat)[len(indices) :]:
        panel.set_visible(False)
    handles, labels = _legend(panels.flat[0])
    figure.legend(handles, labels, loc="outside lower center", ncols=len(labels), frameon=False, fontsize=8)
    return figure


def _legend(ax: Axes) -> tuple[list[Any], list[str]]:
    drawn = [ax.plot([], [], **mark.style(4.0))[0] for mark in (*marks.BRANCHES.values(), marks.STALL)]
    shade = ax.fill_between([], [], color=marks.PALE)
    labels = [*(m.label for m in marks.BRANCHES.values()), f"stall point, {COVER} intervals", "usable range"]
    return [*drawn, shade], labels


def _prepared(ax: Axes | None, x: str, y: str) -> Axes:
    if ax is None:
        ax = Figure(figsize=(7.0, 4.0), layout="constrained").subplots()
    ax.set_xlabel(x, fontsize=9)
    ax.set_ylabel(y, fontsize=9)
    ax.tick_params(labelsize=8, color=marks.GREY)
    ax.spines[["top", "right"]].set_visible(False)
    ax.spines[["left", "bottom"]].set_color(marks.GREY)
    ax.grid(color=marks.PALE, linewidth=0.7)
    ax.set_axisbelow(True)
    return ax


def _say(ax: Axes, text: str) -> None:
    ax.text(0.5, 0.5, text, transform=ax.transAxes, ha="center", va="center", fontsize=9, color=marks.GREY)


def _value(finding: Json | None) -> float | None:
    return None if not finding or finding.get("value") is None else float(finding["value"])


def _shade(ax: Axes, chosen: Sequence[Json]) -> None:
    ranges = [entry.get("usable_range") or {} for entry in chosen]
    lows = [_value(r.get("low_duty_percent")) for r in ranges]
    highs = [_value(r.get("high_duty_percent")) for r in ranges]
    known = [(low, high) for low, high in zip(lows, highs, strict=True) if low is not None and high is not None]
    if known and len(known) == len(chosen):
        low, high = max(pair[0] for pair in known), min(pair[1] for pair in known)
        if low < high:
            ax.axvspan(low, high, color=marks.PALE, zorder=0, linewidth=0)


def _branches(ax: Axes, entry: Json) -> None:
    curve = entry.get("speed_curve") or {}
    columns = [list(curve.get(key) or ()) for key in _GRID_KEYS]
    for name, mark in marks.BRANCHES.items():
        chosen = sorted((x, y, u or 0.0) for x, y, u, b in zip(*columns, strict=True) if b == name and y is not None)
        if not chosen:
            continue
        x, y, u = (np.array(column, dtype=float) for column in zip(*chosen, strict=True))
        ax.fill_between(x, y - K * u, y + K * u, color=mark.colour, alpha=0.18, linewidth=0)
        ax.plot(x, y, color=mark.colour, linestyle=mark.line, linewidth=1.2)


def _belongs(condition: Condition, entry: Json) -> bool:
    return all(
        entry.get(field) is None or entry[field] == getattr(condition, field)
        for field in ("pwm_hz", "supply_v", "direction", "load", "thermal", "freewheel")
    )


def _curve_points(ax: Axes, run: Any, entry: Json) -> None:
    channel = run.plan.roles.get("speed", "")
    for approach in (Approach.FALLING, Approach.RISING):
        points = [
            (_duty(o, run.plan), speed.value, speed.u)
            for o in run.outcomes
            if _belongs(o.hold.condition, entry) and o.hold.approach == approach and _is_curve(o)
            if (speed := o.means.get(channel)) is not None and speed.value is not None
        ]
        if points:
            x, y, u = zip(*points, strict=True)
            mark = marks.BRANCHES[approach.value]
            ax.errorbar(
                x, y, yerr=[K * part for part in u], elinewidth=0.8, **(mark.style(3.2) | {"linestyle": "none"})
            )


def _is_curve(o: Outcome) -> bool:
    return o.status is Status.DONE and o.hold.purpose is Purpose.CURVE and o.verdict is Verdict.TURNING


def _duty(o: Outcome, plan: Any) -> float:
    """Measured where it was measured, else as the drive read it back, else as it was asked for, %."""
    for channel in (plan.roles.get("duty", ""), f"{plan.roles.get('drive', '')}.duty_set"):
        reading: Reading | None = o.means.get(channel)
        if reading is not None and reading.value is not None:
            return reading.value
    return o.hold.duty_percent


def _stall_point(ax: Axes, entry: Json) -> None:
    duty, speed = entry.get("stall_duty_percent"), entry.get("stall_speed_rpm")
    x, y = _value(duty), _value(speed)
    if x is None or y is None:
        return
    style = marks.STALL.style(7.0)
    ax.errorbar([x], [y], xerr=_arms(duty or {}), yerr=_arms(speed or {}), capsize=2, elinewidth=1.0, zorder=4, **style)


def _arms(finding: Json) -> np.ndarray[Any, Any]:
    """Lower and upper arm of a two-sided interval as a (2, 1) array; k·u where low and high are missing."""
    value, low, high = float(finding["value"]), finding.get("low"), finding.get("high")
    u = float(finding.get("u") or 0.0) * float(finding.get("coverage_factor") or K)
    arms = (u if low is None else value - float(low), u if high is None else float(high) - value)
    return np.array([[max(arms[0], 0.0)], [max(arms[1], 0.0)]])


def _spots(conditions: Sequence[Json], kinds: int) -> list[list[float]]:
    """Where each kind of each condition stands: side by side around its frequency, in a logarithmic axis."""
    at: dict[float, int] = {}
    places = []
    for entry in conditions:
        f = float(entry["pwm_hz"])
        places.append((f, at.get(f, 0)))
        at[f] = at.get(f, 0) + 1
    step = 1.06
    spots = []
    for f, place in places:
        width = at[f] * (kinds + 1) - 1
        spots.append([f * step ** (place * (kinds + 1) + order - (width - 1) / 2.0) for order in range(kinds)])
    return spots


def _threshold(ax: Axes, finding: Json | None, x: float, mark: marks.Mark) -> None:
    value = _value(finding)
    if finding is None or value is None:
        return
    style = _no_line(mark)
    kind = finding.get("bound") or "two_sided"
    if kind == "two_sided":
        ax.errorbar([x], [value], yerr=_arms(finding), capsize=4, elinewidth=1.2, **style)
        return
    length = np.array([max(0.05 * value, 0.8)])
    ax.errorbar([x], [value], yerr=length, uplims=kind == "upper", lolims=kind == "lower", elinewidth=1.2, **style)


def _no_line(mark: marks.Mark) -> dict[str, Any]:
    return mark.style(4.2) | {"linestyle": "none"}


def _frequency_axis(ax: Axes, frequencies: Sequence[float]) -> None:
    if not frequencies:
        _say(ax, "no condition was measured")
        return
    ax.set_xscale("log")
    ax.xaxis.set_major_locator(FixedLocator(list(frequencies)))
    ax.xaxis.set_minor_locator(NullLocator())
    ax.xaxis.set_major_formatter(FuncFormatter(lambda f, _: show_quantity(f, "Hz")))
    ax.set_xlim(frequencies[0] / 1.6, frequencies[-1] * 1.6)


def _missing_note(ax: Axes, conditions: Sequence[Json]) -> None:
    missing = [
        f"{mark.label}: not found at {show_quantity(float(entry['pwm_hz']), 'Hz')}, {entry.get('supply_v'):g} V"
        for key, mark in marks.THRESHOLDS.items()
        for entry in conditions
        if key in entry and _value(entry.get(key)) is None
    ]
    if missing:
        shown = missing[:6] + ([f"and {len(missing) - 6} more"] if len(missing) > 6 else [])
        ax.text(1.02, 0.0, "\n".join(shown), transform=ax.transAxes, fontsize=7, color=marks.GREY, va="bottom")


def _voltage_point(o: Outcome, plan: Any) -> list[tuple[float, float, float]]:
    """(duty %, V, u V) of a hold that turned, or nothing. From the switch node: V_supply - V_node (bench practice)."""
    reading = o.means.get(plan.roles.get("motor_voltage", ""))
    if reading is None or reading.value is None or not _is_curve(o):
        return []
    if plan.voltage_at == "across_motor":
        return [(_duty(o, plan), reading.value, reading.u)]
    supply = o.means.get(f"{plan.roles.get('supply', '')}.volts")
    if supply is None or supply.value is None:
        return [(_duty(o, plan), o.hold.condition.supply_v - reading.value, reading.u)]
    return [(_duty(o, plan), supply.value - reading.value, float(np.hypot(supply.u, reading.u)))]


def _duty_axis(ax: Axes) -> None:
    ax.set_xlim(0, 102)
    ax.set_ylim(bottom=0)
    ax.xaxis.set_major_locator(FixedLocator([0, 20, 40, 60, 80, 100]))


def _short(condition: Condition, among: Sequence[Condition]) -> str:
    """What tells this condition from the others: the frequency, and each other field that differs in the sweep."""
    text = show_quantity(condition.pwm_hz, "Hz")
    if len({c.supply_v for c in among}) > 1:
        text += f", {condition.supply_v:g} V"
    for field in ("direction", "load", "thermal", "freewheel"):
        if len({getattr(c, field) for c in among}) > 1:
            text += f", {getattr(condition, field)}"
    return marks.literal(text)


def _verdict_marks(ax: Axes, outcomes: Sequence[Outcome], x: list[float], y: list[int], many: bool) -> None:
    kinds = [o.verdict.value if o.status is Status.DONE else o.status.value for o in outcomes]
    for kind, mark in (marks.VERDICTS | marks.NOT_DATA).items():
        chosen = [i for i, found in enumerate(kinds) if found == kind]
        if chosen:
            style = mark.style(6.0 if kind in marks.NOT_DATA or kind == Verdict.UNDECIDED else 3.4)
            label = f"{mark.label} ({len(chosen)})"
            ax.plot([x[i] for i in chosen], [y[i] for i in chosen], label=label, rasterized=many, **style)


def _sessions(ax: Axes, outcomes: Sequence[Outcome], start: float) -> None:
    first: dict[int, float] = {}
    for o in outcomes:
        first[o.session] = min(first.get(o.session, o.began_utc), o.began_utc)
    for session, began in sorted(first.items()):
        at = (began - start) / 3600.0
        ax.axvline(at, color=marks.INK, linewidth=0.8, linestyle=(0, (4, 2)))
        ax.annotate(f"session {session}", (at, 1.0), (3, -2), xycoords=("data", "axes fraction"), fontsize=7.5,
                    textcoords="offset points", va="top")  # fmt: skip
