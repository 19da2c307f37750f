"""Laws of stalling and starting: how the chance to fail falls with duty, and the likelihood of what was seen.

Numbers in, log-likelihoods out; what `schedule` searches by is what `characterise` judges by. No priors, no grids, no
outcomes here; the simulated bench never imports it.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

Floats = NDArray[np.float64]

LN2 = math.log(2.0)
GUMBEL_SD = math.pi / math.sqrt(6.0)
"""Standard deviation of a Gumbel law of unit scale, 1.2825 (definitions: spread = 1.283 / b)."""
LOGISTIC_SD = math.pi / math.sqrt(3.0)
MANY = 400
_LARGEST_EXPONENT = 690.0
_SMALLEST_CHANCE = 1e-300


@dataclass(frozen=True, slots=True)
class Law:
    """One law in the standard coordinate x = (D − D50) / spread, D50 where half of the trials succeed.

    cumulative   H(x) = −ln P(success over one whole trial), any shape; falls with x, H(0) = ln 2
    offset       p → x at which the chance of success is p; so D_p = D50 + offset(p) · spread

    `spread` is the standard deviation of the law, percent duty. Within a trial the hazard is constant in time: after
    a part t / T of the trial the rotor still turns with probability exp(−H · t / T).
    """

    name: str
    cumulative: Callable[[Floats], Floats]
    offset: Callable[[float], float]


def _exponential(x: Floats) -> Floats:
    return np.asarray(LN2 * np.exp(np.minimum(-GUMBEL_SD * x, _LARGEST_EXPONENT)), dtype=np.float64)


def _gaussian(x: Floats) -> Floats:
    return np.asarray(-special.log_ndtr(x), dtype=np.float64)


def _logistic(x: Floats) -> Floats:
    """ln(1 + e^z), z = −π/√3·x. Above 40 the 1 is below the last bit; numpy's logaddexp takes four times as long."""
    z = -LOGISTIC_SD * x
    return np.asarray(np.where(z > 40.0, z, np.log1p(np.exp(np.minimum(z, 40.0)))), dtype=np.float64)


EXPONENTIAL = Law("exponential hazard", _exponential, lambda p: math.log(LN2 / -math.log(p)) / GUMBEL_SD)
"""The law of stalling: h(D) = h0·exp(−b(D − D0)), so H = ln 2 · exp(−b(D − D50)) and spread = 1.283 / b."""
GAUSSIAN = Law("Gaussian threshold", _gaussian, lambda p: float(special.ndtri(p)))
"""Chance to get through one trial Φ((D − D50) / spread): the logarithm of the hazard falls with the square of duty."""
LOGISTIC = Law("logistic threshold", _logistic, lambda p: math.log(p / (1.0 - p)) / LOGISTIC_SD)

STALL_LAWS = (EXPONENTIAL, GAUSSIAN)
START_LAWS = (LOGISTIC, GAUSSIAN)
"""The first is the one that findings at 50 % are quoted by; all take part in the hull of a finding in the tail."""

STALL_SPREAD_PERCENT, START_SPREAD_PERCENT, SPREAD_LOG_SD = 0.3, 0.8, 1.2
"""Spreads before any trial: log-normal, medians in percent duty, and the standard deviation of the natural logarithm.
Small brushed motors: a few tenths of a percent for the stall, more for the start (common practice, no source). At 1.2 a
motor five times as wide is still covered as stated; at 1.0 the upper bounds of such motors held 90 % (coverage by
spread: the figures of `findings`)."""


@dataclass(frozen=True, slots=True)
class Trial:
    """What one exposure showed, in parts of the whole trial (hold time, or one start attempt).

    survived   part of the trial at whose end the rotor was still known to turn (a start that succeeded: 1)
    failed     width of the interval after `survived` in which it failed; None: it had not failed (censored)
    at_s       when it was made, on the run clock, s: what a drift is reckoned by
    """

    hold: int
    duty_percent: float
    survived: float
    failed: float | None = None
    at_s: float = 0.0


