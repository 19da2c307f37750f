"""Many cells of the closer mechanics in one go, while nothing but the friction changes: averaged, stepped or still.

Plain functions of plain numbers that may be compiled. They stop before the first cell at whose end there is something
to decide (a hand-over, a stop, a start): that one is `closer`'s, whose laws these are, one for one. An open last cell
ends with the flow, before the frictions of the next one are drawn: there the heat is renewed.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from sweeprig.simbench import cogging, rotor
from sweeprig.simbench.compiled import compiled
from sweeprig.simbench.resolved import Moment, Shaft, against, cog, run
from sweeprig.simbench.rotor import Motion
from sweeprig.simbench.winding import Numbers, Winding, mean_current, mean_supply_current, part_at

_after, _means = compiled(rotor.after), compiled(cogging.means)
FLAT, SHALLOW, DEEPEST = 0.001, 0.01, 0.9
"""Cogging depth below which it is nothing; the current at the mean speed will do; and above which none is averaged."""
COSINES = tuple(math.cos((place + 0.5) * math.pi / 8.0) for place in range(8))


class Wander(NamedTuple):
    """The law of one `WanderingFriction`: x ← carry·x + fresh·n, torque = scale·exp(sigma·x)."""

    carry: float
    fresh: float
    sigma: float
    scale: float


class Law(NamedTuple):
    """What stays as it is from one renewal of the heat to the next; SI units.

    origin, cell_s, pwm_since, period     the grid of cells, and that of the PWM
    mean_nm, peak_nm, valley_nm           torque of the standing rotor's current: mean, crest, valley
    still_volts .. still_supply_volts     means while it stands
    resolvable, slow, gusty               it may be stepped; the PWM is slow; the draught wanders
    """

    origin: float
    cell_s: float
    pwm_since: float
    period: float
    resistance: float
    henry: float
    supply_volts: float
    supply_ohms: float
    mean_nm: float
    peak_nm: float
    valley_nm: float
    still_volts: float
    still_amps: float
    still_supply: float
    still_supply_volts: float
    bound_nm: float
    barrier_rad: float
    edges_per_rad: float
    resolved_from: float
    averaged_below: float
    blurred_below: float
    sharp_from: float
    unlocked_from: float
    half_depth_joule: float
    stiction: float
    stiction_from_s: float
    rested_since: float
    longest_rest_s: float
    resolvable: bool
    slow: bool
    gusty: bool
    running: Wander
    breakaway: Wander
    gusts: Wander


class Course(NamedTuple):
    """What moves on: the committed state of the plant, at the edge of a cell. Speed: signed, the level if averaged.

    edges, edge_at     tachometer edges so far, and when the last of them came (run clock, s)
    *_x                the wandering of the frictions and of the draught, in units of its own spread
    """

    position: float
    pointer: float
    amps: float
    speed: float
    way: float
    angle: float
    motor_vs: float
    motor_as: float
    supply_as: float
    supply_vs: float
    edges: int
    edge_at: float
    running_x: float
    breakaway_x: float
    gust_x: float
    running_nm: float
    breakaway_nm: float
    draught: float


@compiled
def depth_at(law: Law, shaft: Shaft, level: float) -> float:
    """Cogging's depth at a speed level: `Cogging.depth`, and none without cogging."""
    if law.half_depth_joule == 0.0:
        return 0.0
    energy = 0.5 * shaft.inertia * level * level
    return law.half_depth_joule / energy if energy > 0.0 else math.inf


@compiled
def current_over(winding: Winding, data: Numbers, emf: float, depth: float) -> tuple[float, float]:
    """(mean current, its derivative by `emf`) over the angle, `emf` the back-EMF of the speed's level.

    Quadrature after Gauss and Chebyshev over the cogging's phase: the current is not linear in the back-EMF where
    it becomes discontinuous.
    """
    if depth < SHALLOW:
        return mean_current(winding, data, emf)
    amps = slope = 0.0
    for cosine in COSINES:
        part = math.sqrt(1.0 + depth * cosine)
        here, per_volt = mean_current(winding, data, emf * part)
        amps, slope = amps + here, slope + per_volt * part
    return amps / 8.0, slope / 8.0


