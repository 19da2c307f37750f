"""Rare stops of the averaged motor from the chain of its frictions and its speed: no random numbers up to the catch.

What happens after a catch (held for long enough, or free again) is no rare event and is tried on the plant itself.
Valid for `Plant` itself only: it has no more state than the two frictions, the speed, and a slow winding.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, ndtri

from sweeprig.errors import SweeprigError
from sweeprig.simbench.chain import Axis, Flow, Numbers, axis, flow, moved
from sweeprig.simbench.friction import Normals, normal_source
from sweeprig.simbench.plant import CELL_S, Plant
from sweeprig.simbench.rare import EVENT, Rate
from sweeprig.simbench.rare_trials import TurningWalk, forked, settled_in_holds, settled_in_service, to_hold
from sweeprig.simbench.rotor import Motion
from sweeprig.simbench.trials import Task

FINE, COARSE = 0.75, 1.0
"""Spacing of the frictions' nodes over the standard deviation of one cell's move, on the two grids compared."""
SPEEDS = 200
"""Speeds on the fine grid; the coarse one has FINE/COARSE of them. Twice as many change a rate of 1e-3 by 0.1 %."""
CATCHES = 1500
"""Catches followed on the plant."""
CALM = 6.0
"""An excursion is over after so many of the longer of the two correlation times turning, without a further stop."""
SETTLED = 1e-5
MOST_CELLS = 4000
Splits = tuple[float | None, float | None]


@dataclass(frozen=True, slots=True)
class Grid:
    """The turning rotor of one plant and one setting on a grid. limits: breakaway (its own spread) that catches."""

    plant: Plant
    running: Axis
    breakaway: Axis
    flow: Flow
    limits: Numbers
    above: Numbers
    below: Numbers

    def start(self) -> Numbers:
        """Masses with the frictions undisturbed and the speed as it is."""
        masses = np.zeros((len(self.flow.speeds), len(self.running.nodes), len(self.breakaway.nodes)))
        near = int(np.argmin(np.abs(self.flow.speeds - self.plant.omega)))
        masses[near] = self.running.resting[:, None] * self.breakaway.resting[None, :]
        return masses

    def step(self, masses: Numbers) -> tuple[Numbers, Numbers, float]:
        """(masses of the rotor not caught a cell later, masses that flowed but did not move on, what was caught)."""
        rested = float(np.sum(self.flow.lost[:, :, None] * masses))
        flowed = self.flow.apply(masses)
        # by the exact chance, not by the cut grid: the tail falls steeply across a node's share
        caught = rested + float(np.einsum("wxy,wy->", flowed, self.above))
        return moved(flowed, self.running, self.breakaway) * self.below[:, None, :], flowed, caught


def grid(
    plant: Plant, spacing: float, top_speed: float | None = None, splits: Splits = (None, None), count: int = SPEEDS
) -> Grid:
    """The grid of a turning plant as it is set and as warm as it is.

    spacing     of the frictions' nodes, over one cell's move; the speeds go with it
    top_speed   rad/s that the grid must hold; without it what the plant's own friction allows
    splits      values of running and breakaway friction at which something else is cut off (`chain.axis`)
    count       speeds at the spacing FINE
    """
    running = axis(plant._running.law, spacing, splits[0])
    breakaway = axis(plant._breakaway.law, spacing, splits[1])
    if running is None or breakaway is None:
        raise SweeprigError(
            "the friction wanders too slowly for the chain's grid",
            value=f"{plant.truth.friction_correlation_s:g} s correlation",
            remedy="Use splitting for this motor",
        )
    twin = forked(plant, numbers_of(plant))
    if top_speed is None:
        top_speed = 1.1 * _free_speed(twin)
    speeds = np.linspace(0.0, top_speed, max(20, round(count * FINE / spacing)))
    flows = flow(speeds, later_speeds(twin, speeds, running.torque))
    limits = catch_limits(twin, speeds)
    return Grid(plant, running, breakaway, flows, limits, breakaway.chance_above(limits), breakaway.below(limits))


def numbers_of(plant: Plant) -> Normals:
    source = plant._running.normals
    assert isinstance(source, Normals)
    return source


def _free_speed(twin: Plant) -> float:
    """Speed (rad/s) that the rotor settles at with next to no Coulomb friction."""
    speed = max(1.0, twin._omega_committed)
    for _ in range(200):
        speed = max(1.0, float(later_speeds(twin, np.array([speed]), np.zeros(1))[0, 0]))
    return speed


def later_speeds(twin: Plant, speeds: Numbers, torques: Numbers) -> Numbers:
    """Speed (rad/s) a cell later from each speed with each friction torque, by the plant's own linearised motion."""
    later = np.empty((len(speeds), len(torques)))
    twin._running.go_to(0.0, 0.0)
    for number, speed in enumerate(speeds):
        twin._omega_committed = float(speed)
        twin._relinearise()
        how = twin._motion
        x = how.rate * CELL_S
        part = CELL_S * (math.expm1(x) / x if abs(x) > 1e-9 else 1.0)
        later[number] = speed + (how.acceleration - torques / twin.truth.inertia_kg_m2) * part
    return later


