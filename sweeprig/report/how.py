"""How it was measured: the frozen plan in words, a line for each thing that the sweep asks for. Plain text only;
what came of it is not told here.
"""

from __future__ import annotations

from typing import Any

from sweeprig.job.amounts import shown
from sweeprig.quantities import show_quantity
from sweeprig.report import numbers
from sweeprig.report.catalogue import meaning
from sweeprig.report.context import utc_text


def settings(run: Any) -> list[tuple[str, str]]:
    """How it was measured, as (what, value) lines from the frozen plan."""
    plan = run.plan
    lines = [("PWM frequencies", _several({c.pwm_hz for c in plan.conditions}, "Hz"))]
    lines.append(("Supply voltages", _several({c.supply_v for c in plan.conditions}, "V")))
    lines += [
        (name.capitalize(), ", ".join(sorted({str(getattr(c, name)).replace("_", " ") for c in plan.conditions})))
        for name in ("direction", "load", "thermal", "freewheel")
    ]
    lines.append(
        ("Allowed duty", f"{numbers.plain(plan.duty_low_percent)} % to {numbers.plain(plan.duty_high_percent)} %")
    )
    lines += [*_opening_and_curve(plan), *_trials(plan), *_after_trials(plan)]
    settle = f"last window within {numbers.plain(plan.settle.tolerance_percent)} % of the final value"
    lines.append(("Settled", f"{settle}, {numbers.plain(plan.settle.confidence_percent)} % confidence"))
    lines.append(("Lowest measurable speed", show_quantity(plan.lowest_rpm, "rpm")))
    lines.append(("Motor voltage read", plan.voltage_at.replace("_", " ")))
    lines.append(("Current read", plan.current_at.replace("_", " ")))
    lines.append(("Seed of random choices", str(plan.seed)))
    return lines


def _opening_and_curve(plan: Any) -> list[tuple[str, str]]:
    lines = []
    if plan.run_in:
        text = f"{show_quantity(plan.run_in.time_s, 's')} at {numbers.plain(plan.run_in.duty_percent)} %"
        if plan.run_in.drift_percent_per_hour is not None:
            drift = numbers.plain(plan.run_in.drift_percent_per_hour)
            text += f", and on until the speed drifts by less than {drift} %/h, {_span(plan.run_in.most_s)} at most"
        lines.append(("Run-in", text))
    if plan.reference:
        r = plan.reference
        text = f"{_span(r.time_s)} at {numbers.plain(r.duty_percent)} %, every {_span(r.every_s)}"
        lines.append(("Reference holds", text))
    if plan.curve:
        text = f"{len(plan.curve.duties_percent)} duties, downwards from the top, then upwards again"
        if plan.curve.standard_error_percent is not None:
            error = numbers.plain(plan.curve.standard_error_percent)
            text += f"; more of them until its standard error is {error} % of the highest speed"
        lines.append(("Speed curve", text))
    return lines


def _trials(plan: Any) -> list[tuple[str, str]]:
    lines = []
    if plan.stall:
        s = plan.stall
        text = (
            f"{_most(s)}{s.holds} holds of {_exposures(s)} a condition, {_search(plan, s)}; each from "
            f"{numbers.plain(s.relaunch_above_percent)} % above, kept there for {_span(s.relaunch_s)}"
        )
        lines.append(("Stall trials", text))
    if plan.start:
        s = plan.start
        text = (
            f"{_most(s)}{s.trials} trials of {_span(s.start_time_s)} a condition, {_search(plan, s)}; each from rest, "
            f"no edge for {_span(s.rest_time_s)}"
        )
        lines.append(("Start trials", text))
    return lines


def _most(stage: Any) -> str:
    return "" if stage.search == "ladder" else "at most "


def _exposures(stall: Any) -> str:
    """The hold time; of a search that chooses lengths the shortest and the longest too."""
    if stall.search == "ladder" or len(stall.times_s) < 2:
        return _span(stall.hold_time_s)
    return f"{_span(min(stall.times_s))} to {_span(max(stall.times_s))} (hold time {_span(stall.hold_time_s)})"


def _search(plan: Any, stage: Any) -> str:
    """How they were placed; for a search, until when."""
    if stage.search == "ladder":
        return f"search: {stage.search}"
    beyond = ", and on to the deadline" if plan.spend == "all" and plan.deadline_utc is not None else ""
    error = f"{numbers.plain(stage.standard_error_percent)} %"
    return f"search: {stage.search}, until the standard error is {error}{beyond}"


def _after_trials(plan: Any) -> list[tuple[str, str]]:
    """Kicks and long holds, what the searches sharpen, and the deadline."""
    lines = []
    if plan.kick:
        k = plan.kick
        duties = ", ".join(numbers.plain(duty) for duty in k.duties_percent)
        text = (
            f"at most {k.trials} pulses of {show_quantity(k.shortest_s, 's')} to {show_quantity(k.longest_s, 's')} at "
            f"each of {duties} % a condition; then {numbers.plain(k.margin_percent)} % above the lowest reliable duty "
            f"for {_span(k.hold_time_s)}"
        )
        lines.append(("Kick trials", text))
    if plan.long_run:
        r = plan.long_run
        service = f"{numbers.plain(100.0 * r.probability)} % of services of {_span(r.service_s)}"
        lines.append(("Long run", f"{r.holds} holds of {_span(r.hold_time_s)} a condition, for {service}"))
    if "adaptive" in {stage.search for stage in (plan.stall, plan.start) if stage}:
        lines.append(("To be sharpened", ", ".join(meaning(name).name for name in plan.sharpen)))
    if plan.deadline_utc is not None:
        lines.append(("Deadline", utc_text(plan.deadline_utc)))
    return lines


def _span(seconds: float) -> str:
    return shown(seconds, "s")


def _several(values: set[float], unit: str) -> str:
    return ", ".join(show_quantity(value, unit) for value in sorted(values))
