"""What readings of a speed on its way to its final value say about that value: a posterior over a table of models.

Pure numbers, no decision: that is `settle`'s. Every model has the same form, and all are weighed at once:

    y(t) = v + A·r(t, τ1) + B·r(t, τ2) + D·(t − t0) + noise,   r(t, τ): e^(−t/τ) averaged over the reading's window

v the final value, A the approach with the motor's time constant τ1, B a creeping second one, D the slow drift of a
winding that warms over minutes (which is no part of settling), and first-order autoregressive noise. τ1, τ2, how large
B may be and the correlation stand in the table; v, A, B, D and the noise are integrated over exactly.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Places = NDArray[np.intp]

SHORTEST_S, LONGEST_S, RATIO = 0.08, 60.0, 1.15
"""Time constants of the table, s. A slower one than the longest counts as drift: its final value is not waited for."""
SECOND = (2.0, 2.7, 3.6, 4.9, 6.6, 8.9, 12.0, 16.0, 22.0, 30.0, 40.0, 54.0)
"""A creeping second time constant is so many times the first."""
NO_CREEP, CREEP, CREEPS = 0.004, 0.06, 0.5
"""Standard deviation of B in parts of the whole step, without and with a creep; the share of motors held to creep."""
CORRELATIONS = ((0.0, 0.55), (0.35, 0.28), (0.65, 0.17))
"""Lag-1 correlation of the noise, and its weight before anything is known."""
MISFIT = 0.05
"""A motor is no exact exponential: a reading may be off the model by so much of its distance from the final value."""
MISFIT_BEFORE = 0.2
"""… and the speed before the step, of which nothing says that the approach began at once, by so much."""
DRIFT_PERCENT_PER_MINUTE = 0.5
"""Standard deviation of D in percent of v."""
NOISE_WEIGHT, NOISE_PERCENT = 1.0, 0.1
"""The prior of the noise: as if 2 × NOISE_WEIGHT readings had shown NOISE_PERCENT of v."""
KEPT = 0.95
"""Weight of what the hold before has taught, beside the table's own."""
NEAR = 4
"""A time constant learned is blurred over so many steps of the table either way: it differs from duty to duty."""


@dataclass(frozen=True, slots=True)
class Models:
    """The table, arrays of shape (models,): places in `time_constants_s` of τ1 and τ2, standard deviation of B in parts
    of the step, kind (0: no creep; else 1 + the place in SECOND), place in CORRELATIONS, logarithm of the weight."""

    time_constants_s: Array
    fast: Places
    slow: Places
    share: Array
    kind: Places
    correlation: Places
    log_weight: Array


@dataclass(frozen=True, slots=True)
class Posterior:
    """Of the models that count, shape (kept,): weight (sum 1), mean of v less `level` and of D (per minute), their
    covariance in units of the noise variance, noise variance, correlation, τ1. dof: of the t distribution.
    all_weights: of the whole table, to learn from. t0_s: where the drift is zero."""

    level: float
    t0_s: float
    dof: float
    weight: Array
    value: Array
    drift: Array
    value_value: Array
    value_drift: Array
    drift_drift: Array
    noise: Array
    correlation: Array
    time_constant_s: Array
    all_weights: Array


@cache
def models() -> Models:
    """The table, built once."""
    count = int(math.log(LONGEST_S / SHORTEST_S) / math.log(RATIO)) + 1
    rows: list[tuple[int, int, float, int, float]] = []
    for fast in range(count):
        rows.append((fast, min(fast + _steps(4.0), count - 1), NO_CREEP, 0, 1.0 - CREEPS))
        for place, times in enumerate(SECOND):
            slow = fast + _steps(times)
            if slow < count:
                rows.append((fast, slow, CREEP, 1 + place, CREEPS / len(SECOND)))
    fast_slow_kind = np.array([(row[0], row[1], row[3]) for row in rows], dtype=np.intp)
    share_weight = np.array([(row[2], row[4]) for row in rows])
    times = len(CORRELATIONS)
    weight = np.concatenate([share_weight[:, 1] * prior for _, prior in CORRELATIONS])
    return Models(
        SHORTEST_S * np.power(RATIO, np.arange(count, dtype=np.float64)),
        np.tile(fast_slow_kind[:, 0], times), np.tile(fast_slow_kind[:, 1], times),
        np.tile(share_weight[:, 0], times), np.tile(fast_slow_kind[:, 2], times),
        np.repeat(np.arange(times), len(rows)), np.log(weight / weight.sum()),
    )  # fmt: skip


def _steps(times: float) -> int:
    return round(math.log(times) / math.log(RATIO))


