"""Does the preview foretell the night? The demo with other seeds against the bands predicted from its first night."""

from __future__ import annotations

import multiprocessing
import tempfile
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

from sweeprig.job import Job, freeze, load, shipped
from sweeprig.launch import start
from sweeprig.opened import open_run
from sweeprig.schedule.history import History
from sweeprig.schedule.learned import learned
from sweeprig.schedule.preview import Band, preview
from sweeprig.schedule.sharpness import standard_errors

NIGHTS = 24
SUSTAIN = "sustain_99_duty_percent"
Night = dict[str, Any]


def with_seed(seed: int) -> Job:
    job = load(shipped("demo"))
    return job.model_copy(update={"sweep": job.sweep.model_copy(update={"seed": seed})})


def night(seed: int) -> Night:
    """Hours, holds and the standard error of sustain_99 (as the search reckons it, worst condition) of one night on the
    simulated bench; and of the first one what it teaches."""
    with tempfile.TemporaryDirectory() as folder:
        run = open_run(start(with_seed(seed), Path(folder)).path)
        outcomes = run.outcomes
        hours = outcomes[-1].ended / 3600.0
        error = standard_errors(run.plan, History(outcomes)).get(SUSTAIN)
        taught = learned(run.findings.as_json()["conditions"], outcomes, "the first night") if seed == 1 else {}
    return {"hours": hours, "count": float(len(outcomes)), "error": error, "taught": taught}


def figures(full: bool) -> Iterator[dict[str, Any]]:
    del full
    with ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("spawn")) as pool:
        first, *others = pool.map(night, range(1, NIGHTS + 2))
    seen = preview(replace(freeze(with_seed(1)), expected_at=first["taught"]), 0.0)
    bands: dict[str, Band] = {"hours": seen.hours, "count": seen.count, "error": seen.standard_errors[SUSTAIN]}
    for name, band in bands.items():
        values = [one[name] for one in others if one[name] is not None]
        percent = 100.0 * sum(band.low <= value <= band.high for value in values) / len(values)
        yield {
            "figure": f"foretold_{name}_in_band_percent", "value": round(percent, 1), "target": "80 to 98",
            "meets": 80.0 <= percent <= 98.0, "n": len(values), "band": [round(band.low, 3), round(band.high, 3)],
            "nights": [round(min(values), 3), round(max(values), 3)],
        }  # fmt: skip
