"""The ladder: which duty to try next, from the last trial alone.

One step down while it goes well; after a failure well up again, so that the holds also support the tail above the
threshold. Analysed with the law of the manual's `findings` page, a ladder has no bias; read off naively it has one.
"""

from __future__ import annotations

STEPS_UP = 3
"""After a failure the next pass begins so many steps higher."""


def next_duty(last_percent: float, went_well: bool, step_percent: float, low: float, high: float) -> float:
    """The next trial's duty, percent, on the grid of `step_percent` and within [low, high]."""
    target = last_percent - step_percent if went_well else last_percent + STEPS_UP * step_percent
    return on_grid(target, step_percent, low, high)


def on_grid(duty_percent: float, step_percent: float, low: float, high: float) -> float:
    """`duty_percent` moved to the nearest multiple of the step, then into [low, high]; rounded to 1e-9 %."""
    return round(min(max(round(duty_percent / step_percent) * step_percent, low), high), 9)