@compiled
def linearised(
    law: Law, winding: Winding, data: Numbers, shaft: Shaft, curve: Numbers, speed: float, way: float, running_nm: float
) -> tuple[Motion, float]:
    """(J·du/dt = T(a·u)·b of the speed's level u with the cogging's means a and b, linearised; b)."""
    k, level = shaft.torque_constant, abs(speed)
    depth = depth_at(law, shaft, level)
    a, b = 1.0, 1.0
    if FLAT < depth < DEEPEST:
        a, b = _means(depth)
    amps, per_volt = current_over(winding, data, k * speed, min(depth, DEEPEST))
    load, rise = against(shaft, curve, a * speed)
    torque = (k * amps - load) * way - running_nm - law.bound_nm
    rate = (k * k * per_volt - rise * a) * b / shaft.inertia
    return Motion(level, torque * b / shaft.inertia, rate, amps, k * per_volt * way), b


@compiled
def drawn(law: Law, c: Course, normals: Numbers, place: int) -> tuple[Course, int]:
    """(the same with the frictions and the draught of the next cell, the next of the normals)."""
    w, b, g = law.running, law.breakaway, law.gusts
    x = w.carry * c.running_x + w.fresh * normals[place]
    y = b.carry * c.breakaway_x + b.fresh * normals[place + 1]
    z, draught, place = c.gust_x, c.draught, place + 2
    if law.gusty:
        z = g.carry * z + g.fresh * normals[place]
        draught, place = g.scale * math.exp(g.sigma * z), place + 1
    return Course(
        c.position, c.pointer, c.amps, c.speed, c.way, c.angle, c.motor_vs, c.motor_as, c.supply_as, c.supply_vs,
        c.edges, c.edge_at, x, y, z, w.scale * math.exp(w.sigma * x), b.scale * math.exp(b.sigma * y), draught,
    ), place  # fmt: skip


@compiled
def shaft_in(shaft: Shaft, running_nm: float, breakaway_nm: float, draught: float) -> Shaft:
    """The shaft with the frictions of a cell."""
    s = shaft
    return Shaft(
        s.inertia, s.torque_constant, running_nm, breakaway_nm, s.cogging_nm, s.cogging_steps, s.viscous, s.quadratic,
        draught, s.constant_nm, s.play_rad, s.longest_s, s.clear_s,
    )  # fmt: skip


@compiled
def turned_at(how: Motion, turn: float, seconds: float) -> float:
    """When within `seconds` the rotor has turned by `turn` (rad), by Newton, as `rotor.time_to_turn`."""
    _, whole = _after(how, seconds)
    t = seconds * turn / whole
    for _ in range(60):
        speed, gone = _after(how, t)
        if speed <= 0.0:
            break
        better = min(seconds, max(0.0, t - (gone - turn) / speed))
        if abs(better - t) < 1e-12:
            return better
        t = better
    return t


@compiled
def flowed(
    law: Law, winding: Winding, data: Numbers, shaft: Shaft, c: Course, how: Motion, over_time: float, at: float,
    seconds: float,
) -> Course:  # fmt: skip
    """The averaged rotor `seconds` later, if it turns that long."""
    k = shaft.torque_constant
    level, turned = _after(how, seconds)
    charge = how.amps * seconds + how.amps_slope * (turned - how.speed * seconds)
    gone = turned * over_time * c.way
    position = c.position + gone
    pointer = max(position - shaft.play_rad, min(position + shaft.play_rad, c.pointer))
    taken = mean_supply_current(winding, data, k * gone / seconds) * seconds
    angle = c.angle + abs(pointer - c.pointer)
    edges, edge_at = int(angle * law.edges_per_rad), c.edge_at
    if edges > c.edges:
        lag = shaft.play_rad - c.way * (c.position - c.pointer)
        edge_at = at + turned_at(how, (edges / law.edges_per_rad - c.angle + lag) / over_time, seconds)
    return Course(
        position, pointer, c.amps, level * c.way, c.way, angle, c.motor_vs + law.resistance * charge + k * gone,
        c.motor_as + charge, c.supply_as + taken, c.supply_vs + law.supply_volts * seconds - law.supply_ohms * taken,
        max(edges, c.edges), edge_at, c.running_x, c.breakaway_x, c.gust_x, c.running_nm, c.breakaway_nm, c.draught,
    )  # fmt: skip


