"""Start-up: `sweeprig --help` over a bare import of the command-line library."""

from __future__ import annotations

import shutil
import statistics
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any


def seconds(command: list[str]) -> float:
    began = time.perf_counter()
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL)
    return time.perf_counter() - began


def figures(full: bool) -> Iterator[dict[str, Any]]:
    pairs = 41 if full else 15
    ours = shutil.which("sweeprig", path=str(Path(sys.executable).parent)) or "sweeprig"
    ratios = []
    for _ in range(pairs + 1):
        ours_s = seconds([ours, "--help"])
        bare_s = seconds([sys.executable, "-c", "import click"])
        ratios.append(ours_s / bare_s)
    ratio = statistics.median(ratios[1:])  # the first pair warms the disk
    yield {"figure": "help_time_ratio", "value": round(ratio, 2), "target": "<= 2", "meets": ratio <= 2, "n": pairs}
