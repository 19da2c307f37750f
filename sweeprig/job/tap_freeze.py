"""What a plan is like where the rig's drive is an analogue timer with a digital potentiometer. Part of `freeze`.

Pure. Which tap a duty becomes is `schedule`'s.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from sweeprig.job.models import Job
from sweeprig.job.timer_models import HIGHEST_TAP, timer_ends, timer_hz, timer_step
from sweeprig.plan import Plan, TapPlan

FIRST_TAPS = 5
"""The map is nearly straight: its ends and a few taps between show by how much it is not."""
SURELY_TURNS = 2.0
"""Times the duty at which half of the starts are expected to succeed: a rotor that turns is not heated by standing."""
LEAST_OF_RANGE = 0.5
"""… but the map's first taps span half of the range at the least."""
TIME_S, TIME_CONSTANTS = 3.0, 5.0
"""A hold of the map: the rotor follows, then some readings of a scope."""


def with_taps(job: Job, plan: Plan) -> Plan:
    """The plan with duties that the timer reaches, search steps no finer than a tap unless the sweep states them, and
    the taps that are visited first; unchanged where the rig has no such timer."""
    timer = job.rig.pwm_timer
    if timer is None:
        return plan
    ends, step = timer_ends(timer), timer_step(timer)
    low, high = max(plan.duty_low_percent, ends[0]), min(plan.duty_high_percent, ends[1])
    taps = TapPlan(
        ends, HIGHEST_TAP, (plan.duty_low_percent, plan.duty_high_percent), timer_hz(timer),
        _first(ends, low, high, plan.expected.start_percent[0]), TIME_CONSTANTS * plan.time_constant_s + TIME_S,
    )  # fmt: skip
    return replace(
        plan,
        duty_low_percent=low,
        duty_high_percent=high,
        curve=None if plan.curve is None else replace(plan.curve, duties_percent=_within(plan, low, high)),
        stall=None if plan.stall is None else replace(plan.stall, step_percent=max(plan.stall.step_percent, step)),
        start=None if plan.start is None else replace(plan.start, step_percent=max(plan.start.step_percent, step)),
        duty_step_percent=(step,) * len(plan.conditions),
        taps=taps,
    )


def _within(plan: Plan, low: float, high: float) -> tuple[float, ...]:
    """The curve's duties moved into the range, each once, from the top."""
    assert plan.curve is not None
    return tuple(dict.fromkeys(min(max(duty, low), high) for duty in plan.curve.duties_percent))


def _first(ends: tuple[float, float], low: float, high: float, start_percent: float) -> tuple[int, ...]:
    """Taps with duties by the parts from the highest allowed down to where the rotor surely turns, spread evenly."""
    lowest = max(low, min(SURELY_TURNS * start_percent, high - LEAST_OF_RANGE * (high - low)))
    parts = np.linspace(*ends, HIGHEST_TAP + 1)
    allowed = np.flatnonzero((parts >= low - 1e-9) & (parts <= high + 1e-9))
    wanted = np.linspace(high, lowest, FIRST_TAPS)
    near = (int(allowed[np.argmin(np.abs(parts[allowed] - duty))]) for duty in wanted) if allowed.size else ()
    return tuple(dict.fromkeys(near))
