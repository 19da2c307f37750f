"""The motor that is a law: its chances against its formulas, by seeded runs, and the formulas against scipy."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest
from scipy import stats

from sweeprig.errors import SweeprigError
from sweeprig.simbench.kinds.lot import lot
from sweeprig.simbench.kinds.prescribed import log_phi

if TYPE_CHECKING:
    from sweeprig.simbench.kinds.prescribed import PrescribedTruth
    from tests.simbench.kinds.conftest import Kinds


def holds(kinds: type[Kinds], truth: PrescribedTruth, duty: float, seconds: float, count: int) -> list[float]:
    """When each of `count` holds at a duty ended by a stop, s; infinity for those that survived."""
    motor = kinds.prescribed(truth, seed=11)
    ended = []
    for _ in range(count):
        motor.set_drive(1000.0, 100.0, True)
        motor.advance(motor.now + 0.04)
        motor.set_drive(1000.0, duty, True)
        began = motor.now
        motor.advance(began + seconds + 0.02)
        stopped = motor.stopped_at - began
        ended.append(stopped if 0.0 < stopped <= seconds else math.inf)
    return ended


def starts(kinds: type[Kinds], truth: PrescribedTruth, duty: float, count: int) -> int:
    motor = kinds.prescribed(truth, seed=12)
    started = 0
    for _ in range(count):
        motor.set_drive(1000.0, duty, True)
        motor.advance(motor.now + 0.04)
        started += motor.turning
        motor.set_drive(1000.0, duty, False)
        motor.advance(motor.now + 3.0)
    return started


def test_log_phi_against_scipy() -> None:
    """ln Φ agrees with scipy's to 1e-9 of itself from −40 to 8 standard deviations (independent method)."""
    for z in np.linspace(-40.0, 8.0, 97):
        assert log_phi(float(z)) == pytest.approx(float(stats.norm.logcdf(z)), rel=1e-9)


@pytest.mark.parametrize("law", ["exponential", "gaussian"])
def test_half_of_the_holds_survive_at_the_stall_duty(kinds: type[Kinds], law: str) -> None:
    """By definition: 50 % at the stall duty and hold time; spread = standard deviation of the law, by its quantiles.

    Gumbel and normal quantiles from scipy (independent method): at −ln(−ln p) and Φ⁻¹(p).
    """
    t = replace(kinds.prescribed_truth, law=law)
    assert t.survival(12.0, 20.0) == pytest.approx(0.5, rel=1e-12)
    frozen = stats.gumbel_r if law == "exponential" else stats.norm
    scale = 0.4 / float(frozen.std())
    at_half = float(frozen.ppf(0.5))
    for p in (0.01, 0.2, 0.9, 0.99):
        duty = 12.0 + scale * (float(frozen.ppf(p)) - at_half)
        assert t.survival(duty, 20.0) == pytest.approx(p, rel=5e-3)  # 1.283 stands for π/√6


def test_stop_times_are_exponential(kinds: type[Kinds]) -> None:
    """Stops come with the prescribed hazard: Kolmogorov-Smirnov over 1,500 holds; false-alarm chance 1e-4."""
    t = kinds.prescribed_truth
    ended = holds(kinds, t, 11.9, 4000.0, 1500)
    assert math.inf not in ended
    assert stats.kstest(ended, "expon", args=(0.0, 1.0 / t.hazard(11.9))).pvalue > 1e-4


@pytest.mark.parametrize(("law", "duty"), [("exponential", 12.3), ("gaussian", 12.3), ("gaussian", 11.7)])
def test_survivors_of_a_hold(kinds: type[Kinds], law: str, duty: float) -> None:
    """The share of 20 s holds survived is the law's; binomial test over 1,000, false-alarm chance 1e-4."""
    t = replace(kinds.prescribed_truth, law=law)
    survived = holds(kinds, t, duty, 20.0, 1000).count(math.inf)
    assert stats.binomtest(survived, 1000, t.survival(duty, 20.0)).pvalue > 1e-4


@pytest.mark.parametrize(("law", "duty"), [("exponential", 17.6), ("gaussian", 18.4)])
def test_share_of_starts(kinds: type[Kinds], law: str, duty: float) -> None:
    """The share of starts is the start law's; binomial test over 1,500, false-alarm chance 1e-4."""
    t = replace(kinds.prescribed_truth, law=law)
    assert stats.binomtest(starts(kinds, t, duty, 1500), 1500, t.start_chance(duty)).pvalue > 1e-4


