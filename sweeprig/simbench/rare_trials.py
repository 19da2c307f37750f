"""The simulated motor as walks for `rare`: rare stops in a hold or in steady running, and rare failures to start.

Everything here acts on the plant alone, by the procedures of `trials`; no instrument, no formula of the analysis.
"""

from __future__ import annotations

import copy
import math
import random
from typing import Self, TypeVar

import numpy as np

from sweeprig.errors import SweeprigError
from sweeprig.simbench.friction import Normals, WanderingFriction, normal_source
from sweeprig.simbench.kinds.warmth import Warmth
from sweeprig.simbench.motor_truth import DetailedTruth, MotorTruth
from sweeprig.simbench.plant import CELL_S, Plant
from sweeprig.simbench.rare import EVENT, Rate, event_rate
from sweeprig.simbench.rotor import Motion
from sweeprig.simbench.source import Bus
from sweeprig.simbench.trials import BLOCK_TRIALS, Task, Trialled, cold_plant, launch, warm_plant

STANDS = 2.0
"""Score of a rotor that stands, but not yet for long enough; a turning one has less."""
SLOWEST = 1e-3
"""rad/s; a rotor that has only just begun to turn."""
LOOK_AHEAD = 0.7
"""Correlation times of the friction; of 0 to 2 that were tried this gave the smallest scatter (own earlier output)."""
WARM_TIMES = 6.0
"""Thermal time constants until the winding is as warm as it gets in steady running."""
WARM_AT_ONCE_S = 10.0
"""Taken as that of a motor without heat."""
PIECE_S = 20.0


class Unaffordable(SweeprigError):
    """The effort allowed is used up."""


class Effort:
    """Steps of walks that may still be made, shared by all forks."""

    __slots__ = ("left",)

    def __init__(self, steps: float) -> None:
        self.left = steps

    def spend(self) -> None:
        self.left -= 1
        if self.left < 0:
            raise Unaffordable("the rare event takes more steps than allowed", remedy="Ask nearer to where it happens")


Machine_ = TypeVar("Machine_", bound=Trialled)


def forked(plant: Machine_, draw: Normals) -> Machine_:
    """A plant of any kind in the same state that goes on by itself, with the normals of `draw`.

    What it is made of is either never changed in place, or one of the parts copied here.
    """
    twin = copy.copy(plant)
    for name, part in vars(plant).items():
        if isinstance(part, WanderingFriction):
            setattr(twin, name, part.fork(draw))
        elif isinstance(part, (Bus, Warmth)):
            setattr(twin, name, copy.copy(part))
        elif isinstance(part, random.Random):
            setattr(twin, name, random.Random(repr(draw())))
    return twin


class TurningWalk:
    """A turning rotor under one setting, looked at in every cell of the plant's grid.

    The event: no edge for longer than allowed, after it was caught; one that frees itself before goes on. Exposure in
    seconds; over at `ends` (of the plant's clock).
    """

    __slots__ = ("began", "draw", "effort", "ends", "longest_gap_s", "plant", "stops", "until")

    def __init__(
        self, plant: Trialled, ends: float, longest_gap_s: float, draw: Normals, effort: Effort | None = None
    ) -> None:
        self.plant, self.ends, self.longest_gap_s, self.draw = plant, ends, longest_gap_s, draw
        self.effort = Effort(math.inf) if effort is None else effort
        self.began = self.until = plant.now
        self.stops = plant.stops

    @property
    def score(self) -> float:
        """EVENT; STANDS; or less, by `nearness`."""
        plant = self.plant
        if plant.stops != self.stops and plant.now - max(self.began, plant.last_edge_at) > self.longest_gap_s:
            return EVENT
        return nearness(plant) if plant.turning else STANDS

    @property
    def over(self) -> bool:
        return self.until >= self.ends

    @property
    def exposure(self) -> float:
        return self.until - self.began

    def step(self) -> None:
        self.effort.spend()
        self.until = min(self.until + CELL_S, self.ends)
        self.plant.advance(self.until)

    def fork(self) -> Self:
        twin = copy.copy(self)
        twin.plant = forked(self.plant, self.draw)
        return twin


