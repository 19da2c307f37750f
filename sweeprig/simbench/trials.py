"""Trials on the simulated motor itself, done as a person with perfect eyes would: holds, starts from rest, speeds.

They act on the plant alone, with no instrument in between; counting them and drawing conclusions is `truth`'s.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any, Protocol, cast

import numpy as np

from sweeprig.errors import ConfigError
from sweeprig.holds import Condition
from sweeprig.job.motor_models import Motor
from sweeprig.job.rig_models import Rig
from sweeprig.simbench.build_plant import plant_of
from sweeprig.simbench.detailed import DetailedPlant
from sweeprig.simbench.kinds.choose import other_kind
from sweeprig.simbench.motor_truth import DetailedTruth, MotorTruth
from sweeprig.simbench.plant import Plant

RPM = 30.0 / math.pi
"""rpm per rad/s."""
GAP_S = 0.5
GAP_INTERVALS = 3.0
"""Stopped: no edge for so many of the intervals expected, and for so long at least (definition of turning)."""
LOOK_S = 0.1
WHOLE_REVOLUTIONS = 10.0
BLOCK_TRIALS = 50
"""Trials on one plant, one after the other, after its run-in; blocks are what the processes share out."""
MOST_COAST_S = 120.0
"""A rotor that turns so long after switching off is turned by something else: it rests no more than that."""
SPEED_HOLDS = 12
"""Holds behind one true speed; its standard error is from the scatter between them."""

Finding = dict[str, Any]
"""{"value", "u"}, or {"value": None, "reason"}."""
Map = Callable[[Callable[[Any], Any], Iterable[Any]], Iterable[Any]]


@dataclass(frozen=True, slots=True)
class Procedure:
    """How a trial is done; the meanings are those of `plan.StallPlan` and `plan.StartPlan`.

    settle_s   speeds and voltages are averaged from this long after the duty was applied
    run_in     (duty_percent, seconds) that warm the motor before each block of trials
    expected_rpm  the speed that the longest allowed gap between edges is reckoned from
    kick_…     `plan.KickPlan`; service_s, service_percent: the long run
    """

    hold_time_s: float = 20.0
    start_time_s: float = 3.0
    rest_time_s: float = 5.0
    relaunch_above_percent: float = 12.0
    relaunch_s: float = 4.0
    lowest_rpm: float = 60.0
    pulses_per_revolution: float = 2.0
    expected_rpm: float = 180.0
    saturation_percent: float = 2.0
    duty_low_percent: float = 0.0
    duty_high_percent: float = 100.0
    current_limit_amps: float = math.inf
    settle_s: float = 3.0
    run_in: tuple[float, float] = (60.0, 240.0)
    kick_duties_percent: tuple[float, ...] = ()
    kick_margin_percent: float = 1.0
    kick_hold_s: float = 5.0
    kick_rest_s: float = 10.0
    service_s: float = 86_400.0
    service_percent: float = 99.0

    @property
    def longest_gap_s(self) -> float:
        return max(GAP_S, GAP_INTERVALS * 60.0 / (self.pulses_per_revolution * self.expected_rpm))


class Trialled(Protocol):
    """What a trial needs of a plant, of any kind; read-outs are valid at `now`."""

    now: float
    turning: bool
    stops: int

    @property
    def omega(self) -> float: ...
    @property
    def angle(self) -> float: ...
    @property
    def last_edge_at(self) -> float: ...
    @property
    def motor_volt_seconds(self) -> float: ...
    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None: ...
    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None: ...
    def advance(self, to: float) -> None: ...


@dataclass(frozen=True, slots=True)
class Task:
    """Trials of one kind at one duty; `seed` is the entropy of their generator.

    motor its true values; of a kind that is not plainly brushed, the motor file
    rig   whose power stage and supply the motor hangs on; None: an ideal low-side switch on an ideal supply
    kick  (kick duty, run duty), percent: for the kind `kick`, of which `duty` is the natural logarithm of the pulse (s)
    """

    motor: MotorTruth | Motor
    condition: Condition
    procedure: Procedure
    kind: str
    duty: float
    trials: int
    seed: tuple[int, ...]
    rig: Rig | None = None
    kick: tuple[float, float] = (100.0, 100.0)


@dataclass(frozen=True, slots=True)
class Counts:
    """events: stops (kind `stall`) or starts (kinds `start` and `kick`); the sums are over the settled turning time."""

    duty: float
    trials: int
    events: int
    radians: float = 0.0
    volt_seconds: float = 0.0
    seconds: float = 0.0


def cold_plant(task: Task) -> Trialled:
    """The task's plant as built, switched off, seeded by its seed. ConfigError for a motor without true values."""
    rng, pulses = np.random.default_rng(task.seed), task.procedure.pulses_per_revolution
    if isinstance(task.motor, Motor):
        machine = other_kind(task.motor, rng, 0.0)
        if machine is None:
            raise ConfigError("the motor is not of a kind of its own", value=task.motor.name)
        return cast(Trialled, machine)
    if task.rig is not None:
        return plant_of(task.rig, task.motor, pulses, rng)
    if isinstance(task.motor, DetailedTruth):
        return DetailedPlant(task.motor, pulses, rng)
    return Plant(task.motor, pulses, rng)


def warm_plant(task: Task) -> Trialled:
    """The task's plant after its run-in, turning."""
    plant, p = cold_plant(task), task.procedure
    plant.set_supply(task.condition.supply_v, p.current_limit_amps, True)
    launch(plant, task.condition.pwm_hz, p.run_in[0], p.run_in[1])
    return plant


