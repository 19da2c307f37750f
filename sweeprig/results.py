"""What a run leaves for people: findings.json and report.html, made from the logbook and made again at will."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

from sweeprig.characterise import Findings, characterise
from sweeprig.logbook.run_folder import FINDINGS, REPORT, write_whole
from sweeprig.opened import Run, open_run
from sweeprig.report.page import render


@dataclass(frozen=True, slots=True)
class Results:
    """The findings, and the files that were written (None where it was not)."""

    findings: Findings
    findings_path: Path
    report_path: Path | None


def fit(path: Path | str) -> Results:
    """Characterise the outcomes of the run in folder `path` and write its findings.json."""
    run = open_run(path)
    findings = characterise(run.plan, run.outcomes, run.about)
    written = run.path / FINDINGS
    write_whole(written, json.dumps(findings.as_json(), indent=1, allow_nan=False) + "\n")
    return Results(findings, written, None)


def write_report(run: Run) -> Path:
    """Write the run's report.html; its path."""
    written = run.path / REPORT
    write_whole(written, render(run))
    return written


def results(path: Path | str) -> Results:
    """Findings and report of the run in folder `path`, both written anew."""
    fitted = fit(path)
    return Results(fitted.findings, fitted.findings_path, write_report(open_run(path)))