@compiled
def stays_averaged(law: Law, shaft: Shaft, curve: Numbers, c: Course, how: Motion) -> bool:
    """At the edge of a cell: nothing catches the averaged rotor, no detent asks to be resolved in the cell to come."""
    level = abs(c.speed)
    if level == 0.0:
        return False
    if law.resolvable:
        least = min(level, _after(how, law.cell_s)[0])
        return not law.slow and least > 0.0 and depth_at(law, shaft, least) <= law.resolved_from
    held = against(shaft, curve, 0.0)[0]
    ahead = law.peak_nm - held if c.way > 0.0 else held - law.valley_nm
    spot = c.breakaway_nm + law.bound_nm - ahead
    return not 0.5 * shaft.inertia * level * level < spot * law.barrier_rad and _after(how, law.cell_s)[0] > 0.0


@compiled
def averaged_cells(
    law: Law, winding: Winding, data: Numbers, shaft: Shaft, curve: Numbers, normals: Numbers, c: Course, cell: int,
    cells: int, open_end: bool,
) -> tuple[Course, int]:  # fmt: skip
    """(the turning rotor up to `cells` cells on, how many they were)."""
    place, done, at = 0, 0, law.origin + cell * law.cell_s
    shaft = shaft_in(shaft, c.running_nm, c.breakaway_nm, c.draught)
    how, over_time = linearised(law, winding, data, shaft, curve, c.speed, c.way, c.running_nm)
    if not stays_averaged(law, shaft, curve, c, how):
        return c, 0
    while done < cells:
        until = law.origin + (cell + done + 1) * law.cell_s
        there = flowed(law, winding, data, shaft, c, how, over_time, at, until - at)
        if open_end and done + 1 == cells:
            return there, cells
        there, place = drawn(law, there, normals, place)
        shaft = shaft_in(shaft, there.running_nm, there.breakaway_nm, there.draught)
        if there.speed * there.way <= 0.0:
            break
        how, over_time = linearised(law, winding, data, shaft, curve, there.speed, there.way, there.running_nm)
        if not stays_averaged(law, shaft, curve, there, how):
            break
        c, at, done = there, until, done + 1
    return c, done


@compiled
def stepped(
    law: Law, winding: Winding, data: Numbers, shaft: Shaft, curve: Numbers, c: Course, at: float, seconds: float
) -> Course:
    """The resolved rotor `seconds` later."""
    phase, left = part_at(winding, data, (at - law.pwm_since) % law.period)
    begin = Moment(0.0, c.position, c.pointer, 0.0, c.speed, c.amps, phase, left, 0.0, 0.0)
    first, each = (c.edges + 1) / law.edges_per_rad - c.angle, 1.0 / law.edges_per_rad
    m, passed = run(winding, data, shaft, curve, begin, seconds, first, each)
    across = law.resistance * m.motor_as + shaft.torque_constant * (m.position - c.position)
    if winding.kind == 0:
        across += law.henry * (m.amps - c.amps)
    angle = c.angle + m.travel
    edges, edge_at = int(angle * law.edges_per_rad), c.edge_at
    if edges > c.edges:
        edge_at = at + (seconds if passed < 0.0 else passed)
    supply_vs = c.supply_vs + law.supply_volts * seconds - law.supply_ohms * m.supply_as
    return Course(
        m.position, m.pointer, m.amps, m.speed, c.way, angle, c.motor_vs + across, c.motor_as + m.motor_as,
        c.supply_as + m.supply_as, supply_vs, max(edges, c.edges), edge_at, c.running_x, c.breakaway_x, c.gust_x,
        c.running_nm, c.breakaway_nm, c.draught,
    )  # fmt: skip


