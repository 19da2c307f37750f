"""Cheap motors for the search's figures: stop times drawn from the law in closed form, and what bench time they take.

One night of one motor: the falling branch of the curve first, as every sweep does it, then the search. The usual ladder
of definitions.md beside it. No instruments, no bench.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from sweeprig.job.freeze import curve_duties
from sweeprig.laws import EXPONENTIAL, Trial
from sweeprig.schedule.keys import key_of
from sweeprig.schedule.posterior import Prior
from sweeprig.schedule.search import BINARY, SURVIVAL, Choice, Question, best
from sweeprig.schedule.tally import Sums

HOLD_S, LADDER_STEP, DUTY_STEP = 20.0, 0.5, 0.1
RELAUNCH_S, COOL_S = 5.5, 10.0
"""Charged alike to search and ladder: 1 s at full duty, 4 s of relaunch, 0.5 s between; and after each stop."""
TIME_CONSTANT_S, EDGE_S = 0.2, 0.2
COMING_DOWN_S = 5.0 * TIME_CONSTANT_S
CURVE, SETTLED_S = curve_duties(20, 2.0, 100.0), 5.0
PARTS = (0.25, 0.5, 1.0, 2.0, 4.0)
SPREADS = (0.1, 0.8)
MOST = 400
CHARGED = f"relaunch {RELAUNCH_S:g} s, cool-down {COOL_S:g} s, coming down {COMING_DOWN_S:g} s"


def spread_of(index: int, motors: int) -> float:
    """Spreads log-uniform over SPREADS, one in each of `motors` equal strata."""
    low, high = SPREADS
    return low * math.exp((index + 0.5) / motors * math.log(high / low))


def hazard(x: float) -> float:
    """Stops per second, x = (D − D50) / spread: half of the holds of HOLD_S are survived at 0; spread = 1.283 / b."""
    return math.log(2.0) / HOLD_S * math.exp(min(max(-math.pi / math.sqrt(6.0) * x, -600.0), 600.0))


@dataclass(slots=True)
class Night:
    """A motor and what was done with it. binary: only whether it stopped is written down, not when."""

    median: float
    spread: float
    rng: np.random.Generator
    binary: bool = False
    sums: Sums = field(default_factory=Sums)
    trials: list[Trial] = field(default_factory=list)
    coarse_s: float = 0.0
    search_s: float = 0.0
    holds: int = 0

    def truth(self, probability: float) -> float:
        """D_p by definitions.md's law: exp(−HOLD_S·h(D_p)) = p."""
        return self.median + math.log(math.log(2.0) / -math.log(probability)) * math.sqrt(6.0) / math.pi * self.spread

    def expose(self, duty: float, seconds: float) -> tuple[float, bool]:
        """(seconds exposed, whether it stopped)."""
        stops = self.rng.exponential() / hazard((duty - self.median) / self.spread)
        if stops > seconds:
            self._write(duty, seconds, None)
        elif self.binary:
            self._write(duty, 0.0, HOLD_S)
        elif stops < COMING_DOWN_S:
            self._write(duty, 0.0, COMING_DOWN_S)
        else:
            self._write(duty, math.floor(stops / EDGE_S) * EDGE_S, EDGE_S)
        return min(stops, seconds), stops <= seconds

    def _write(self, duty: float, survived_s: float, width_s: float | None) -> None:
        self.sums.add(duty, survived_s, width_s)
        width = None if width_s is None else width_s / HOLD_S
        self.trials.append(Trial(len(self.trials) + 1, duty, survived_s / HOLD_S, width))

    def coarse(self) -> float:
        """The curve downwards until the first stop; the lowest duty that turned."""
        turned = CURVE[0]
        for duty in CURVE:
            exposed_s, stopped = self.expose(duty, SETTLED_S)
            self.coarse_s += exposed_s
            if stopped:
                break
            turned = duty
        self.coarse_s += COOL_S
        return turned

    def search(self, question: Question) -> Choice:
        """The search until all is known as asked, or MOST holds."""
        while True:
            choice = best(question, key_of(self.sums))
            if choice.reached or self.holds >= MOST:
                return choice
            exposed_s, stopped = self.expose(choice.duty_percent, choice.part * HOLD_S)
            self.search_s += RELAUNCH_S + exposed_s + (COOL_S if stopped else 0.0)
            self.holds += 1


def night(spread: float, seed: Sequence[int], *, binary: bool = False) -> Night:
    rng = np.random.default_rng(seed)
    return Night(rng.uniform(12.0, 25.0), spread, rng, binary)


def question(probability: float, error: float, *, binary: bool = False) -> Question:
    """What is asked; the plain binary way makes whole holds only, since only they are trials to it."""
    return Question(
        law=EXPONENTIAL, prior=Prior(0.0, 100.0, 0.3), low=0.0, high=100.0, step=DUTY_STEP,
        parts=(1.0,) if binary else PARTS, whole_s=HOLD_S, before_s=RELAUNCH_S, after_failure_s=COOL_S,
        coming_down_s=COMING_DOWN_S, wanted=((probability, error),), likelihood=BINARY if binary else SURVIVAL,
        unit=HOLD_S, ends_early=True,
    )  # fmt: skip


@dataclass(frozen=True, slots=True)
class Ladder:
    """The usual ladder: bench time to the asked standard deviation of its mean, s, and its mean less the truth, %."""

    seconds: float
    bias: float


def ladder(motor: Night, above: float, error: float, passes: int = 400) -> Ladder:
    """From `above` the true stall duty, at a random phase of its step; as many passes as the scatter of one asks for,
    known from `passes` of them, and no fewer than three."""
    stops, seconds = np.empty(passes), np.empty(passes)
    for index in range(passes):
        duty, took = motor.median + above + motor.rng.uniform(0.0, LADDER_STEP), RELAUNCH_S + COOL_S
        while (moment := motor.rng.exponential() / hazard((duty - motor.median) / motor.spread)) > HOLD_S:
            took, duty = took + HOLD_S, duty - LADDER_STEP
        stops[index], seconds[index] = duty, took + moment
    count = max(3, math.ceil((float(stops.std(ddof=1)) / error) ** 2))
    return Ladder(count * float(seconds.mean()), float(stops.mean()) - motor.median)


def bound(spread: float, error: float, lowest: float = -5.0) -> float:
    """Seconds that the error takes at least where the spread is known, at the best duty and length; `lowest` duty, in
    spreads from the stall duty.

    Fisher's information on the place: b² for each timed stop; a stop while it comes down is told by whether alone.
    """
    x = np.linspace(lowest, 5.0, 401)[:, None]
    cumulative = math.log(2.0) * np.exp(-math.pi / math.sqrt(6.0) * x)
    parts, soonest = np.array(PARTS), COMING_DOWN_S / HOLD_S
    through, down = np.exp(-cumulative * parts), np.exp(-cumulative * soonest)
    whether = (cumulative * soonest) ** 2 * down / -np.expm1(-cumulative * soonest)
    information = (down - through + whether) * (math.pi / math.sqrt(6.0) / spread) ** 2
    seconds = RELAUNCH_S + HOLD_S * (1.0 - through) / cumulative + (1.0 - through) * COOL_S
    return float(1.0 / error**2 / (information / seconds).max())
