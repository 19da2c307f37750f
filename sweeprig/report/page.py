"""The report: one self-contained HTML page of a run, the answer first. Fills the template and nothing else.

Everything from files and instruments is escaped by the template engine; the page loads nothing from anywhere.
"""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from sweeprig import manual
from sweeprig.report import answer, context, figures, how, tables
from sweeprig.report.catalogue import meaning
from sweeprig.report.svg import inline_svg


def render(run: Any) -> str:
    """The whole page as HTML text.

    run  has .job .plan .outcomes .instruments and .findings.as_json(); `.path` is named in the foot where it is there
    """
    template = _environment().get_template("page.html.j2")
    return template.render(_values(run))


def write(run: Any, path: Path | str) -> Path:
    """Write the page to `path`, whole or not at all (a new file is renamed into place). Returns the path."""
    path = Path(path)
    fresh = path.with_name(path.name + ".new")
    fresh.unlink(missing_ok=True)  # a link under that name is replaced, never followed
    fresh.write_bytes(render(run).encode("utf-8", "backslashreplace"))
    fresh.replace(path)
    return path


def _environment() -> Environment:
    return Environment(
        loader=PackageLoader("sweeprig.report", ""),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_visible,
    )


def _visible(value: Any) -> Any:
    """Control and direction-changing characters never reach the page; what is not there is a dash."""
    if value is None:
        return "–"
    if type(value) is str:
        return "".join(c for c in value if c.isprintable() or c == "\n")
    return value


def _values(run: Any) -> dict[str, Any]:
    findings = run.findings.as_json()
    excluded, more = context.not_data(run.outcomes)
    return {
        "css": Markup(files("sweeprig.report").joinpath("page.css").read_text(encoding="utf-8")),
        "head": _head(run, findings),
        "sentences": answer.sentences(findings, run.job.motor.name, run.plan.saturation_percent),
        "worst": tables.worst_rows(findings),
        "several": len(findings.get("conditions") or ()) > 1,
        "limits": [_limit(entry) for entry in findings.get("limits") or ()],
        "suspicions": [context.doubt(entry) for entry in findings.get("suspicions") or ()],
        "advice": [context.shown(entry) for entry in findings.get("advice") or ()],
        "conditions": [
            (label, tables.rows(entry), tables.times(entry)) for label, entry in context.conditions_named(findings)
        ],
        "figures": _figures(run),
        "settings": how.settings(run),
        "counts": context.counts(run.outcomes),
        "definitions": context.definitions(run),
        "methods": context.methods(findings),
        "instruments": context.instruments(run),
        "excluded": excluded,
        "excluded_more": more,
        "flagged": context.flagged(run.outcomes),
        "cautions": manual.cautions(),
    }


def _head(run: Any, findings: context.Json) -> dict[str, Any]:
    job = run.job
    folder = getattr(run, "path", None)
    return {
        "title": str(getattr(job, "title", "") or job.motor.name),
        "simulated": bool(findings.get("simulated")),
        "motor": job.motor.name,
        "item": context.item(job.motor),
        "rig": job.rig.name,
        "client": context.said(job, "client"),
        "place": context.said(job, "place"),
        "operator": context.said(job, "operator"),
        "when": context.when(run.outcomes),
        "ambient": context.ambient(run),
        "software": context.shown(findings.get("software") or "sweeprig"),
        "version": findings.get("version"),
        "job_hash": str(findings.get("job_hash") or context.NOT_RECORDED),
        "data_hash": context.outcomes_hash(run.outcomes),
        "run": Path(folder).name if folder is not None else context.NOT_RECORDED,
        "holds": len(run.outcomes),
    }


def _limit(entry: context.Json) -> dict[str, str]:
    condition = entry.get("condition")
    about = meaning(str(entry.get("finding")))
    return {
        "finding": about.name,
        "condition": tables.condition_label(condition) if isinstance(condition, dict) else context.shown(condition),
        "limit": context.limit_text(entry.get("limit"), about.unit),
        "verdict": str(entry.get("verdict", "not_decided")).replace("_", " "),
        "rule": context.shown(entry.get("rule")),
    }


def _figures(run: Any) -> dict[str, Any]:
    curves = figures.curve_figures(run)
    count = len(run.findings.as_json().get("conditions") or ())
    return {
        "curves": [
            inline_svg(figure, f"curve{i}", f"Speed against duty, both branches, {count} conditions")
            for i, figure in enumerate(curves)
        ],
        "thresholds": inline_svg(
            figures.figure_of(figures.thresholds, run), "thresholds", "Stall and start duty against PWM frequency"
        ),
        "voltages": inline_svg(figures.figure_of(figures.voltages, run), "voltages", "Mean motor voltage against duty"),
        "timeline": inline_svg(
            figures.figure_of(figures.timeline, run), "timeline", "Purpose and verdict of every hold against time"
        ),
    }
