"""The sums of trials as a value that can be remembered by, and as the evidence that the laws take. Pure, no beliefs."""

from __future__ import annotations

import numpy as np

from sweeprig.laws import Evidence
from sweeprig.schedule.tally import Sums

Key = tuple[tuple[tuple[float, float], ...], tuple[tuple[float, float, int], ...]]
"""((duty, survived), …), ((duty, width, failures), …): what `Sums` holds, sorted."""


def key_of(sums: Sums) -> Key:
    """The sums as a value that can be remembered by."""
    return (
        tuple(sorted(sums.exposure.items())),
        tuple(sorted((duty, width, count) for (duty, width), count in sums.events.items())),
    )


def evidence_of(key: Key, unit: float) -> Evidence:
    """The sums as `laws` has them, in parts of the whole trial."""
    exposures, events = key
    return Evidence(
        duty=np.array([duty for duty, _ in exposures]),
        exposure=np.array([survived for _, survived in exposures]) / unit,
        event_duty=np.array([duty for duty, _, _ in events]),
        event_width=np.array([width for _, width, _ in events]) / unit,
        events=np.array([count for _, _, count in events], dtype=np.float64),
        holds=(),
    )


def contrast(sums: Sums) -> bool:
    """Whether something stopped and something turned on: without both, nothing can be fitted."""
    return bool(sums.events) and any(seconds > 0.0 for seconds in sums.exposure.values())
