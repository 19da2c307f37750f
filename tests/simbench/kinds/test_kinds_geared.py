"""The gear motor: play taken up before the load moves, the blow, and without play the same speeds as the plant's."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pytest

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


def test_play_delays_the_output(kinds: type[Kinds]) -> None:
    """The output shaft starts later where there is play, by a delay that differs from start to start."""
    none, loose = stop_and_start(kinds.geared(0.0), 12, 80.0), stop_and_start(kinds.geared(0.2), 12, 80.0)
    assert sum(loose) > sum(none) + 12 * 0.005
    assert np.std(loose) > 2.0 * np.std(none)


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
        motor.advance(motor.now + 0.001)
        before, speed = speed, motor.omega
    assert speed == pytest.approx(0.4 * before, rel=0.1)
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
