"""Rare failures to start of the averaged motor, from the chain of its frictions and its speed.

Released late, never, or caught again while it runs up: all three, without random numbers. How long ten revolutions
take is tried on the plant. Valid for `Plant` itself only, as `rare_chain`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from sweeprig.simbench.chain import Axis, Numbers, moved
from sweeprig.simbench.friction import normal_source
from sweeprig.simbench.plant import CELL_S, Plant
from sweeprig.simbench.rare_chain import COARSE, FINE, Grid, grid, numbers_of
from sweeprig.simbench.rare_trials import forked
from sweeprig.simbench.trials import BLOCK_TRIALS, WHOLE_REVOLUTIONS, Task, rest, start_trial, warm_plant

RUN_UPS = 150
"""Run-ups on the plant behind the time that ten revolutions take."""
CLASSES = 6
"""Those times are put into so many classes of the same weight."""
SPEEDS = 90
"""On the fine grid: fewer than for stops, for a start has only to get clear of its spot."""
WARMTHS, WEIGHTS = (0.1127, 0.5, 0.8873), (5.0 / 18.0, 8.0 / 18.0, 5.0 / 18.0)
"""Gauss and Legendre's places and weights over a block of starts, in which the winding warms or cools."""
TINY = 1e-30
"""Below this the cubic flow's small negative shares could count: no value is stated."""


@dataclass(frozen=True, slots=True)
class Chance:
    """The chance that a start fails; `u_log` is the standard error of its logarithm."""

    value: float
    u_log: float


def driven_at_rest(plant: Plant, task: Task) -> Plant:
    """A fork of the plant, at rest for as long as a start wants and driven now; it stands whatever its frictions."""
    plant = forked(plant, numbers_of(plant))
    rest(plant, task.condition.pwm_hz, task.procedure.rest_time_s)
    plant._running.go_to(0.0, math.inf)
    plant._breakaway.go_to(0.0, math.inf)
    plant.set_drive(task.condition.pwm_hz, task.duty, True)
    return plant


def release_limits(plant: Plant) -> tuple[float, float]:
    """(running, breakaway) in their own standard deviations below which both must be for the rotor to leave."""
    limits = []
    for friction, torque in ((plant._running, plant._mean_nm), (plant._breakaway, plant._peak_nm)):
        _, _, sigma, scale = friction.law
        room = torque - plant._bound_nm
        if sigma == 0.0:
            limits.append(math.inf if room > scale else -math.inf)
        else:
            limits.append(math.log(room / scale) / sigma if room > 0.0 else -math.inf)
    return limits[0], limits[1]


def released(at: Grid, limits: tuple[float, float]) -> Numbers:
    """1 where a standing rotor leaves: (running, breakaway); the grid's panels end at the limits, so nothing is cut."""

    def below(one: Axis, limit: float) -> Numbers:
        return np.asarray((one.nodes < limit).astype(float))

    return below(at.running, limits[0])[:, None] * below(at.breakaway, limits[1])[None, :]


def start_failure(task: Task) -> Chance:
    """The chance that a start from rest at `task.duty` fails: not ten revolutions in the start time, or standing at
    its end; the mean over a block of starts, in which the motor takes the warmth of starting.

    `u_log`: all of the change to a coarser grid, and the scatter of the run-up times.
    """
    rng = np.random.default_rng(task.seed)
    plant = warm_plant(task)
    assert isinstance(plant, Plant)
    done, chances = 0, []
    for place in WARMTHS:
        for _ in range(round(BLOCK_TRIALS * place) - done):
            start_trial(plant, task.condition.pwm_hz, task.duty, task.procedure)
        done = round(BLOCK_TRIALS * place)
        chances.append(_failure_now(driven_at_rest(plant, task), task, rng))
    value = float(np.dot(WEIGHTS, [one.value for one in chances]))
    if value == 0.0:
        return Chance(0.0, math.inf)
    # the grid errs alike for all of them
    u = float(np.dot(WEIGHTS, [one.value * one.u_log if one.value > 0.0 else 0.0 for one in chances])) / value
    return Chance(value, u)


