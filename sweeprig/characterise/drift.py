"""A threshold that moves with time, in a straight line: how fast, how sure, and how that moves the duties found.

Numbers only; what is done with them is `explained`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from sweeprig.characterise.thresholds import Posterior
from sweeprig.laws import Floats, Trial

BEFORE = 0.25
"""Chance of a drift before the trials. More than that is not wanted: what nobody asked for should not widen."""
ASKED_FOR = 0.5
"""A drift is taken out where its probability is more than this; below it only widens the interval."""
_PLACES, _CLOSE, _ROUNDS = (-2.0, -1.0, 0.0, 1.0, 2.0), 0.7, 40


@dataclass(frozen=True, slots=True)
class Drift:
    """percent     movement of the threshold over the whole span of the trials that was taken out, percent duty
    u              standard uncertainty of it, the chance that there is none counted in
    probability    that there is any, BEFORE before the trials
    u_moment       how well the moment is known that the duties are of, in parts of the span
    by_median      d(median) / d(percent) and d(spread) / d(percent), along the most likely
    """

    percent: float = 0.0
    u: float = 0.0
    probability: float = 0.0
    by_median: float = 0.0
    by_spread: float = 0.0
    u_moment: float = 0.0

    def u_of(self, offset: float) -> float:
        """What the drift's uncertainty adds to the duty at `offset` spreads above the median, percent duty."""
        return math.hypot((self.by_median + offset * self.by_spread) * self.u, self.percent * self.u_moment)


NO_DRIFT = Drift()


def spanned(trials: Sequence[Trial], moment_s: float | None = None) -> Floats:
    """Times of the trials since the moment in parts of their span; all 0 where the times are not known. moment_s: None
    for the mean of their times."""
    at = np.array([trial.at_s for trial in trials], dtype=np.float64)
    whole = float(np.ptp(at)) if at.size else 0.0
    if whole <= 0.0:
        return 0.0 * at
    return np.asarray((at - (float(at.mean()) if moment_s is None else moment_s)) / whole)


def without(trials: Sequence[Trial], percent: float, moment_s: float | None = None) -> tuple[Trial, ...]:
    """The trials as they would have been at the moment: a threshold that had risen by 0.1 % then is a duty that was
    0.1 % lower now."""
    if percent == 0.0:
        return tuple(trials)
    shift = percent * spanned(trials, moment_s)
    return tuple(replace(t, duty_percent=t.duty_percent - float(s)) for t, s in zip(trials, shift, strict=True))


def found(posterior_at: Callable[[float], Posterior], prior_sd: float) -> Drift:
    """The drift that the trials show. posterior_at(percent): posterior of the trials with that much taken out.

    prior_sd: of the movement over the span, a Cauchy law about none, so that a drift much larger than
    expected is still believed when the trials show it; percent duty. Beside it a chance of none at all.
    From the best of five places over the prior uphill in steps that shrink until three points lie on the top, where the
    logarithm of the evidence is a parabola (Laplace). The prior may be a hundred times as wide as the top: a drift of
    many spreads is looked for like one of a few.
    """
    made: dict[float, Posterior] = {}

    def log_posterior(percent: float) -> float:
        if percent not in made:
            made[percent] = posterior_at(percent)
        return made[percent].log_evidence - math.log1p((percent / prior_sd) ** 2)

    place, step, u = max((k * prior_sd for k in _PLACES), key=log_posterior), prior_sd / 2.0, prior_sd
    for _ in range(_ROUNDS):
        low, middle, high = (log_posterior(place + one * step) for one in (-1.0, 0.0, 1.0))
        if max(low, high) > middle:
            place += math.copysign(step, high - low)
            continue
        bend = (low + high - 2.0 * middle) / step**2
        u = 1.0 / math.sqrt(-bend) if bend < 0.0 else prior_sd
        if u >= _CLOSE * step:
            place += (high - low) / (2.0 * step) * u**2 if bend < 0.0 else 0.0
            break
        step = max(u, step / 4.0)
    return _weighed(made, place, min(u, prior_sd), prior_sd)


def _weighed(made: dict[float, Posterior], place: float, u: float, prior_sd: float) -> Drift:
    """Savage and Dickey: the odds of none are the densities of none, after the trials over before (Dickey 1971)."""
    odds_of_none = (1.0 - BEFORE) / BEFORE * math.sqrt(math.pi / 2.0) * prior_sd / u * math.exp(-0.5 * (place / u) ** 2)
    probability = 1.0 / (1.0 + odds_of_none)
    percent = place if probability > ASKED_FOR else 0.0
    square = probability * ((place - percent) ** 2 + u**2) + (1.0 - probability) * percent**2
    near = sorted(made, key=lambda one: abs(one - place))[:3]
    low, high = min(near), max(near)
    (median_low, spread_low), (median_high, spread_high) = made[low].mean(), made[high].mean()
    by_median, by_spread = (median_high - median_low) / (high - low), (spread_high - spread_low) / (high - low)
    return Drift(percent, math.sqrt(square), probability, by_median, by_spread)
