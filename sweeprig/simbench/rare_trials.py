"""The simulated motor as walks for `rare`: rare stops in a hold or in steady running, and rare failures to start.

Everything here acts on the plant alone, by the procedures of `trials`; no instrument, no formula of the analysis.
"""

from __future__ import annotations

import copy
import math
from collections.abc import Callable
from typing import Self

import numpy as np

from sweeprig.simbench.friction import WanderingFriction, normal_source
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.plant import CELL_S, Plant
from sweeprig.simbench.rare import EVENT, Rate, event_rate
from sweeprig.simbench.rotor import Motion
from sweeprig.simbench.trials import Task, launch, warm_plant

STANDS = 2.0
"""Score of a rotor that stands, but not yet for long enough; a turning one has less."""
SLOWEST = 1e-3
"""rad/s; a rotor that has only just begun to turn."""
LOOK_AHEAD = 0.7
"""Correlation times of the friction; of 0 to 2 that were tried this gave the smallest scatter (own earlier output)."""
WARM_TIMES = 6.0
"""Thermal time constants until the winding is as warm as it gets in steady running."""
PIECE_S = 20.0
START_SLICES = 15


def forked(plant: Plant, draw: Callable[[], float]) -> Plant:
    """A plant in the same state that goes on by itself, with the normals of `draw`."""
    twin = copy.copy(plant)
    for name in ("_running", "_breakaway"):
        friction = copy.copy(getattr(plant, name))
        friction._draw = draw
        setattr(twin, name, friction)
    return twin


class TurningWalk:
    """A turning rotor under one setting, looked at in every cell of the plant's grid.

    The event: no edge for longer than allowed, after it was caught; one that frees itself before goes on. Exposure in
    seconds; over at `ends` (of the plant's clock).
    """

    __slots__ = ("began", "draw", "ends", "longest_gap_s", "plant", "stops", "until")

    def __init__(self, plant: Plant, ends: float, longest_gap_s: float, draw: Callable[[], float]) -> None:
        self.plant, self.ends, self.longest_gap_s, self.draw = plant, ends, longest_gap_s, draw
        self.began = self.until = plant.now
        self.stops = plant.stops

    @property
    def score(self) -> float:
        """What a rough spot would take over what the rotor will have left: the spot a standard deviation rougher than
        now, the speed as it will be a little later with the friction on its way back to the mean. Below STANDS.
        """
        plant = self.plant
        if plant.stops != self.stops and plant.now - max(self.began, plant.last_edge_at) > self.longest_gap_s:
            return EVENT
        if not plant.turning:
            return STANDS
        motor, how, rough = plant.truth, plant._motion, plant._breakaway
        takes = (rough.torque * math.exp(rough._sigma) - plant._peak_nm) * motor.barrier_angle_rad
        later = max(SLOWEST, min(how.speed, how.speed + _change(how, plant._running, motor)))
        ratio = takes / (0.5 * motor.inertia_kg_m2 * later * later)
        return ratio if ratio < 1.0 else STANDS - 1.0 / ratio

    @property
    def over(self) -> bool:
        return self.until >= self.ends

    @property
    def exposure(self) -> float:
        return self.until - self.began

    def step(self) -> None:
        self.until = min(self.until + CELL_S, self.ends)
        self.plant.advance(self.until)

    def fork(self) -> Self:
        twin = copy.copy(self)
        twin.plant = forked(self.plant, self.draw)
        return twin


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


def stop_rate_in_hold(task: Task, batches: int) -> Rate:
    """Stops per second of turning during holds on the falling branch at `task.duty`; `task.trials` a rung and batch.

    The holds are those of `trials.falling_trial`, one after the other on a warm plant; the rare paths fork from them.
    """
    p, pwm = task.procedure, task.condition.pwm_hz
    rng = np.random.default_rng(task.seed)
    plant, draw = warm_plant(task), normal_source(rng)

    def fresh() -> TurningWalk:
        launch(plant, pwm, min(p.duty_high_percent, task.duty + p.relaunch_above_percent), p.relaunch_s)
        plant.set_drive(pwm, task.duty, True)
        return TurningWalk(plant, plant.now + p.hold_time_s, p.longest_gap_s, draw)

    return event_rate(fresh, task.trials, batches, rng)


def stop_rate_in_service(task: Task, batches: int) -> Rate:
    """Stops per second of steady running at `task.duty`, the winding as warm as it gets there."""
    p, pwm = task.procedure, task.condition.pwm_hz
    rng = np.random.default_rng(task.seed)
    plant, draw = warm_plant(task), normal_source(rng)
    plant.set_drive(pwm, task.duty, True)
    plant.advance(plant.now + WARM_TIMES * task.motor.thermal_time_constant_s)

    def fresh() -> TurningWalk:
        if not plant.turning:
            launch(plant, pwm, min(p.duty_high_percent, task.duty + p.relaunch_above_percent), p.relaunch_s)
            plant.set_drive(pwm, task.duty, True)
        return TurningWalk(plant, plant.now + PIECE_S, p.longest_gap_s, draw)

    return event_rate(fresh, task.trials, batches, rng)
