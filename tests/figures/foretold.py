"""Does the preview foretell the night? The demo with other seeds against bands predicted from other nights."""

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
from sweeprig.schedule.preview import preview
from sweeprig.schedule.sharpness import standard_errors

NIGHTS, FIRSTS = 18, 6
SUSTAIN = "sustain_99_duty_percent"
Night = dict[str, Any]


def with_seed(seed: int) -> Job:
    job = load(shipped("demo"))
    return job.model_copy(update={"sweep": job.sweep.model_copy(update={"seed": seed})})


def night(seed: int) -> Night:
    """Hours, holds and the standard error of sustain_99 (as the search reckons it, worst condition) of one night on the
    simulated bench; and of the first ones what they teach."""
    with tempfile.TemporaryDirectory() as folder:
        run = open_run(start(with_seed(seed), Path(folder)).path)
        outcomes = run.outcomes
        hours = outcomes[-1].ended / 3600.0
        error = standard_errors(run.plan, History(outcomes)).get(SUSTAIN)
        taught = learned(run.findings.as_json()["conditions"], outcomes, "the first night") if seed <= FIRSTS else {}
    return {"hours": hours, "count": float(len(outcomes)), "error": error, "taught": taught}


def figures(full: bool) -> Iterator[dict[str, Any]]:
    """Each of the first FIRSTS nights foretells all the others; the shares are over all such pairs."""
    del full
    with ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("spawn")) as pool:
        nights = list(pool.map(night, range(1, NIGHTS + 1)))
        plans = [replace(freeze(with_seed(k + 1)), expected_at=nights[k]["taught"]) for k in range(FIRSTS)]
        seen = list(pool.map(preview, plans, [0.0] * FIRSTS))
    for name in ("hours", "count", "error"):
        hits = []
        for k, ahead in enumerate(seen):
            bands = {"hours": ahead.hours, "count": ahead.count, "error": ahead.standard_errors[SUSTAIN]}
            others = [one[name] for place, one in enumerate(nights) if place != k and one[name] is not None]
            hits += [bands[name].low <= value <= bands[name].high for value in others]
        percent = 100.0 * sum(hits) / len(hits)
        yield {
            "figure": f"foretold_{name}_in_band_percent", "value": round(percent, 1), "target": "80 to 98",
            "meets": 80.0 <= percent <= 98.0, "n": len(hits), "nights": NIGHTS, "foretold_from": FIRSTS,
        }  # fmt: skip
