"""`sweeprig off`: drive and supply off on a rig that no run holds, on all links at once, then the proof."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sweeprig.clock import Clock
from sweeprig.conduct.rig import open_rig
from sweeprig.conduct.switch_off import Off, prove_off, switch_off
from sweeprig.errors import OffNotProved
from sweeprig.job import Job


def off(job: Job, clock: Clock, ports: Mapping[str, Any] | None = None) -> Off:
    """Open the rig of `job`, switch off, prove it. OffNotProved names what did not confirm.

    Switching off is the first thing said on every link, before the identity is asked.
    """
    rig = open_rig(job, clock, ports, off_first=True)
    try:
        done = switch_off(rig)
        if done.silent:
            silent = "; ".join(f"{name}: {why}" for name, why in done.silent.items())
            raise OffNotProved(
                f"not confirmed off: {silent}",
                remedy="cut the supply by hand before touching anything",
                topic="safety",
            )
        prove_off(rig)
        return done
    finally:
        rig.close()
