"""Rare stops and failed starts by the chain of the frictions: against counting, against splitting, and its own grid."""

from __future__ import annotations

import math

import numpy as np
import pytest

from sweeprig.errors import SweeprigError
from sweeprig.holds import Condition
from sweeprig.simbench import rare_chain, rare_starts
from sweeprig.simbench.chain import flow
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.rare_chain import chain_rate_in_hold, grid
from sweeprig.simbench.rare_starts import start_failure
from sweeprig.simbench.rare_trials import settled_in_service, stop_rate_in_hold
from sweeprig.simbench.trials import Procedure, Task, perform

FAN = MotorTruth(11.6, 0.0105, 0.0255, 5.6e-6, 6e-8, 2e-6, 1.2e-3, 26.0, 4.6e-3, 5.0, 0.12, 0.7, 0.0, 1.0)
"""Its winding does not warm: what is compared is at the same warmth."""
P = Procedure(hold_time_s=5.0, run_in=(60.0, 3.0))


def task(kind: str, duty: float, trials: int = 1, motor: MotorTruth = FAN, seed: int = 5) -> Task:
    return Task(motor, Condition(25e3, 12.0), P, kind, duty, trials, (seed,))


def test_stops_of_the_chain_are_those_that_are_counted() -> None:
    """Where 1 to 5 % of the holds stop, the chain's chance is that of 4,000 counted holds.

    Independent method: counting, binomial u. Within four standard errors of both: missed by chance about once in
    10,000 runs. Fixed seed.
    """
    rate = chain_rate_in_hold(task("stall", 15.9))
    trials = 4000
    counted = perform(task("stall", 15.9, trials, seed=6)).events / trials
    assert 0.01 < counted < 0.05
    away = math.log(rate.chance(P.hold_time_s) / counted)
    assert abs(away) < 4.0 * math.hypot(rate.u_log, math.sqrt((1.0 - counted) / (counted * trials)))
    assert rate.u_log < 0.2


@pytest.mark.parametrize("duty", [17.4, 18.0])
def test_stops_of_the_chain_are_those_of_the_splitting(duty: float) -> None:
    """Between 1e-3 and 1e-5 a hold, chain and splitting agree within three of their joint standard errors.

    Independent method: splitting on the plant itself. Missed by chance about once in 350 runs. Fixed seed.
    """
    chain, split = chain_rate_in_hold(task("stall", duty)), stop_rate_in_hold(task("stall", duty, 300), 5)
    assert 1e-7 < chain.chance(P.hold_time_s) < 1e-3
    assert chain.u_log < 0.2
    assert split.u_log < 1.5
    assert abs(math.log(chain.value / split.value)) < 3.0 * math.hypot(chain.u_log, split.u_log)


def test_finer_grids_come_closer() -> None:
    """The chain's rate of catches changes by less from the fine to a finer grid than its statement of u says.

    Independent of the seed: no random number enters but for the run before.
    """
    plant, _, _ = settled_in_service(task("stall", 17.0))
    assert isinstance(plant, Plant)
    rates = []
    for spacing in (rare_chain.COARSE, rare_chain.FINE, 0.55):
        at = grid(plant, spacing)
        rates.append(rare_chain._steady(at, at.start())[0])
    coarse, fine, finer = (math.log(rate) for rate in rates)
    assert abs(finer - fine) < max(0.02, abs(fine - coarse))


@pytest.mark.parametrize("duty", [18.6, 19.2, 19.6])
def test_failed_starts_of_the_chain_are_those_that_are_counted(duty: float) -> None:
    """From half of the starts down to some percent, the chain's chance of failure is that of 6,000 counted starts.

    Independent method: counting, binomial u. Within four standard errors of both: missed by chance about once in
    5,000 runs of the three. Fixed seed.
    """
    found = start_failure(task("start", duty))
    trials = 6000
    failed = 1.0 - perform(task("start", duty, trials, seed=7)).events / trials
    assert 0.002 < failed < 0.9
    away = math.log(found.value / failed)
    assert abs(away) < 4.0 * math.hypot(found.u_log, math.sqrt((1.0 - failed) / (failed * trials)))
    assert found.u_log < 0.2


def test_failed_starts_become_rare_steadily() -> None:
    """Beyond the reach of counting the chance of a failure falls ever faster with duty, and its u stays below 0.5."""
    logs = []
    for duty in (19.6, 20.2, 20.8):
        found = start_failure(task("start", duty))
        assert found.u_log < 0.5
        logs.append(math.log(found.value))
    assert logs[0] - logs[1] > 1.0
    assert logs[1] - logs[2] > logs[0] - logs[1]


def test_a_torque_that_lifts_no_spot_never_starts() -> None:
    """At a duty whose peak torque is zero every start fails, surely."""
    assert start_failure(task("start", 0.0)) == rare_starts.Chance(1.0, 0.0)


def test_a_friction_too_slow_for_the_grid_is_refused() -> None:
    """A friction that hardly moves within a cell is refused, with the advice to use splitting."""
    values = {name: getattr(FAN, name) for name in MotorTruth.__dataclass_fields__}
    slow = MotorTruth(**(values | {"friction_correlation_s": 60.0}))
    with pytest.raises(SweeprigError, match="too slowly") as caught:
        chain_rate_in_hold(task("stall", 30.0, motor=slow))
    assert caught.value.remedy == "Use splitting for this motor"


def test_the_flow_keeps_mass_and_mean() -> None:
    """What flows keeps its mass, and arrives at the speed it should: mean and spread are exact."""
    speeds = np.linspace(0.0, 100.0, 51)
    later = np.column_stack([0.8 * speeds + 7.3, 0.9 * speeds + 1.1])
    moves = flow(speeds, later)
    masses = np.zeros((51, 2, 1))
    masses[20, 0, 0], masses[31, 1, 0] = 0.25, 0.75
    arrived = moves.apply(masses)
    assert float(arrived.sum()) == pytest.approx(1.0, abs=1e-12)
    for friction, place in ((0, 20), (1, 31)):
        shares = arrived[:, friction, 0] / arrived[:, friction, 0].sum()
        mean = float(np.dot(shares, speeds))
        assert mean == pytest.approx(later[place, friction], abs=1e-9)
        assert float(np.dot(shares, (speeds - mean) ** 2)) == pytest.approx(0.0, abs=1e-8)
