"""The gear motor: play taken up before the load moves, the blow, and without play the same speeds as the plant's."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from sweeprig.simbench.plant import Plant

if TYPE_CHECKING:
    from sweeprig.simbench.kinds.geared import GearedMotor
    from tests.simbench.kinds.conftest import Kinds


def test_speed_is_the_plants_over_the_ratio(kinds: type[Kinds]) -> None:
    """Settled, motor speed agrees with the plant's of the same values to 0.5 %: no heat, friction without spread."""
    steady = replace(kinds.geared_truth, thermal_resistance_k_per_w=0.0, running_friction_spread_percent=0.0)
    for duty in (60.0, 100.0):
        motor, plant = kinds.geared(truth=steady), Plant(steady, 2.0, np.random.default_rng(2))
        plant.set_supply(12.0, 3.0, True)
        rpm = []
        for one in (motor, plant):
            one.set_drive(1000.0, duty, True)
            one.advance(3.0)
            angle = one.angle
            one.advance(8.0)
            rpm.append(one.angle - angle)
        assert rpm[0] == pytest.approx(rpm[1], rel=0.005)
        pulses = motor.edges
        motor.advance(13.0)
        assert (motor.edges - pulses) / 60.0 * 30.0 * 2.0 * math.pi == pytest.approx(rpm[0], rel=0.01)


def stop_and_start(motor: GearedMotor, rounds: int, duty: float) -> list[float]:
    """Delay of the first tachometer edge after each of so many starts from rest, s."""
    delays = []
    for _ in range(rounds):
        motor.set_drive(1000.0, duty, False)
        motor.advance(motor.now + 4.0)
        assert motor.omega == 0.0
        edges, began = motor.edges, motor.now
        motor.set_drive(1000.0, duty, True)
        while motor.edges == edges and motor.now < began + 1.0:
            motor.advance(motor.now + 0.002)
        delays.append(motor.now - began)
        motor.advance(motor.now + 2.0)
    return delays


def test_play_delays_the_load(kinds: type[Kinds]) -> None:
    """Where there is play the load sets out later, by the time in which the motor alone takes it up; else at once.

    Independent method: scipy on J_own·dω/dt = K·I − T_own, J·di/dt left out (τ_el 0.6 ms), with the mean current of
    80 % of 12 V; the friction's own wandering (5 %) and the current's rise leave 10 %.
    """
    truth = kinds.geared_truth
    delays: list[float] = []
    k, ohm, own_inertia, own_nm = 0.025, 9.0, 0.4 * 8e-6, 0.25 * truth.running_friction_nm
    for backlash in (0.0, 0.2, 0.2, 0.2, 0.2, 0.2):
        motor = kinds.geared(backlash, seed=len(delays) + 1)
        stop_and_start(motor, 1, 80.0)
        motor.set_drive(1000.0, 80.0, False)
        motor.advance(motor.now + 4.0)
        gap, began = motor.open_rad, motor.now
        motor.set_drive(1000.0, 80.0, True)
        while motor.load_omega == 0.0 and motor.now < began + 1.0:
            motor.advance(motor.now + 1e-4)
        delays.append(motor.now - began)

        def slopes(_: float, y: Any) -> list[float]:
            speed = float(y[1])
            amps = (0.8 * 12.5 - 0.5 - k * speed) / ohm
            return [speed, (k * amps - own_nm - truth.viscous_friction_nm_s * speed) / own_inertia]

        def met(_: float, y: Any, gap: float = gap) -> float:
            return float(y[0]) - gap

        met.terminal = True  # type: ignore[attr-defined]  # scipy reads attributes of the event function
        done = solve_ivp(slopes, (0.0, 1.0), [0.0, 0.0], events=met, rtol=1e-9, atol=1e-9)
        expected = float(done.t[-1]) if gap > 0.0 else 0.0
        assert delays[-1] == pytest.approx(expected, rel=0.1, abs=2e-4)
    assert delays[0] <= 2e-4
    assert np.mean(delays[1:]) > 0.01
    assert np.std(delays[1:]) > 0.002


def test_the_blow_keeps_momentum_and_costs_energy(kinds: type[Kinds]) -> None:
    """Meeting the load the motor's speed falls to its share of the inertia, 40 %, and the play is gone."""
    motor = kinds.geared(0.3)
    stop_and_start(motor, 2, 80.0)
    motor.set_drive(1000.0, 80.0, False)
    motor.advance(motor.now + 4.0)
    assert motor.open_rad > 0.0
    blows = motor.blows
    motor.set_drive(1000.0, 80.0, True)
    speed = 0.0
    while motor.blows == blows:
        motor.advance(motor.now + 2e-5)
        before, speed = speed, motor.omega
    assert before > 10.0
    assert speed == pytest.approx(0.4 * before, rel=0.03)
    assert motor.open_rad == 0.0