@dataclass(frozen=True, slots=True)
class Evidence:
    """Trials summed up (see `summed`). `duty`, `exposure`: (m,); `event_duty`, `event_width`, `events`: (k,).

    exposure   sum over the trials at that duty of the part survived
    events     number of failures at `event_duty` seen within an interval `event_width`
    """

    duty: Floats
    exposure: Floats
    event_duty: Floats
    event_width: Floats
    events: Floats
    holds: tuple[int, ...]

    @property
    def failures(self) -> int:
        return int(self.events.sum())

    @property
    def successes(self) -> int:
        return len(self.holds) - self.failures


def summed(trials: Sequence[Trial]) -> Evidence:
    """The sufficient sums of `trials`: with a hazard constant in time, exposures at one duty simply add.

    Beyond MANY trials duties are taken to 0.01 % and intervals to two digits, far below what such a night resolves,
    so that the work does not grow with the number of holds.
    """
    exposure: dict[float, float] = defaultdict(float)
    events: dict[tuple[float, float], int] = defaultdict(int)
    many = len(trials) > MANY
    for trial in trials:
        duty = round(trial.duty_percent, 2 if many else 9)
        exposure[duty] += trial.survived
        if trial.failed is not None:
            events[duty, float(f"{trial.failed:.{2 if many else 12}g}")] += 1
    duties, pairs = sorted(exposure), sorted(events)
    return Evidence(
        duty=np.array(duties, dtype=np.float64),
        exposure=np.array([exposure[d] for d in duties], dtype=np.float64),
        event_duty=np.array([d for d, _ in pairs], dtype=np.float64),
        event_width=np.array([w for _, w in pairs], dtype=np.float64),
        events=np.array([events[pair] for pair in pairs], dtype=np.float64),
        holds=tuple(trial.hold for trial in trials),
    )


def log_likelihood(law: Law, evidence: Evidence, median: Floats, spread: Floats) -> Floats:
    """Log-likelihood of `evidence` at each (median, spread), percent duty; shapes broadcast, and so does the result.

    A failure in (a, b) of the trial counts S(a) − S(b) = exp(−H·a)·(1 − exp(−H·(b − a))), a trial without one S(a).
    """
    place, scale = np.asarray(median)[..., None], np.asarray(spread)[..., None]
    total = -(law.cumulative((evidence.duty - place) / scale) * evidence.exposure).sum(axis=-1)
    if evidence.events.size:
        within = -np.expm1(-law.cumulative((evidence.event_duty - place) / scale) * evidence.event_width)
        total = total + (np.log(np.maximum(within, _SMALLEST_CHANCE)) * evidence.events).sum(axis=-1)
    return np.asarray(total, dtype=np.float64)


def log_likelihood_with_lapse(law: Law, evidence: Evidence, median: Floats, spread: Floats, rates: Floats) -> Floats:
    """The same with a hazard that duty does not cure beside the law's, for each of `rates` (stops per whole trial):
    one axis more, the first. At rate 0 it is `log_likelihood`."""
    place, scale = np.asarray(median)[..., None], np.asarray(spread)[..., None]
    survived = -(law.cumulative((evidence.duty - place) / scale) * evidence.exposure).sum(axis=-1)
    hazard = law.cumulative((evidence.event_duty - place) / scale)
    total = np.empty((rates.size, *survived.shape))
    whole = float(evidence.exposure.sum())
    for index, rate in enumerate(rates.tolist()):
        within = -np.expm1(-(hazard + rate) * evidence.event_width)
        seen = (np.log(np.maximum(within, _SMALLEST_CHANCE)) * evidence.events).sum(axis=-1)
        total[index] = survived - rate * whole + seen
    return total


def log_chance_of_same(law: Law, evidence: Evidence, median: Floats, spread: Floats) -> Floats:
    """Log of the chance that such trials end all alike, as they did: all failed, or none. Shapes as above.

    When each happened is left out: the bound for a motor that never (or always) stopped needs only whether.
    """
    if not evidence.failures:
        return log_likelihood(law, evidence, median, spread)
    place, scale = np.asarray(median)[..., None], np.asarray(spread)[..., None]
    failed = -np.expm1(-law.cumulative((evidence.event_duty - place) / scale))
    return np.asarray((np.log(np.maximum(failed, _SMALLEST_CHANCE)) * evidence.events).sum(axis=-1), dtype=np.float64)
