"""One piece of work for each of many motors, on all cores, by one call: the answer depends on the seed alone.

What the work is, and how the motors differ (`kinds.lot`), is the caller's.
"""

from __future__ import annotations

import multiprocessing
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor
from typing import TypeVar

from sweeprig.errors import SweeprigError

Unit = TypeVar("Unit")
Result = TypeVar("Result")
CHUNKS_A_WORKER = 8
"""Units are handed out in so many portions a process: few, for each costs a message; several, for units differ."""


def many(
    work: Callable[[Unit, tuple[int, int]], Result],
    units: Sequence[Unit],
    seed: int,
    workers: int | None = None,
) -> list[Result]:
    """[work(unit, (seed, its number)) for each unit], in the units' order, shared over fresh processes.

    work      a function of a module, or a `functools.partial` of one: it goes to other processes by its name. The pair
              seeds its random numbers (`numpy.random.default_rng(pair)`): unit 7 then gives the same in every lot and
              with any number of processes
    workers   processes; None: one for each core. One: no other process is started
    Errors: SweeprigError for less than one process; what `work` raises.
    """
    processes = os.cpu_count() or 1 if workers is None else workers
    if processes < 1:
        raise SweeprigError("the lot needs a process to run in", value=str(processes), allowed="1 or more")
    seeds = [(seed, number) for number in range(len(units))]
    if processes == 1 or len(units) < 2:
        return [work(unit, pair) for unit, pair in zip(units, seeds, strict=True)]
    portion = max(1, -(-len(units) // (processes * CHUNKS_A_WORKER)))
    # spawn, never fork: the caller may have threads and open links
    with ProcessPoolExecutor(processes, mp_context=multiprocessing.get_context("spawn")) as pool:
        return list(pool.map(work, units, seeds, chunksize=portion))
