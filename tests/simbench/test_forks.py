"""Forks of plants of every kind: they begin as their plant does, and leave it alone."""

from __future__ import annotations

import random
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from sweeprig.job import load, shipped
from sweeprig.simbench.build import motor_truth
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.detailed import DetailedFedPlant, DetailedPlant
from sweeprig.simbench.fed_plant import FedPlant
from sweeprig.simbench.friction import Normals
from sweeprig.simbench.kinds.choose import other_kind
from sweeprig.simbench.motor_truth import DetailedTruth, MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.rare_trials import Effort, TurningWalk, Unaffordable, forked
from sweeprig.simbench.source import Source

FAN = MotorTruth(11.6, 0.0105, 0.0255, 5.6e-6, 6e-8, 2e-6, 1.2e-3, 26.0, 4.6e-3, 5.0, 0.12, 0.7, 12.0, 240.0)
CLOSER = DetailedTruth(
    **{name: getattr(FAN, name) for name in MotorTruth.__dataclass_fields__},
    cogging=Cogging(amplitude_nm=1e-3, steps_per_revolution=6),
)
SOURCE = Source(capacitor_farad=1e-3, limit_response_s=1e-3, bleeder_ohms=1e3)


def shipped_machine(name: str) -> Any:
    return other_kind(load(shipped(name)).motor, np.random.default_rng(1), 0.0)


MAKERS: dict[str, Callable[[], Any]] = {
    "plain": lambda: Plant(FAN, 2.0, np.random.default_rng(1)),
    "closer": lambda: DetailedPlant(CLOSER, 2.0, np.random.default_rng(1)),
    "fed": lambda: FedPlant(FAN, 2.0, np.random.default_rng(1), SOURCE),
    "closer and fed": lambda: DetailedFedPlant(CLOSER, 2.0, np.random.default_rng(1), SOURCE),
    "electronic": lambda: shipped_machine("electronic"),
    "four wires": lambda: shipped_machine("four-wire"),
    "geared": lambda: shipped_machine("stirrer"),
}


def begun(kind: str) -> Any:
    plant = MAKERS[kind]()
    plant.set_supply(12.0, 1.0, True)
    plant.set_drive(1000.0, 60.0, True)
    plant.advance(1.0)
    return plant


def state(plant: Any) -> tuple[float, ...]:
    sums = plant.motor_volt_seconds, plant.supply_amp_seconds, plant.supply_volt_seconds
    return plant.now, plant.omega, plant.angle, plant.last_edge_at, float(plant.stops), *sums


@pytest.mark.parametrize("kind", MAKERS)
def test_a_fork_leaves_a_plant_of_any_kind_alone(kind: str) -> None:
    """The fork begins like its plant; whatever it does, the plant goes on bit for bit as if it had not been forked."""
    alone, with_fork = begun(kind), begun(kind)
    fork = forked(with_fork, Normals(random.Random(1)))
    assert state(fork) == state(with_fork)
    fork.set_drive(1000.0, 3.0, True)
    fork.set_supply(8.0, 0.1, True)
    fork.advance(fork.now + 1.0)
    for plant in (alone, with_fork):
        plant.set_drive(1000.0, 50.0, True)
        plant.advance(plant.now + 1.0)
    assert state(alone) == state(with_fork)


@pytest.mark.parametrize("kind", MAKERS)
def test_two_forks_go_ways_of_their_own(kind: str) -> None:
    """Forks with different random numbers part; with the same ones they stay together, bit for bit."""
    plant = begun(kind)
    ends = []
    for seed in (1, 1, 2):
        fork = forked(plant, Normals(random.Random(seed)))
        fork.set_drive(1000.0, 55.0, True)
        fork.advance(fork.now + 1.0)
        ends.append(state(fork))
    assert ends[0] == ends[1]
    assert ends[0] != ends[2]


def test_the_effort_is_that_of_all_forks_together() -> None:
    """A walk and its fork may make the allowed steps between them; the next one is refused."""
    plant, draw = begun("plain"), Normals(random.Random(1))
    walk = TurningWalk(plant, 100.0, 0.5, draw, Effort(5))
    fork = walk.fork()
    for _ in range(2):
        walk.step()
        fork.step()
    walk.step()
    with pytest.raises(Unaffordable):
        fork.step()


def test_the_demo_is_of_the_kind_that_the_chain_knows() -> None:
    """The shipped demo's motor has plain averaged mechanics."""
    assert type(motor_truth(load(shipped("demo")))) is MotorTruth