def learned(weights: Array) -> Array:
    """Logarithms of the weights with which the next hold begins, from those with which one ended, shape (models,).

    What is carried over is how likely each time constant (blurred), each creep (relative to it, blurred) and each
    correlation are, each by itself; the table's own weights stay mixed in, so that nothing is ever ruled out."""
    table = models()
    constants = np.convolve(
        np.bincount(table.fast, weights, len(table.time_constants_s)), np.ones(2 * NEAR + 1) / (2 * NEAR + 1), "same"
    )
    kinds = np.bincount(table.kind, weights, len(SECOND) + 1)
    creeping = kinds[1:].sum()
    blurred = np.convolve(kinds[1:], np.ones(3) / 3.0, "same")
    kinds[1:] = 0.3 * creeping / len(SECOND) + 0.7 * blurred
    correlations = np.bincount(table.correlation, weights, len(CORRELATIONS))
    carried = constants[table.fast] * kinds[table.kind] * correlations[table.correlation]
    mixed: Array = np.log(KEPT * carried / carried.sum() + (1.0 - KEPT) * np.exp(table.log_weight))
    return mixed


def posterior(
    times_s: Array, values: Array, window_s: float, before: float | None, u: float, known: Array | None
) -> Posterior:
    """Weigh the table by the readings.

    times_s, values   ends of the windows, s since the setting was applied, and readings in one unit, shape (n,)
    before            the value just before the setting was applied, where it is known
    u                 standard uncertainty of one reading: the noise is not believed to be below it
    known             as `learned` gives it; None at first
    """
    table = models()
    half = len(values) // 2
    level, t0 = float(values[half:].mean()), float(times_s[half:].mean())
    scatter = scatter_of(values, u)
    columns, effective = _columns(
        times_s, values - level, t0, window_s, None if before is None else before - level, scatter
    )
    step = max(float(np.abs(values - level).max()), scatter, 0.0 if before is None else abs(before - level))
    gram = np.empty((len(CORRELATIONS), *[columns.shape[0]] * 2))
    for place, (correlation, _) in enumerate(CORRELATIONS):
        white = _whitened(columns, correlation, 0 if before is None else 1)
        gram[place] = white @ white.T
    stiff_a = (scatter / (2.0 * step)) ** 2
    stiff_b = (scatter / (table.share * step)) ** 2
    stiff_d = (scatter / (DRIFT_PERCENT_PER_MINUTE / 100.0 * max(abs(level), scatter))) ** 2
    fit = _Eliminated(gram, table, stiff_a, stiff_b, stiff_d)
    shape = NOISE_WEIGHT + max(effective - 1.0, 1.0) / 2.0
    scale = NOISE_WEIGHT * max(NOISE_PERCENT / 100.0 * abs(level), u) ** 2 + 0.5 * fit.rest
    whiten = np.array([-0.5 * (effective - 1.0) * math.log(1.0 - each * each) for each, _ in CORRELATIONS])
    log_weight = (table.log_weight if known is None else known) + whiten[table.correlation]
    log_weight = log_weight - 0.5 * fit.log_det + 0.5 * np.log(stiff_a * stiff_b) - shape * np.log(scale)
    weights = np.exp(log_weight - log_weight.max())
    weights /= weights.sum()
    keep = weights > 1e-5
    correlations = np.array([each for each, _ in CORRELATIONS])[table.correlation]
    return Posterior(
        level, t0, 2.0 * shape, weights[keep] / weights[keep].sum(), fit.value[keep], fit.drift[keep],
        fit.value_value[keep], fit.value_drift[keep], fit.drift_drift[keep], scale[keep] / shape,
        correlations[keep], table.time_constants_s[table.fast[keep]], weights,
    )  # fmt: skip