def catch_limits(plant: Plant, speeds: Numbers) -> Numbers:
    """Breakaway friction, in its own standard deviations about its median, from which a spot catches the rotor."""
    _, _, sigma, scale = plant._breakaway.law
    energy = 0.5 * plant.truth.inertia_kg_m2 * speeds**2
    angle = plant.truth.barrier_angle_rad
    spot = plant._peak_nm - plant._bound_nm + (energy / angle if angle > 0.0 else np.full_like(speeds, math.inf))
    if sigma == 0.0:
        return np.where(spot < scale, -math.inf, math.inf)
    with np.errstate(divide="ignore"):
        return np.asarray(np.log(np.maximum(spot, 0.0) / scale) / sigma)


def _steady(at: Grid, masses: Numbers) -> tuple[float, Numbers]:
    """(catches per second, what flowed) once the shape of the masses no longer changes."""
    before = 0.0
    for cell in range(MOST_CELLS):
        total = float(masses.sum())
        masses, flowed, caught = at.step(masses / total)
        if caught == 0.0 and cell > 200:
            return 0.0, flowed
        if caught > 0.0 and abs(caught - before) < SETTLED * caught:
            return -math.log1p(-min(0.999, caught)) / CELL_S, flowed
        before = caught
    raise SweeprigError("the chain of the frictions does not settle", value=f"{MOST_CELLS} cells")


# ---- after the catch -------------------------------------------------------------------------------------------------


def caught_plants(at: Grid, flowed: Numbers, count: int, rng: np.random.Generator) -> list[Plant]:
    """Plants just caught, with speeds and frictions drawn from what the chain says of catches."""
    chances = np.maximum(0.0, flowed * at.above[:, None, :])
    place = rng.choice(chances.size, count, p=chances.ravel() / chances.sum())
    w, x, y = np.unravel_index(place, chances.shape)
    running, rough, draw = at.running, at.breakaway, normal_source(rng)
    new_x = running.carry * running.nodes[x] + running.fresh * rng.standard_normal(count)
    mean = rough.carry * rough.nodes[y]
    # the part of the next normal beyond the limit, by its upper tail: the lower one has no digits left out there
    upper = ndtr((mean - at.limits[w]) / rough.fresh) * (1.0 - rng.random(count))
    new_y = mean - rough.fresh * ndtri(upper)
    since = rng.random(count)
    return [
        _caught(at.plant, float(at.flow.speeds[w[i]]), float(new_x[i]), float(new_y[i]), float(since[i]), draw)
        for i in range(count)
    ]


def _caught(plant: Plant, speed: float, x: float, y: float, since: float, draw: Normals) -> Plant:
    """The plant at the end of a cell, caught at `speed`, `since` of the way from one tachometer edge to the next."""
    twin = forked(plant, draw)
    twin.advance(twin._origin + (twin._cell + 1) * CELL_S)
    for friction, value in ((twin._running, x), (twin._breakaway, y)):
        _, _, sigma, scale = friction.law
        friction.go_to(value, scale * math.exp(sigma * value))
    whole = int(twin._sums.angle * twin._edges_per_rad) + 1
    angle = whole / twin._edges_per_rad
    turned = since / twin._edges_per_rad
    pace = Motion(max(speed, 1e-3), 0.0, -1.0, 0.0, 0.0)
    twin._edges, twin._edge_step = whole, (twin._at - turned / pace.speed, CELL_S, angle, pace)
    sums = type(twin._sums)(angle + turned)
    twin._sums, twin._omega_committed, twin._peek = sums, 0.0, None
    if twin.turning:
        twin._stop()
    return twin