def nearness(plant: Trialled) -> float:
    """How near a turning rotor is to a catch, below STANDS. Of the averaged ones with rough spots: what a spot would
    take over what the rotor will have left: the spot a standard deviation rougher than now, the speed as it will be a
    little later with the friction on its way back to the mean. Of all others, that are caught otherwise: slowness.
    """
    if not isinstance(plant, Plant) or getattr(plant.truth, "cogging", None) is not None:
        return STANDS / (1.0 + abs(plant.omega))
    motor, how, rough = plant.truth, plant._motion, plant._breakaway
    takes = (rough.torque * math.exp(rough._sigma) - plant._peak_nm) * motor.barrier_angle_rad
    later = max(SLOWEST, min(how.speed, how.speed + _change(how, plant._running, motor)))
    ratio = takes / (0.5 * motor.inertia_kg_m2 * later * later)
    return ratio if ratio < 1.0 else STANDS - 1.0 / ratio


def _change(how: Motion, running: WanderingFriction, motor: MotorTruth) -> float:
    """Change of speed (rad/s) within LOOK_AHEAD correlation times, the running friction falling back to its mean as
    exp(−t/τ): the linear equation dy/dt = r·y + g·exp(−t/τ), y from the speed at which all torques balance.
    """
    tau, rate = motor.friction_correlation_s, min(how.rate, -1e-6)
    excess = (running._scale - running.torque) / motor.inertia_kg_m2
    away = (how.acceleration - excess) / rate
    driven = -excess / (1.0 / tau + rate) if abs(1.0 / tau + rate) > 1e-3 else 0.0
    fades = math.exp(-LOOK_AHEAD)
    return (away - driven) * math.exp(rate * LOOK_AHEAD * tau) + driven * fades - away


def settled_in_holds(task: Task) -> tuple[Trialled, Normals, np.random.Generator]:
    """As `settled_in_service`, but after half of a block of holds: as warm as counted trials find it in the mean."""
    rng = np.random.default_rng(task.seed)
    plant, draw = warm_plant(task), normal_source(rng)
    for _ in range(BLOCK_TRIALS // 2):
        to_hold(plant, task)
        plant.advance(plant.now + task.procedure.hold_time_s)
    return plant, draw, rng


def to_hold(plant: Trialled, task: Task) -> None:
    """Begin a hold on the falling branch, as `trials.falling_trial` does."""
    p, pwm = task.procedure, task.condition.pwm_hz
    launch(plant, pwm, min(p.duty_high_percent, task.duty + p.relaunch_above_percent), p.relaunch_s)
    plant.set_drive(pwm, task.duty, True)


def stop_rate_in_hold(task: Task, batches: int, most_steps: float = math.inf) -> Rate:
    """Stops per second of turning during holds on the falling branch at `task.duty`; `task.trials` a rung and batch.

    The holds are those of `trials.falling_trial`, one after the other; the rare paths fork from them.
    Unaffordable after `most_steps` steps of walks.
    """
    p, effort = task.procedure, Effort(most_steps)
    plant, draw, rng = settled_in_holds(task)

    def fresh() -> TurningWalk:
        to_hold(plant, task)
        return TurningWalk(plant, plant.now + p.hold_time_s, p.longest_gap_s, draw, effort)

    return event_rate(fresh, task.trials, batches, rng)


def settled_in_service(task: Task) -> tuple[Trialled, Normals, np.random.Generator]:
    """(the plant at `task.duty` for long, turning, normals for its forks, the generator of both)."""
    rng = np.random.default_rng(task.seed)
    plant, draw = warm_plant(task), normal_source(rng)
    plant.set_drive(task.condition.pwm_hz, task.duty, True)
    plant.advance(plant.now + WARM_TIMES * thermal_seconds(task))
    if not plant.turning:
        to_hold(plant, task)
    return plant, draw, rng


def thermal_seconds(task: Task) -> float:
    """The slowest time constant by which the motor warms, s; of a drift of its values nothing is waited for."""
    motor = task.motor
    if isinstance(motor, DetailedTruth) and motor.heat is not None:
        return -1.0 / motor.heat.rates()[0]
    if isinstance(motor, MotorTruth):
        return motor.thermal_time_constant_s
    warmth = getattr(cold_plant(task), "_warmth", None)
    bodies = None if warmth is None else warmth._bodies
    return WARM_AT_ONCE_S if bodies is None else float(-1.0 / bodies.rates()[0])


def stop_rate_in_service(task: Task, batches: int, most_steps: float = math.inf) -> Rate:
    """Stops per second of steady running at `task.duty`, the winding as warm as it gets there; as in a hold."""
    effort = Effort(most_steps)
    plant, draw, rng = settled_in_service(task)

    def fresh() -> TurningWalk:
        if not plant.turning:
            to_hold(plant, task)
        return TurningWalk(plant, plant.now + PIECE_S, task.procedure.longest_gap_s, draw, effort)

    return event_rate(fresh, task.trials, batches, rng)