def _failure_now(plant: Plant, task: Task, rng: np.random.Generator) -> Chance:
    """The chance of a failure of a plant `driven_at_rest`."""
    limits = release_limits(plant)
    if min(limits) == -math.inf:
        return Chance(1.0, 0.0)
    running, breakaway = (one if math.isfinite(one) else None for one in limits)
    fine, coarse = (grid(plant, spacing, None, (running, breakaway), SPEEDS) for spacing in (FINE, COARSE))
    cells = round(task.procedure.start_time_s / CELL_S)
    run_ups = run_up_cells(fine, released(fine, limits), cells, rng)
    if len(run_ups) == 0:
        return Chance(1.0, 0.0)
    classes = [round(float(q)) for q in np.quantile(run_ups, (np.arange(CLASSES) + 0.5) / CLASSES)]
    by_class = failures(fine, released(fine, limits), cells, classes)
    value, other = float(np.mean(by_class)), float(np.mean(failures(coarse, released(coarse, limits), cells, classes)))
    if not value > TINY or not other > TINY:
        return Chance(0.0, math.inf)
    u_classes = float(np.std(by_class, ddof=1)) / math.sqrt(len(run_ups)) / value
    return Chance(value, math.hypot(math.log(value / other), u_classes))


def failures(at: Grid, leaves: Numbers, cells: int, run_ups: list[int]) -> Numbers:
    """The chance of a failure for each run-up time in cells: not turning for so long, without a catch, at the end."""
    standing = at.running.resting[:, None] * at.breakaway.resting[None, :]
    turning = np.zeros((len(at.flow.speeds), *standing.shape))
    turning[0], standing = standing * leaves, standing * (1.0 - leaves)
    found: dict[int, float] = {}
    middle, caught = int(np.median(run_ups)), 0.0
    for cell in range(cells + 1):
        for run_up in {*run_ups, middle}:
            if cell == max(0, cells - run_up):
                found[run_up] = float(standing.sum())
        if cell == max(0, cells - middle):
            # hardly different for the other run-ups: who is clear of the spot by then is seldom caught
            caught = _caught_within(at, turning, min(middle, cells))
        if len(found) == len({*run_ups, middle}):
            break
        turning, fallen = _turned(at, turning)
        standing = moved(standing, at.running, at.breakaway)
        turning[0] += standing * leaves
        standing = standing * (1.0 - leaves) + fallen
    return np.array([found[run_up] + caught for run_up in run_ups])


def _turned(at: Grid, turning: Numbers) -> tuple[Numbers, Numbers]:
    """(masses still turning a cell later, masses caught by then: running × breakaway)."""
    came_to_rest = moved(np.einsum("wx,wxy->xy", at.flow.lost, turning), at.running, at.breakaway)
    all_later = moved(at.flow.apply(turning), at.running, at.breakaway)
    kept = all_later * at.below[:, None, :]
    return kept, came_to_rest + (all_later - kept).sum(axis=0)


def _caught_within(at: Grid, turning: Numbers, cells: int) -> float:
    """The mass that is caught within so many cells."""
    lost = 0.0
    for _ in range(cells):
        turning, _, caught = at.step(turning)
        lost += caught
    return lost


def run_up_cells(at: Grid, leaves: Numbers, most: int, rng: np.random.Generator) -> Numbers:
    """Cells from release to ten revolutions, of plants that are released as late ones are; those caught are left out.

    Late: the shape that the standing rotor's frictions take in the long run, a cell on, where that lets it go.
    """
    standing = at.running.resting[:, None] * at.breakaway.resting[None, :]
    for _ in range(most):
        rest_of_it = standing * (1.0 - leaves)
        if not rest_of_it.sum() > 0.0:
            break
        standing = moved(rest_of_it / rest_of_it.sum(), at.running, at.breakaway)
    chances = standing * leaves
    if not chances.sum() > 0.0:
        return np.zeros(0)
    place = rng.choice(chances.size, RUN_UPS, p=chances.ravel() / chances.sum())
    x, y = np.unravel_index(place, chances.shape)
    draw = normal_source(rng)
    times = []
    for i, j in zip(x, y, strict=True):
        plant = forked(at.plant, draw)
        plant.advance(plant._origin + (plant._cell + 1) * CELL_S)
        plant._running.go_to(float(at.running.nodes[i]), float(at.running.torque[i]))
        plant._breakaway.go_to(float(at.breakaway.nodes[j]), float(at.breakaway.torque[j]))
        plant._try_start()
        began, angle, stops = plant.now, plant.angle, plant.stops
        while plant.stops == stops and plant.now < began + most * CELL_S:
            plant.advance(plant.now + CELL_S)
            if plant.angle - angle >= 2.0 * math.pi * WHOLE_REVOLUTIONS:
                times.append((plant.now - began) / CELL_S)
                break
    return np.array(times)
