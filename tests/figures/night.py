"""A simulated night through the full text path, durable logbook, fit and report; wall time and peak memory."""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from typing import Any

_WORKER = """
import json, resource, sys, time
began = time.perf_counter()
from pathlib import Path
import sweeprig
from sweeprig.job import load, shipped
from sweeprig.results import results
launched = sweeprig.start(load(shipped(sys.argv[1])), Path(sys.argv[2]))
performed = time.perf_counter()
results(launched.path)
ended = time.perf_counter()
run = sweeprig.open_run(launched.path)
last = run.outcomes[-1]
print(json.dumps({
    "wall_s": ended - began, "perform_s": performed - began, "simulated_h": last.ended / 3600.0,
    "holds": len(run.outcomes), "rss_mb": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0,
    "state": launched.ending.state.words,
}))
"""


def one(job: str) -> dict[str, Any]:
    """Perform `job` in a fresh interpreter; what it measured of itself."""
    with tempfile.TemporaryDirectory() as folder:
        done = subprocess.run([sys.executable, "-c", _WORKER, job, folder], check=True, capture_output=True, text=True)
    value: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return value


def figures(full: bool) -> Iterator[dict[str, Any]]:
    del full
    demo = one("demo")
    wall = demo["perform_s"]
    yield {
        "figure": "demo_simulated_part_s", "value": round(wall, 2), "target": "<= 5", "meets": wall <= 5.0, "n": 1,
        "simulated_hours": round(demo["simulated_h"], 2), "holds": demo["holds"],
        "with_report_s": round(demo["wall_s"], 2),
    }  # fmt: skip
    night = one("night")
    wall, rss = night["wall_s"], night["rss_mb"]
    about = {"simulated_hours": round(night["simulated_h"], 2), "holds": night["holds"], "ended": night["state"]}
    yield {"figure": "night_wall_s", "value": round(wall, 2), "target": "<= 10", "meets": wall <= 10, "n": 1, **about}
    yield {"figure": "night_rss_mb", "value": round(rss), "target": "<= 300", "meets": rss <= 300, "n": 1}
