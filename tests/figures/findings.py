"""Do the demo's 95 % intervals cover what is true of the simulated motor? Truth by brute force, nights by seed."""

from __future__ import annotations

import multiprocessing
import tempfile
from collections.abc import Iterator, Mapping
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path
from typing import Any

from sweeprig.job import load, shipped
from sweeprig.launch import start
from sweeprig.results import fit
from sweeprig.simbench.truth_of_job import truth_of

PROCESSES = 2


def night(seed: int) -> list[dict[str, Any]]:
    """The demo with another seed (another rig of the same accuracy, another night): its conditions' findings."""
    job = load(shipped("demo"))
    job = job.model_copy(update={"sweep": job.sweep.model_copy(update={"seed": seed})})
    with tempfile.TemporaryDirectory() as folder:
        launched = start(job, Path(folder))
        conditions: list[dict[str, Any]] = fit(launched.path).findings.as_json()["conditions"]
    return conditions


def found(condition: Mapping[str, Any], name: str) -> Mapping[str, Any] | None:
    value: Any = condition
    for part in name.split("."):
        value = value.get(part) if isinstance(value, Mapping) else None
    return value if isinstance(value, Mapping) and value.get("value") is not None else None


def covers(finding: Mapping[str, Any], true: float) -> bool:
    """Two-sided: low ≤ true ≤ high. A bound: on its side."""
    if finding["bound"] == "upper":
        return true <= float(finding["value"])
    if finding["bound"] == "lower":
        return true >= float(finding["value"])
    return float(finding["low"]) <= true <= float(finding["high"])


def figures(full: bool) -> Iterator[dict[str, Any]]:
    seeds = range(1, 101 if full else 21)
    truth = truth_of(load(shipped("demo")), rare_trials=0)
    with ProcessPoolExecutor(PROCESSES, mp_context=multiprocessing.get_context("spawn")) as pool:
        nights = list(pool.map(night, seeds))
    hits: dict[str, list[bool]] = {}
    for conditions in nights:
        for condition, true in zip(conditions, truth["conditions"], strict=True):
            for name, one in true["findings"].items():
                finding = found(condition, name)
                if finding is not None and one.get("value") is not None:
                    hits.setdefault(name, []).append(covers(finding, one["value"]))
    for name, seen in hits.items():
        percent = 100.0 * sum(seen) / len(seen)
        yield {
            "figure": f"demo_coverage_{name}", "value": round(percent, 1), "target": ">= 90 (all together)",
            "meets": percent >= 90.0, "n": len(seen),
        }  # fmt: skip
    every = [hit for seen in hits.values() for hit in seen]
    percent = 100.0 * sum(every) / len(every)
    yield {
        "figure": "demo_coverage_percent", "value": round(percent, 1), "target": ">= 90", "meets": percent >= 90.0,
        "n": len(every), "nights": len(nights),
    }  # fmt: skip
