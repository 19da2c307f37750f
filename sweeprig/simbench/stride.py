"""Many cells of the averaged rotor in one go, for as long as nothing happens but that its frictions wander.

The kernel is a plain function of plain numbers that may be compiled. It ends before the first cell in which there is
something to decide (a stop, the supply's limit): that one is `plant`'s, whose laws these are, to the last bit (tested).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, NamedTuple

from sweeprig.simbench import chopper, rotor
from sweeprig.simbench.chopper import Chopper, mean_current, mean_supply_current
from sweeprig.simbench.compiled import Deferred
from sweeprig.simbench.friction import Normals
from sweeprig.simbench.rotor import after, linearised, mechanics_of

if TYPE_CHECKING:
    from sweeprig.simbench.plant import Plant

CELL_S = 0.02
"""Grid of the random friction and of the look whether the rotor is caught or starts."""
HEAT_CELLS = 25
"""The winding's heat is renewed every so many cells: where a stride ends."""
WORTH = 300_000
"""Cells in one process before compiling pays: as written they take about as long as the compiler takes to come up."""

Four = tuple[float, float, float, float]
Fixed = tuple[float, float, float, float, float, float, float, float]
"""Time of cell 0; winding's resistance; half the inertia; barrier angle; extra torque; peak torque at standstill;
tachometer edges per rad; the supply's current limit, infinite where it cannot act. SI units."""
Still = tuple[Fixed, Four, chopper.Numbers, Four, Four]
"""What stays until the next renewal: `Fixed`, `mechanics_of`, the chopper, the laws of the two frictions."""
Five = tuple[float, float, float, float, float]


class Sums(NamedTuple):
    """Running integrals up to a moment: angle (rad), V·s and A·s."""

    angle: float = 0.0
    motor_vs: float = 0.0
    motor_as: float = 0.0
    supply_as: float = 0.0
    supply_vs: float = 0.0


def cell_at(when: float, origin: float) -> int:
    """The cell that holds `when` (s), by the same comparison that steps from cell to cell."""
    cell = int((when - origin) / CELL_S)
    while origin + (cell + 1) * CELL_S <= when:
        cell += 1
    while cell > 0 and origin + cell * CELL_S > when:
        cell -= 1
    return cell


def stride(
    fixed: Fixed, mechanics: Four, electric: chopper.Numbers, running: Four, breakaway: Four, normals: Sequence[float],
    left: int, how: rotor.Numbers, sums: Five, wander: Four, edges: int, at: float, cell: int, most: int, to: float,
) -> tuple[int, float, rotor.Numbers, Five, Four, int, tuple[float, float, float], rotor.Numbers]:  # fmt: skip
    """At most `most` cells, none beyond `to` (s), from `at` (s) within cell `cell`; nothing that was passed is changed.

    running, breakaway   (carry, fresh, sigma, scale) of the frictions (`WanderingFriction.law`)
    normals, left        the next is normals[left − 1], then the one before; two a cell
    how, sums            the linearised motion; running integrals of speed, motor V, motor A, supply A, supply V
    wander               x and torque (N·m) of the running friction, x and torque of the breakaway
    Returns cells done, time, motion, integrals, frictions, edges; and (time, seconds, angle) at the begin of the last
    step in which an edge came, with its motion.
    """
    origin, ohm, half_inertia, barrier, bound, peak, edges_per_rad, limit = fixed
    (carry, fresh, sigma, scale), (rough_carry, rough_fresh, rough_sigma, rough_scale) = running, breakaway
    k, volts = mechanics[0], electric[0]
    x, torque, y, rough = wander
    angle, motor_vs, motor_as, supply_as, supply_vs = sums
    step, step_how, done = (at, 0.0, angle), how, 0
    limits = limit < math.inf
    if limits and mean_supply_current(electric, k * how[0]) > limit:
        most = 0
    while done < most and left >= 2:
        until = origin + (cell + done + 1) * CELL_S
        seconds = until - at
        omega, turned = after(how, seconds)
        if until > to or omega <= 0.0:
            break
        drawn = mean_supply_current(electric, k * turned / seconds)
        if limits and (drawn > limit or mean_supply_current(electric, k * omega) > limit):
            break
        new_y = rough_carry * y + rough_fresh * normals[left - 2]
        new_rough = rough_scale * math.exp(rough_sigma * new_y)
        if half_inertia * omega * omega < (new_rough + bound - peak) * barrier:
            break
        x = carry * x + fresh * normals[left - 1]
        torque, y, rough = scale * math.exp(sigma * x), new_y, new_rough
        charge = how[3] * seconds + how[4] * (turned - how[0] * seconds)
        further = angle + turned
        if int(further * edges_per_rad) > edges:
            edges, step, step_how = int(further * edges_per_rad), (at, seconds, angle), how
        angle, motor_vs, motor_as = further, motor_vs + ohm * charge + k * turned, motor_as + charge
        supply_as, supply_vs = supply_as + drawn * seconds, supply_vs + volts * seconds
        amps, per_volt = mean_current(electric, k * omega)
        how = linearised(mechanics, amps, per_volt, omega, torque + bound)
        at, done, left = until, done + 1, left - 2
    return (
        done, at, how, (angle, motor_vs, motor_as, supply_as, supply_vs), (x, torque, y, rough), edges, step, step_how
    )  # fmt: skip


STRIDE = Deferred(stride, WORTH)


def passed(plant: Plant, to: float) -> bool:
    """Bring a turning plant over as many whole cells as go by without event before the next renewal; False: none."""
    running, rough, cell, still = plant._running, plant._breakaway, plant._cell, plant._fixed
    most, draw, sums = HEAT_CELLS - 1 - cell % HEAT_CELLS, running.normals, plant._sums
    if most == 0 or not isinstance(draw, Normals) or rough.normals is not draw:
        return False
    if still is None:
        if not isinstance(plant._electric, Chopper):
            return False
        still = plant._fixed = _still(plant, plant._electric)
    done, at, how, integrals, wander, edges, step, step_how = STRIDE.run(
        *still, *draw.stock(STRIDE.quick), (*plant._motion,), (*sums,),
        (running.x, running.torque, rough.x, rough.torque), plant._edges, plant._at, cell, most, to,
    )  # fmt: skip
    if done == 0:
        return False
    STRIDE.did(done)
    draw.pass_over(2 * done)
    running.go_to(wander[0], wander[1])
    rough.go_to(wander[2], wander[3])
    plant._motion, plant._sums, plant._omega_committed = rotor.Motion._make(how), Sums._make(integrals), how[0]
    plant._at, plant._cell, plant._friction_cell = at, cell + done, cell + done
    if edges > plant._edges:
        plant._edges, plant._edge_step = edges, (*step, rotor.Motion._make(step_how))
    return True


def _still(plant: Plant, electric: Chopper) -> Still:
    t, limit = plant.truth, float(plant.supply_current_limit_amps)
    fixed = (
        float(plant._origin), plant._resistance, 0.5 * t.inertia_kg_m2, t.barrier_angle_rad, float(plant._bound_nm),
        plant._peak_nm, plant._edges_per_rad, limit if plant._may_limit else math.inf,
    )  # fmt: skip
    return fixed, mechanics_of(t), (*electric,), plant._running.law, plant._breakaway.law