@compiled
def sets_out(law: Law, shaft: Shaft, curve: Numbers, c: Course, breakaway_nm: float, plain: bool) -> bool:
    """The standing rotor leaves; `plain`: whatever breaks it away moves it, the mean torque is not asked."""
    held = against(shaft, curve, 0.0)[0] + cog(shaft, c.position)
    greatest, least = law.peak_nm - held, law.valley_nm - held
    if plain:
        return greatest > breakaway_nm or least < -breakaway_nm
    running, mean = c.running_nm + law.bound_nm, law.mean_nm - held
    return (greatest > breakaway_nm and mean > running) or (least < -breakaway_nm and mean < -running)


@compiled
def stays_resolved(law: Law, shaft: Shaft, curve: Numbers, c: Course, plain: bool) -> bool:
    """At the edge of a cell: the rotor neither rests for good nor is clear of its detents."""
    if c.speed == 0.0:
        return sets_out(law, shaft, curve, c, c.breakaway_nm + law.bound_nm, plain)
    blurred = shaft.cogging_nm == 0.0
    if law.slow and law.half_depth_joule == 0.0:
        return True
    if law.slow and blurred:
        return depth_at(law, shaft, abs(c.speed)) < law.sharp_from and abs(c.speed) > law.unlocked_from
    energy = -law.half_depth_joule * math.cos(shaft.cogging_steps * c.position)
    level = math.sqrt(max(0.0, c.speed * c.speed + 2.0 * energy / shaft.inertia))
    if law.slow and level <= law.unlocked_from:
        return True
    return level == 0.0 or depth_at(law, shaft, level) >= (law.blurred_below if law.slow else law.averaged_below)


@compiled
def resolved_cells(
    law: Law, winding: Winding, data: Numbers, shaft: Shaft, curve: Numbers, normals: Numbers, c: Course, cell: int,
    cells: int, open_end: bool, plain: bool,
) -> tuple[Course, int]:  # fmt: skip
    """(the resolved rotor up to `cells` cells on, how many they were)."""
    place, done, at = 0, 0, law.origin + cell * law.cell_s
    while done < cells:
        until = law.origin + (cell + done + 1) * law.cell_s
        here = shaft_in(shaft, c.running_nm + law.bound_nm, c.breakaway_nm + law.bound_nm, c.draught)
        there = stepped(law, winding, data, here, curve, c, at, until - at)
        if open_end and done + 1 == cells:
            return there, cells
        there, place = drawn(law, there, normals, place)
        if not stays_resolved(law, shaft_in(here, 0.0, 0.0, there.draught), curve, there, plain):
            break
        c, at, done = there, until, done + 1
    return c, done


@compiled
def standing_cells(
    law: Law,
    shaft: Shaft,
    curve: Numbers,
    normals: Numbers,
    c: Course,
    cell: int,
    cells: int,
    open_end: bool,
    plain: bool,
) -> tuple[Course, int]:
    """(the standing rotor up to `cells` cells on, how many they were)."""
    place, done, at = 0, 0, law.origin + cell * law.cell_s
    while done < cells:
        until = law.origin + (cell + done + 1) * law.cell_s
        if open_end and done + 1 == cells:
            return _rested(law, c, until - at), cells
        there, place = drawn(law, c, normals, place)
        rested = min(until - law.rested_since, law.longest_rest_s)
        grown = 1.0 + law.stiction * math.log10(1.0 + rested / law.stiction_from_s)
        here = shaft_in(shaft, 0.0, 0.0, there.draught)
        if sets_out(law, here, curve, there, there.breakaway_nm * grown + law.bound_nm, plain):
            break
        c, at, done = _rested(law, there, until - at), until, done + 1
    return c, done


@compiled
def _rested(law: Law, c: Course, seconds: float) -> Course:
    return Course(
        c.position, c.pointer, c.amps, c.speed, c.way, c.angle, c.motor_vs + law.still_volts * seconds,
        c.motor_as + law.still_amps * seconds, c.supply_as + law.still_supply * seconds,
        c.supply_vs + law.still_supply_volts * seconds, c.edges, c.edge_at, c.running_x, c.breakaway_x, c.gust_x,
        c.running_nm, c.breakaway_nm, c.draught,
    )  # fmt: skip
