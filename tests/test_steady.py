"""Warm or not: the drift between the pieces of a run-in, and when it ends. Numbers by hand or by another formula."""

from __future__ import annotations

import math
import random
from dataclasses import replace

import numpy as np
import pytest

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import RunIn
from sweeprig.quantities import Reading
from sweeprig.steady import STEADY_SPEED, Steady, drift_rate, steady, warm_up

RUN_IN = RunIn(60.0, 120.0, drift_percent_per_hour=2.0, most_s=1200.0)


def piece(number: int, speed: float | None, u: float = 0.05, verdict: Verdict = Verdict.TURNING) -> Outcome:
    """The number-th piece of 120 s, one right after the other."""
    hold = Hold(number, Purpose.RUN_IN, Approach.FROM_REST, Condition(300.0, 12.0), 60.0, 120.0, 120.0,
                EndsWhen.TIME, (), "test")  # fmt: skip
    began = 120.0 * (number - 1)
    means = {} if speed is None else {STEADY_SPEED: Reading(speed, u, "rpm", began + 120.0, STEADY_SPEED)}
    return Outcome(number, hold, 1, Status.DONE, verdict, began, began + 120.0, began, began + 120.0, 120.0,
                   (120.0, None), means=means)  # fmt: skip


def warming(rpm: float, by: float, time_constant_s: float, most: int = 10) -> list[Outcome]:
    """Pieces of a motor whose speed comes to `rpm` from `by` below or above it, as far as the run-in asks for them."""
    pieces: list[Outcome] = []
    for number in range(1, most + 1):
        at = 120.0 * number - 30.0
        pieces.append(piece(number, rpm + by * math.exp(-at / time_constant_s)))
        if warm_up(RUN_IN, pieces).done:
            break
    return pieces


def test_the_moment_is_the_middle_of_the_averaging() -> None:
    """The last half of a hold counts, so its speed is of three quarters of it; a rotor that stopped gives none."""
    assert steady(piece(3, 1800.0)) == Steady(3, 240.0 + 90.0, 1800.0, 0.05)
    assert steady(piece(3, 1800.0, verdict=Verdict.STOPPED)) is None
    assert steady(piece(3, None)) is None


def test_the_drift_is_the_weighted_line() -> None:
    """Slope and u as a weighted least-squares polynomial gives them (independent method: numpy's)."""
    rng = random.Random(5)
    points = [Steady(k, 120.0 * k, 1800.0 + rng.gauss(0.0, 0.4), 0.5 + 0.1 * k) for k in range(6)]
    at, speed = np.array([p.at_s for p in points]), np.array([p.speed_rpm for p in points])
    fitted, covariance = np.polyfit(at, speed, 1, w=1.0 / np.array([p.u_rpm for p in points]), cov="unscaled")
    mean = float(np.average(speed, weights=[p.u_rpm**-2 for p in points]))
    rate, u = drift_rate(points)
    assert rate == pytest.approx(fitted[0] / mean * 360_000.0)
    assert u == pytest.approx(math.sqrt(covariance[0, 0]) / mean * 360_000.0)


def test_a_speed_that_turns_round_is_not_steady() -> None:
    """Up and down again: the line through it is level, but the points lie off it, and u grows with that."""
    bent = [Steady(k, 120.0 * k, 1800.0 - 2.0 * abs(k - 2), 0.05) for k in range(5)]
    straight = [replace(p, speed_rpm=1800.0) for p in bent]
    assert drift_rate(bent)[0] == pytest.approx(0.0, abs=1e-6)
    assert drift_rate(bent)[1] > 10.0 * drift_rate(straight)[1]


def test_a_steady_motor_is_warmed_up_shortly_and_a_slow_one_longer() -> None:
    """Two pieces for a motor that is steady; more the longer its winding goes on warming; never over the longest."""
    counts = [len(warming(1800.0, -40.0, tau)) for tau in (1.0, 100.0, 200.0)]
    assert counts[0] == 2
    assert counts[0] < counts[1] < counts[2] < 10
    assert len(warming(1800.0, -400.0, 3000.0)) == 10


def test_it_says_which_came_first() -> None:
    """Under the asked rate, or the longest time: in words with the drift at the end."""
    reached = warm_up(RUN_IN, warming(1800.0, -40.0, 100.0))
    assert reached.steady
    assert ", under the 2 %/h asked for" in reached.words(2.0)
    cut = warm_up(RUN_IN, warming(1800.0, -400.0, 3000.0))
    assert cut.done
    assert not cut.steady
    assert "after 1200 s the speed drifted by" in cut.words(2.0)
    assert "not surely under the 2 %/h" in cut.words(2.0)


def test_noise_alone_is_no_proof_of_steadiness() -> None:
    """Two speeds alike, but each so uncertain that the drift between them could be more than asked: it goes on."""
    assert not warm_up(RUN_IN, [piece(1, 1800.0, u=5.0), piece(2, 1800.0, u=5.0)]).done
    assert warm_up(RUN_IN, [piece(1, 1800.0, u=0.1), piece(2, 1800.0, u=0.1)]).done


def test_without_a_speed_it_lasts_its_longest() -> None:
    """A rig that reads no speed cannot tell: the run-in ends after `longest`, and says why."""
    pieces = [piece(n, None) for n in range(1, 10)]
    assert not warm_up(RUN_IN, pieces).done
    whole = warm_up(RUN_IN, [*pieces, piece(10, None)])
    assert whole.done
    assert "no drift of the speed could be told" in whole.words(2.0)


def test_without_a_rate_one_piece_is_all() -> None:
    """A run-in of its time alone, as ever."""
    plain = RunIn(60.0, 240.0)
    assert not warm_up(plain, []).done
    assert warm_up(plain, [piece(1, None)]).done


def test_how_often_a_drifting_speed_passes_for_steady() -> None:
    """A drift at exactly the asked rate is called steady at the second piece in 5 % of cases. 2,000 of them, seed 11:
    outside 2.5 to 7.5 % by chance less than once in a million times."""
    rng = random.Random(11)
    per_piece = 2.0 / 100.0 * 1800.0 * 120.0 / 3600.0
    passed = 0
    for _ in range(2000):
        pieces = [piece(n, 1800.0 + per_piece * n + rng.gauss(0.0, 0.3), u=0.3) for n in (1, 2)]
        passed += warm_up(RUN_IN, pieces).steady
    # the other side: a drift far the other way in both readings has a chance below 1e-4
    assert 0.025 * 2000 < passed < 0.075 * 2000