def test_a_motor_starts_alone_where_its_load_does_not(kinds: type[Kinds]) -> None:
    """Below the duty that moves motor and load, one with play takes it up, is caught at the load, and stays."""
    tight, loose = kinds.geared(0.0, 25.0), kinds.geared(0.3, 25.0)
    for motor in (tight, loose):
        motor.set_drive(1000.0, 100.0, True)
        motor.advance(2.0)
        motor.set_drive(1000.0, 0.0, True)
        motor.advance(6.0)
        motor.set_drive(1000.0, 10.0, True)
        motor.advance(8.0)
    assert (tight.turning, loose.turning) == (False, False)
    assert (tight.stops, loose.stops) == (1, 2)
    assert loose.blows == 1


def slower_alone(kinds: type[Kinds], backlash: float = 0.2, own_friction_percent: float = 80.0) -> GearedMotor:
    """Running, its motor the side that the friction brakes: when the gate opens, the load would run on."""
    steady = replace(kinds.geared_truth, running_friction_spread_percent=0.0, viscous_friction_nm_s=0.0)
    motor = kinds.geared(backlash, own_friction_percent, truth=steady)
    motor.set_drive(1000.0, 100.0, True)
    motor.advance(3.0)
    return motor


def test_play_opens_when_the_torque_turns(kinds: type[Kinds]) -> None:
    """Coasting, the motor falls back through the whole play at the difference of both decelerations, then is driven.

    By hand, constant frictions: the gap grows as ½·(T_own/J_own − T_load/J_load)·t² with 80 % of the friction and
    40 % of the inertia at the motor; at the other flank both have one speed again, which keeps the momentum.
    """
    motor, t = slower_alone(kinds), kinds.geared_truth
    blows, speed, began = motor.blows, motor.omega, motor.now
    assert (motor.flank, motor.open_rad) == (1, 0.0)
    motor.set_drive(1000.0, 100.0, False)
    apart = (0.8 / 0.4 - 0.2 / 0.6) * t.running_friction_nm / t.inertia_kg_m2
    crossing = math.sqrt(2.0 * 0.2 * 30.0 / apart)
    motor.advance(began + 0.98 * crossing)
    assert (motor.flank, motor.blows) == (0, blows)
    assert motor.load_omega - motor.omega == pytest.approx(apart * 0.98 * crossing, rel=1e-6)
    motor.advance(began + 1.02 * crossing)
    assert (motor.flank, motor.blows) == (-1, blows + 1)
    assert motor.open_rad == pytest.approx(6.0)
    together = speed - 1.02 * crossing * t.running_friction_nm / t.inertia_kg_m2
    assert motor.omega == motor.load_omega == pytest.approx(together, rel=1e-6)


def test_play_is_taken_up_when_the_torque_comes_back(kinds: type[Kinds]) -> None:
    """Driven again while it runs, the motor outruns the load through the play; one more blow, and it pushes again."""
    motor = slower_alone(kinds)
    motor.set_drive(1000.0, 100.0, False)
    motor.advance(motor.now + 0.15)
    blows, load = motor.blows, motor.load_omega
    assert motor.flank == -1
    motor.set_drive(1000.0, 100.0, True)
    motor.advance(motor.now + 0.004)
    assert motor.flank == 0
    assert motor.omega > load > motor.load_omega
    motor.advance(motor.now + 0.1)
    assert (motor.flank, motor.open_rad, motor.blows) == (1, 0.0, blows + 1)


@pytest.mark.parametrize(("backlash", "own"), [(0.0, 80.0), (0.2, 25.0)])
def test_no_play_opens_without_a_reversal(kinds: type[Kinds], backlash: float, own: float) -> None:
    """Without play, or where the load is the side that slows sooner, coasting down makes no blow until it stands."""
    motor = slower_alone(kinds, backlash, own)
    blows = motor.blows
    motor.set_drive(1000.0, 100.0, False)
    motor.advance(motor.now + 0.5)
    assert motor.omega > 0.0 or motor.stops == 1
    assert motor.blows == blows
    assert motor.flank == 1 or motor.omega == 0.0


def test_output_edges_are_the_loads_way(kinds: type[Kinds]) -> None:
    """Through the play the tachometer follows the load: edges are its speed's integral, by fine sums, to one edge."""
    motor = slower_alone(kinds)
    motor.set_drive(1000.0, 100.0, False)
    edges, turned, driven = motor.edges, 0.0, 0.0
    for _ in range(3000):
        load, own = motor.load_omega, motor.omega
        motor.advance(motor.now + 5e-5)
        turned += 0.5 * (load + motor.load_omega) * 5e-5
        driven += 0.5 * (own + motor.omega) * 5e-5
    per_rad = 60.0 / 30.0 / (2.0 * math.pi)
    assert motor.edges - edges == pytest.approx(turned * per_rad, abs=1.0)
    assert turned - driven == pytest.approx(6.0, rel=0.01)


def test_stopped_at_the_other_flank_it_has_the_whole_play_ahead(kinds: type[Kinds]) -> None:
    """A coast-down that ended with the load driving leaves all of the play open, not a random part of it."""
    motor = slower_alone(kinds)
    motor.set_drive(1000.0, 100.0, False)
    motor.advance(motor.now + 4.0)
    assert (motor.turning, motor.omega, motor.load_omega, motor.stops) == (False, 0.0, 0.0, 1)
    assert motor.open_rad == pytest.approx(6.0, abs=1e-6)