def held(at: Grid, flowed: Numbers, longest_gap_s: float, count: int, rng: np.random.Generator) -> tuple[float, float]:
    """(share of catches that hold the rotor longer than allowed, at once or soon again; its standard error)."""
    calm = CALM * max(at.plant.truth.friction_correlation_s, 0.1)
    stopped = 0
    for plant in caught_plants(at, flowed, count, rng):
        walk = TurningWalk(plant, math.inf, longest_gap_s, numbers_of(plant))
        walk.began, walk.stops = -math.inf, plant.stops - 1
        clear_at = plant.now + calm
        while (score := walk.score) < EVENT and plant.now < clear_at:
            walk.step()
            if not plant.turning:
                clear_at = plant.now + calm
        stopped += score == EVENT
    share = (stopped + 0.5) / (count + 1.0)
    return stopped / count, math.sqrt(share * (1.0 - share) / count)


# ---- rates -----------------------------------------------------------------------------------------------------------


def chain_rate_in_service(task: Task) -> Rate:
    """Stops per second of steady running at `task.duty`, the winding as warm as it gets there.

    `u_log` is of the catches followed, and of the grid: all of its change to the coarser one, which errs more.
    """
    plant, _, rng = settled_in_service(task)
    assert isinstance(plant, Plant)
    fine = grid(plant, FINE)
    rate, flowed = _steady(fine, fine.start())
    if rate == 0.0:
        return Rate(0.0, math.inf)
    coarse = grid(plant, COARSE)
    other, _ = _steady(coarse, coarse.start())
    share, u = held(fine, flowed, task.procedure.longest_gap_s, CATCHES, rng)
    return _rate(rate, other, share, u)


def _rate(rate: float, other: float, share: float, u_share: float) -> Rate:
    if share == 0.0 or other == 0.0:
        return Rate(rate * share, math.inf)
    return Rate(rate * share, math.hypot(u_share / share, math.log(rate / other)))


def chain_rate_in_hold(task: Task) -> Rate:
    """Stops per second during holds on the falling branch at `task.duty`: of the mean over the hold, slowing included.

    A rotor caught later than the longest allowed gap before the end of its hold is not seen to stop.
    """
    p = task.procedure
    plant, _, rng = settled_in_holds(task)
    assert isinstance(plant, Plant)
    to_hold(plant, task)
    seen = p.hold_time_s - p.longest_gap_s
    (rate, flowed), (other, _) = (_over_hold(plant, spacing, seen) for spacing in (FINE, COARSE))
    if rate == 0.0:
        return Rate(0.0, math.inf)
    share, u = held(grid(plant, FINE), flowed, p.longest_gap_s, CATCHES, rng)
    found = _rate(rate, other, share, u)
    return Rate(found.value * seen / p.hold_time_s, found.u_log)


def _over_hold(plant: Plant, spacing: float, seconds: float) -> tuple[float, Numbers]:
    """(catches per second over `seconds` from the plant's present speed on, what flowed at the end)."""
    at = grid(plant, spacing, max(1.1 * plant.omega, 1.1 * _free_speed(forked(plant, numbers_of(plant)))))
    masses, flowed = at.start(), at.start()
    hazard, before = 0.0, 0.0
    cells = round(seconds / CELL_S)
    for number in range(cells):
        masses, flowed, caught = at.step(masses / float(masses.sum()))
        now = -math.log1p(-min(0.999, caught))
        hazard += now
        if caught > 0.0 and abs(caught - before) < SETTLED * caught:
            hazard += now * (cells - number - 1)
            break
        before = caught
    return hazard / seconds, flowed
