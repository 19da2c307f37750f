"""Settled or not: decided by the readings, not by a fixed dwell."""

from __future__ import annotations

import math
import random

from sweeprig.conduct.settle import mean_and_u, settled


def run_up(time_constant: float, noise: float, seed: int, interval: float = 0.5, count: int = 400) -> list[float]:
    """A first-order approach to 1000 with white noise (percent)."""
    rng = random.Random(seed)
    return [
        1000.0 * (1.0 - math.exp(-i * interval / time_constant)) + rng.gauss(0.0, 10.0 * noise) for i in range(1, count)
    ]


def decided_at(values: list[float], tolerance: float) -> int:
    for n in range(1, len(values) + 1):
        verdict = settled(values[:n], tolerance)
        if verdict is not None and verdict.decided:
            return n
    return len(values) + 1


def test_too_few_readings_decide_nothing() -> None:
    """A trend and a scatter cannot be told apart on five readings."""
    assert settled([1.0] * 5, 1.0) is None


def test_a_slow_motor_is_waited_for() -> None:
    """The decision comes later for a longer time constant."""
    fast, slow = (decided_at(run_up(tau, 0.05, 1), 1.0) for tau in (0.5, 8.0))
    assert fast < slow


def test_false_settles_are_rare() -> None:
    """Over 400 run-ups (time constants 0.1 to 10 s, noise 0.1 to 1 %) the mean of the settled part is within the
    tolerance of the end value in at least 97 %. If the true rate of misses were 1 % (its stated confidence), more than
    12 misses in 400 have a chance of 0.06 % (binomial)."""
    misses = 0
    for seed in range(400):
        rng = random.Random(10_000 + seed)
        tau, noise = 10 ** rng.uniform(-1.0, 1.0), 10 ** rng.uniform(-1.0, 0.0)
        values = run_up(tau, noise, seed)
        n = decided_at(values, 1.0)
        verdict = settled(values[: min(n, len(values))], 1.0)
        assert verdict is not None
        misses += n <= len(values) and abs(verdict.mean - 1000.0) > 10.0
    assert misses <= 12


def test_noise_too_large_is_reported_not_hidden() -> None:
    """With noise that a few readings cannot average below the tolerance, the reached tolerance says so."""
    verdict = settled(run_up(0.1, 5.0, 3)[:20], 0.5)
    assert verdict is not None
    assert not verdict.decided
    assert verdict.reached_percent > 0.5


def test_u_of_correlated_readings_is_not_too_small() -> None:
    """For a first-order autoregressive series with r = 0.7 the mean's true standard deviation is found within 35 %.

    Source of the value compared with: the variance of a mean of an AR(1) series, s²/n·(1+r)/(1−r) for large n
    (Bartlett 1946, from memory), checked here by brute force over 300 series of 60 readings."""
    means, stated = [], []
    for seed in range(300):
        rng = random.Random(seed)
        x, series = 0.0, []
        for _ in range(160):
            x = 0.7 * x + rng.gauss(0.0, 1.0)
            series.append(x)
        mean, u = mean_and_u(series[100:])
        means.append(mean)
        stated.append(u)
    true = math.sqrt(sum(m * m for m in means) / len(means))
    assert abs(sum(stated) / len(stated) / true - 1.0) < 0.35


def test_constant_readings_have_no_spread() -> None:
    """Identical readings: u of the mean is zero, and the instrument's own u is the caller's to add."""
    assert mean_and_u([5.0] * 10) == (5.0, 0.0)