def test_floor_stops_at_any_duty(kinds: type[Kinds]) -> None:
    """At 99 % only the floor is left: 400 holds of 60 s at 30 an hour; binomial test, false-alarm chance 1e-4."""
    t = replace(kinds.prescribed_truth, floor_per_hour=30.0)
    assert t.hazard(100.0) == pytest.approx(30.0 / 3600.0, rel=1e-12)
    stopped = 400 - holds(kinds, t, 99.0, 60.0, 400).count(math.inf)
    assert stats.binomtest(stopped, 400, -math.expm1(-0.5)).pvalue > 1e-4


def test_scatter_widens_and_drift_moves(kinds: type[Kinds]) -> None:
    """Scatter: the mean over the normal law of thresholds (quadrature); drift: two hours on, 1 % an hour, is 2 % up.

    Binomial tests over 1,000 and 300 holds, false-alarm chance 2e-4 together.
    """
    t = replace(kinds.prescribed_truth, scatter_percent=0.6)
    nodes, weights = np.polynomial.hermite_e.hermegauss(60)
    chances = [t.survival(12.5, 20.0, 0.6 * float(x)) for x in nodes]
    chance = float(weights @ chances) / math.sqrt(2.0 * math.pi)
    assert chance < t.survival(12.5, 20.0) - 0.1
    assert stats.binomtest(holds(kinds, t, 12.5, 20.0, 1000).count(math.inf), 1000, chance).pvalue > 1e-4
    drifting = kinds.prescribed(replace(kinds.prescribed_truth, drift_percent_per_hour=1.0), seed=3)
    drifting.advance(7200.0)
    survived = 0
    for _ in range(300):
        drifting._origin = drifting.now - 7200.0  # held at two hours: the drift within the test itself is left out
        drifting.set_drive(1000.0, 100.0, True)
        drifting.advance(drifting.now + 0.04)
        drifting.set_drive(1000.0, 14.2, True)
        drifting.advance(drifting.now + 20.0)
        survived += drifting.turning
    assert stats.binomtest(survived, 300, kinds.prescribed_truth.survival(12.2, 20.0)).pvalue > 1e-4


def test_a_lot_has_its_spreads(kinds: type[Kinds]) -> None:
    """Mean and standard deviation of 1,000 units are as stated; the other values are the same in all.

    Four standard errors each: false-alarm chance 4 times 6e-5.
    """
    units = lot(kinds.geared_truth, {"resistance_ohm": 5.0, "running_friction_nm": 20.0}, 1000, seed=4)
    for name, percent in (("resistance_ohm", 5.0), ("running_friction_nm", 20.0)):
        nominal = getattr(kinds.geared_truth, name)
        drawn = np.array([getattr(unit, name) for unit in units]) / nominal
        assert abs(drawn.mean() - 1.0) < 4.0 * percent / 100.0 / math.sqrt(1000.0)
        assert drawn.std() * 100.0 == pytest.approx(percent, rel=4.0 * 0.5**0.5 / math.sqrt(1000.0) * 1.2)
    assert {unit.inertia_kg_m2 for unit in units} == {kinds.geared_truth.inertia_kg_m2}


def test_a_unit_of_a_lot_is_always_the_same(kinds: type[Kinds]) -> None:
    """Unit 7 does not depend on how many there are, nor on which other values vary; another seed gives another."""
    few = lot(kinds.electronic_truth, {"resistance_ohm": 5.0}, 8, seed=4)
    many = lot(kinds.electronic_truth, {"running_friction_nm": 10.0, "resistance_ohm": 5.0}, 20, seed=4)
    assert few[7].resistance_ohm == many[7].resistance_ohm
    assert few[7].resistance_ohm != lot(kinds.electronic_truth, {"resistance_ohm": 5.0}, 8, seed=5)[7].resistance_ohm
    assert len({unit.resistance_ohm for unit in many}) == 20
    assert len({unit.running_friction_nm / unit.resistance_ohm for unit in many}) == 20


def test_a_lot_refuses_what_no_motor_has(kinds: type[Kinds]) -> None:
    """A name that is no value, a spread below nothing and a negative number of units are refused by name."""
    with pytest.raises(SweeprigError, match=r"no such value.*weight_kg.*resistance_ohm"):
        lot(kinds.geared_truth, {"weight_kg": 5.0}, 3, seed=1)
    with pytest.raises(SweeprigError, match=r"resistance_ohm.*-5 %.*0 to 100 %"):
        lot(kinds.geared_truth, {"resistance_ohm": -5.0}, 3, seed=1)
    with pytest.raises(SweeprigError, match="number of units"):
        lot(kinds.geared_truth, {}, -1, seed=1)
