"""Cheap motors with a prescribed law, for coverage figures: exact draws of stops and starts, no instruments, no bench.

Where trials are placed is a function of its own (`Placing`), so that each search can be judged by the same motors.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from sweeprig.laws import EXPONENTIAL, GAUSSIAN, LOGISTIC, Law, Trial
from sweeprig.schedule.keys import key_of
from sweeprig.schedule.ladder import next_duty
from sweeprig.schedule.posterior import Prior
from sweeprig.schedule.search import BINARY, SURVIVAL, Question, best
from sweeprig.schedule.tally import Sums

HOLD_S, EDGE_S = 20.0, 0.25
STEP_PERCENT, TRIALS = 0.5, 24
HOLDS_APART_S = 60.0
SPREADS = {"stall": (0.1, 0.8), "start": (0.3, 2.0)}
LAWS = {"stall": (EXPONENTIAL, GAUSSIAN), "start": (LOGISTIC, GAUSSIAN)}

Attempt = Callable[[float, float], Trial]
"""(duty in percent, part of the whole trial to expose for) → what it showed."""
Placing = Callable[[Attempt, str, float], tuple[Trial, ...]]
"""(attempt, `stall` or `start`, lowest duty of the coarse pass that turned) → all trials of one night, in order."""


@dataclass(slots=True)
class Motor:
    """One kind of threshold of one motor: `law` at `median` and `spread` (percent duty), and what disturbs it.

    scatter   standard deviation of a threshold drawn anew for each hold, percent duty
    drift     by which the threshold moves, percent duty an hour
    lapse     hazard that duty does not cure, per whole trial
    """

    kind: str
    law: Law
    median: float
    spread: float
    rng: np.random.Generator
    scatter: float = 0.0
    drift: float = 0.0
    lapse: float = 0.0
    made: int = 0

    def attempt(self, duty_percent: float, part: float = 1.0) -> Trial:
        """One trial: the moment of failure is drawn from the law and seen within an edge's interval."""
        self.made += 1
        at_s = self.made * HOLDS_APART_S
        place = self.median + self.scatter * self.rng.normal() + self.drift * at_s / 3600.0
        hazard = float(self.law.cumulative(np.array((duty_percent - place) / self.spread))) + self.lapse
        fails_at = self.rng.exponential() / max(hazard, 1e-12)
        if fails_at > part:
            return Trial(self.made, duty_percent, part, at_s=at_s)
        if self.kind == "start":
            return Trial(self.made, duty_percent, 0.0, 1.0, at_s=at_s)
        edge = EDGE_S / HOLD_S
        return Trial(self.made, duty_percent, min(math.floor(fails_at / edge) * edge, part - edge), edge, at_s=at_s)

    def truth(self, probability: float) -> float:
        """The duty for `probability`: the law's own formula; with scatter, of the law averaged over it."""
        if self.scatter == 0.0:
            return self.median + self.law.offset(probability) * self.spread
        return self.median + _scattered(self.law, self.scatter / self.spread, probability) * self.spread

    def coarse(self) -> float:
        """A place well above the threshold, as the coarse pass of a curve would leave it."""
        return self.median + self.rng.uniform(2.0, 5.0)


def _scattered(law: Law, ratio: float, probability: float) -> float:
    """Where a law with normal scatter of `ratio` spreads is survived with `probability`: plain sum and bisection."""
    z = np.linspace(-8.0, 8.0, 4001)
    weight = np.exp(-0.5 * z * z)
    weight /= weight.sum()
    low, high = -60.0, 60.0
    for _ in range(80):
        middle = (low + high) / 2.0
        survived = float(np.sum(weight * np.exp(-law.cumulative(middle - ratio * z))))
        low, high = (middle, high) if survived < probability else (low, middle)
    return low


def motor(
    kind: str, seed: tuple[int, ...], spread: float | None = None, *, scatter: float = 0.0, drift: float = 0.0,
    lapse: float = 0.0,
) -> Motor:  # fmt: skip
    """A motor of that kind: law, place and (unless given) spread drawn by the seed."""
    rng = np.random.default_rng(seed)
    law = LAWS[kind][int(rng.integers(2))]
    low, high = SPREADS[kind]
    drawn = math.exp(rng.uniform(math.log(low), math.log(high)))
    place = rng.uniform(12.0, 25.0)
    return Motor(kind, law, place, drawn if spread is None else spread, rng, scatter, drift, lapse)


def ladder(attempt: Attempt, kind: str, coarse: float, trials: int = TRIALS) -> tuple[Trial, ...]:  # noqa: ARG001
    """The tool's ladder: a step down after each success, three up after a failure."""
    made: list[Trial] = []
    duty = coarse
    for _ in range(trials):
        made.append(attempt(duty, 1.0))
        duty = next_duty(duty, made[-1].failed is None, STEP_PERCENT, 0.0, 100.0)
    return tuple(made)


QUESTIONS = {
    "stall": Question(
        law=EXPONENTIAL, prior=Prior(0.0, 100.0, 0.3), low=0.0, high=100.0, step=0.05, parts=(0.25, 0.5, 1.0, 2.0),
        whole_s=HOLD_S, before_s=12.0, after_failure_s=3.0, coming_down_s=0.0, wanted=((0.99, 0.25),),
        likelihood=SURVIVAL,
    ),
    "start": Question(
        law=LOGISTIC, prior=Prior(0.0, 100.0, 0.8), low=0.0, high=100.0, step=0.05, parts=(1.0,), whole_s=3.0,
        before_s=12.0, after_failure_s=0.0, coming_down_s=0.0, wanted=((0.99, 0.25),), likelihood=BINARY,
    ),
}  # fmt: skip
"""The sweep's defaults, with round times of a small motor; one step of a drive of 2,000."""
MOST = {"stall": 60, "start": 60}


def adaptive(attempt: Attempt, kind: str, coarse: float) -> tuple[Trial, ...]:
    """The tool's search, until `sustain_99` or `start_99` is known to 0.25 %, or MOST trials; begins at the coarse
    duty."""
    made: list[Trial] = []
    sums, duty, part = Sums(), coarse, 1.0
    while len(made) < MOST[kind]:
        made.append(attempt(duty, part))
        sums.add(duty, made[-1].survived, made[-1].failed)
        choice = best(QUESTIONS[kind], key_of(sums))
        if choice.reached:
            break
        duty, part = choice.duty_percent, choice.part
    return tuple(made)


def naive_stopping_duty(attempt: Attempt, coarse: float, passes: int) -> tuple[float, tuple[Trial, ...]]:
    """What everyone does: step down until it stops, repeat, and take the mean of the places at which it stopped, each
    between the step that stopped and the one above."""
    made: list[Trial] = []
    stops: list[float] = []
    while len(stops) < passes:
        duty = coarse
        while True:
            made.append(attempt(duty, 1.0))
            if made[-1].failed is not None:
                stops.append(duty + STEP_PERCENT / 2.0)
                break
            duty -= STEP_PERCENT
    return float(np.mean(stops)), tuple(made)