def launch(plant: Trialled, pwm_hz: float, duty: float, seconds: float) -> None:
    """`seconds` at `duty`; where that does not start the rotor, a kick at full duty and then once more."""
    plant.set_drive(pwm_hz, duty, True)
    plant.advance(plant.now + seconds)
    if not plant.turning:
        plant.set_drive(pwm_hz, 100.0, True)
        plant.advance(plant.now + 2.0)
        plant.set_drive(pwm_hz, duty, True)
        plant.advance(plant.now + seconds)


def falling_trial(plant: Trialled, pwm_hz: float, duty: float, p: Procedure) -> tuple[bool, float, float, float]:
    """One hold on the falling branch → (stopped, rad turned, V·s across the motor, s), the sums while settled.

    Stopped is the first gap between tachometer edges longer than allowed, or a mean speed below the lowest measurable;
    a catch that the rotor frees itself from within that gap is no stop, but ends the sums.
    """
    launch(plant, pwm_hz, min(p.duty_high_percent, duty + p.relaunch_above_percent), p.relaunch_s)
    plant.set_drive(pwm_hz, duty, True)
    began, stops, angle = plant.now, plant.stops, plant.angle
    looks = max(1, round(p.hold_time_s / LOOK_S))
    first: tuple[float, float, float] | None = None
    last = first
    stopped = False
    for look in range(1, looks + 1):
        plant.advance(began + p.hold_time_s * look / looks)
        if plant.stops != stops:
            stopped = plant.now - max(began, plant.last_edge_at) > p.longest_gap_s
            if stopped:
                break
        elif plant.now - began >= p.settle_s:
            last = (plant.now, plant.angle, plant.motor_volt_seconds)
            first = first or last
    stopped = stopped or (plant.angle - angle) / (plant.now - began) * RPM < p.lowest_rpm
    if first is None or last is None or last == first:
        return stopped, 0.0, 0.0, 0.0
    return stopped, last[1] - first[1], last[2] - first[2], last[0] - first[0]


def rest(plant: Trialled, pwm_hz: float, seconds: float) -> None:
    """Coast down to rest, then rest for `seconds`."""
    plant.set_drive(pwm_hz, 0.0, False)
    until = plant.now + MOST_COAST_S
    while plant.turning and plant.now < until:
        plant.advance(plant.now + LOOK_S)
    plant.advance(plant.now + seconds)


def start_trial(plant: Trialled, pwm_hz: float, duty: float, p: Procedure) -> bool:
    """Coast to rest, rest, one step to `duty`: ten whole revolutions in time, and still turning at its end."""
    rest(plant, pwm_hz, p.rest_time_s)
    before = plant.angle
    plant.set_drive(pwm_hz, duty, True)
    plant.advance(plant.now + p.start_time_s)
    return plant.turning and (plant.angle - before) / (2.0 * math.pi) >= WHOLE_REVOLUTIONS


def kick_trial(plant: Trialled, pwm_hz: float, kick: tuple[float, float], pulse_s: float, p: Procedure) -> bool:
    """Coast to rest, rest, the pulse at the kick duty, then the run duty: turning on to the end of the hold."""
    rest(plant, pwm_hz, p.kick_rest_s)
    plant.set_drive(pwm_hz, kick[0], True)
    plant.advance(plant.now + pulse_s)
    plant.set_drive(pwm_hz, kick[1], True)
    began = plant.now
    looks = max(1, round(p.kick_hold_s / LOOK_S))
    for look in range(1, looks + 1):
        plant.advance(began + p.kick_hold_s * look / looks)
        if plant.now - max(began, plant.last_edge_at) > p.longest_gap_s:
            return False
    return plant.turning


def perform(task: Task) -> Counts:
    plant = warm_plant(task)
    pwm = task.condition.pwm_hz
    if task.kind == "kick":
        pulse_s = math.exp(task.duty)
        lasted = sum(kick_trial(plant, pwm, task.kick, pulse_s, task.procedure) for _ in range(task.trials))
        return Counts(task.duty, task.trials, lasted)
    if task.kind == "start":
        started = sum(start_trial(plant, pwm, task.duty, task.procedure) for _ in range(task.trials))
        return Counts(task.duty, task.trials, started)
    trials = [falling_trial(plant, pwm, task.duty, task.procedure) for _ in range(task.trials)]
    stopped, radians, volts, seconds = (sum(column) for column in zip(*trials, strict=True))
    return Counts(task.duty, task.trials, int(stopped), radians, volts, seconds)


def true_speed(task: Task) -> tuple[float, float, float]:
    """Mean settled speed on the falling branch, while it turns → (rpm, its standard error, mean motor voltage V)."""
    plant, procedure = warm_plant(task), task.procedure
    holds = [falling_trial(plant, task.condition.pwm_hz, task.duty, procedure)[1:] for _ in range(SPEED_HOLDS)]
    radians, volts, seconds = np.array(holds).T
    total = float(seconds.sum())
    if total <= 0.0:
        return 0.0, 0.0, 0.0
    mean = float(radians.sum()) / total
    u = math.sqrt(float(((radians - mean * seconds) ** 2).sum()) * SPEED_HOLDS / (SPEED_HOLDS - 1)) / total
    return mean * RPM, u * RPM, float(volts.sum()) / total