def scatter_of(values: Array, u: float) -> float:
    """A first guess of the noise, for what only has to be about right: from successive differences of the last half."""
    tail = values[max(len(values) // 2 - 1, 0) :]
    differences = np.diff(tail if len(tail) > 4 else values)
    level = abs(float(tail.mean()))
    return math.sqrt(max(float(np.mean(differences * differences)) / 2.0, (3e-4 * level) ** 2, (u / 4.0) ** 2, 1e-24))


def _columns(
    times_s: Array, values: Array, t0: float, window_s: float, before: float | None, scatter: float
) -> tuple[Array, float]:
    """(r of every time constant, 1, drift, values), shape (constants + 3, n), each reading weighed by its misfit; and
    how many whole readings that makes."""
    constants = models().time_constants_s[:, None]
    n, count = len(values), len(constants)
    columns = np.empty((count + 3, n))
    ends = np.exp(-times_s / constants)
    columns[:count] = constants / window_s * (np.exp(-np.maximum(times_s - window_s, 0.0) / constants) - ends)
    columns[count] = 1.0
    columns[count + 1] = (times_s - t0) / 60.0
    columns[count + 2] = values
    weight = 1.0 / np.sqrt(1.0 + (MISFIT * values / scatter) ** 2)
    columns *= weight
    effective = float((weight * weight).sum())
    if before is not None:
        first = np.concatenate([np.ones(count + 1), [-t0 / 60.0, before]])
        weight_before = 1.0 / math.sqrt(1.0 + (MISFIT_BEFORE * before / scatter) ** 2)
        columns = np.concatenate([first[:, None] * weight_before, columns], axis=1)
        effective += weight_before * weight_before
    return columns, effective


def _whitened(columns: Array, correlation: float, apart: int) -> Array:
    """Columns of a first-order autoregressive series as of independent readings of the same variance: the first stays,
    each other loses `correlation` times the one before it (Prais and Winsten 1954, from memory). The first `apart`
    readings are not of the series."""
    if correlation == 0.0:
        return columns
    white = columns.copy()
    white[:, apart + 1 :] -= correlation * columns[:, apart:-1]
    white[:, apart + 1 :] /= math.sqrt(1.0 - correlation * correlation)
    return white


class _Eliminated:
    """Least squares with Gaussian priors on A, B and D for all models at once: A and B are eliminated (Schur
    complements), v and D are left. rest: the residual sum of squares with the priors' part in it; log_det: of the whole
    matrix. Conjugate normal-inverse-gamma (Gelman et al., Bayesian Data Analysis, from memory)."""

    def __init__(self, gram: Array, table: Models, stiff_a: float, stiff_b: Array, stiff_d: float) -> None:
        count = len(table.time_constants_s)
        one, drift, data = count, count + 1, count + 2
        at, a, b = table.correlation, table.fast, table.slow
        aa = gram[at, a, a] + stiff_a
        with_a = {name: gram[at, a, column] for name, column in (("v", one), ("d", drift), ("y", data))}
        ab = gram[at, a, b]
        bb = np.maximum(gram[at, b, b] + stiff_b - ab * ab / aa, 1e-12)
        with_b = {
            name: gram[at, b, column] - ab / aa * with_a[name]
            for name, column in (("v", one), ("d", drift), ("y", data))
        }

        def left(row: int, column: int, names: str) -> Array:
            over_a = with_a[names[0]] * with_a[names[1]] / aa
            reduced: Array = gram[:, row, column][at] - over_a - with_b[names[0]] * with_b[names[1]] / bb
            return reduced

        vv, vd, vy = left(one, one, "vv"), left(one, drift, "vd"), left(one, data, "vy")
        dd, dy, yy = left(drift, drift, "dd") + stiff_d, left(drift, data, "dy"), left(data, data, "yy")
        det = np.maximum(vv * dd - vd * vd, 1e-12)
        self.value_value, self.value_drift, self.drift_drift = dd / det, -vd / det, vv / det
        self.value = self.value_value * vy + self.value_drift * dy
        self.drift = self.value_drift * vy + self.drift_drift * dy
        self.rest = np.maximum(yy - self.value * vy - self.drift * dy, 0.0)
        self.log_det = np.log(aa * bb * det)


def within(half_width: Array | float, centre: Array, sd: Array, dof: float) -> Array:
    """Chance that centre + sd·t lies within ± half_width, t of Student's distribution; shapes broadcast."""
    return _t_below((half_width - centre) / sd, dof) - _t_below((-half_width - centre) / sd, dof)


def _t_below(x: Array, dof: float) -> Array:
    """Student's distribution function by a normal one: Wallace 1959 (from memory), 1e-3 off
    at most for dof of 5 and more, and that by Abramowitz and Stegun 7.1.26 (from memory), 1.5e-7 off."""
    z = np.sqrt(dof * np.log1p(x * x / dof)) * (8.0 * dof + 1.0) / (8.0 * dof + 3.0)
    t = 1.0 / (1.0 + 0.3275911 * z / math.sqrt(2.0))
    series = t * (0.254829592 + t * (-0.284496736 + t * (1.421413741 + t * (-1.453152027 + t * 1.061405429))))
    above = 0.5 * series * np.exp(-0.5 * z * z)
    below: Array = np.where(x > 0.0, 1.0 - above, above)
    return below


__all__ = ["Posterior", "learned", "models", "posterior", "scatter_of", "within"]
