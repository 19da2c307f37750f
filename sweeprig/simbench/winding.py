"""The winding's current in plain numbers, for stepping: as the stage switches it, or its mean over the PWM period.

Plain functions that may be compiled. What the numbers are taken from is a `Setting`; no mechanics.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from sweeprig.simbench.chopper import Chopper
from sweeprig.simbench.compiled import available, compiled
from sweeprig.simbench.stage import Setting
from sweeprig.simbench.switched import Branch, Phase, SwitchedSetting

if TYPE_CHECKING:
    Numbers = Sequence[float] | np.ndarray[tuple[int], np.dtype[np.float64]]
else:
    Numbers = Any

CHOPPED, CLOSED_FORM, STRAIGHT, TABLE = 0, 1, 2, 3
"""Kinds of winding: stepped through the period; the mean by `Chopper`'s closed form; linear in the back-EMF; linear up
to where the current becomes discontinuous, from there a table of value and slope, cubic in between."""
NODES = 24
"""Intervals of such a table: it errs by less than 1e-3 of the standing current (tested)."""
_BLOCKED = Branch(math.inf, 0.0, 0.0, 0.0, 0.0)


class Winding(NamedTuple):
    """One setting in numbers; which fields count depends on the kind. `data` comes beside it.

    phases              CHOPPED: how many parts the period has; data: of each part its seconds and, for a positive and
                        for a negative current, volts, ohms and share of the supply (`Branch`)
    above_nm, below_nm  how far the rippling torque at standstill rises above its mean, and falls below
    on_volts .. boundary_emf        CLOSED_FORM: as in `Chopper`
    amps .. supply_slope            STRAIGHT: current at no back-EMF, and by back-EMF; of motor and supply
    """

    kind: int
    phases: int
    ohms: float
    henry: float
    above_nm: float
    below_nm: float
    on_volts: float
    drop: float
    tau: float
    period: float
    on_s: float
    rise: float
    carry: float
    boundary_emf: float
    amps: float
    amps_slope: float
    supply: float
    supply_slope: float


_NONE = Winding(STRAIGHT, 1, *(0.0,) * 16)


def chopped(setting: Setting, ohms: float, henry: float) -> tuple[Winding, Numbers]:
    """The setting's circuits, to be stepped through."""
    parts = phases_of(setting)
    flat = [
        value
        for seconds, forward, reverse in parts
        for value in (seconds, forward.volts, forward.ohms, forward.supply, reverse.volts, reverse.ohms, reverse.supply)
    ]
    return _NONE._replace(kind=CHOPPED, phases=len(parts), ohms=float(ohms), henry=float(henry)), numbers(flat)


def averaged(setting: Setting, above_nm: float, below_nm: float, most_emf: float) -> tuple[Winding, Numbers]:
    """The setting's means, valid for a back-EMF up to ±most_emf (V)."""
    kept = _NONE._replace(above_nm=float(above_nm), below_nm=float(below_nm))
    if isinstance(setting, Chopper):
        c = setting
        return kept._replace(
            kind=CLOSED_FORM, ohms=c.resistance_ohm, on_volts=c.on_volts, drop=c.diode_drop_v, tau=c.tau_s,
            period=c.period_s, on_s=c.on_s, rise=c.rise, carry=c.carry, boundary_emf=c.boundary_emf,
        ), numbers(())  # fmt: skip
    low, high = setting.mean_current(-most_emf), setting.mean_current(most_emf)
    if abs(high[0] - low[0] - 2.0 * most_emf * low[1]) <= 1e-12 * (abs(low[0]) + abs(high[0])) and low[1] == high[1]:
        drawn = setting.mean_supply_current(-most_emf), setting.mean_supply_current(most_emf)
        slope = 0.5 * (drawn[1] - drawn[0]) / most_emf
        amps, supply = 0.5 * (low[0] + high[0]), 0.5 * (drawn[0] + drawn[1])
        return kept._replace(amps=amps, amps_slope=low[1], supply=supply, supply_slope=slope), numbers(())
    until, at_low = _straight_until(setting, most_emf), setting.mean_supply_current(-most_emf)
    reach = until + most_emf
    rise = (setting.mean_supply_current(until) - at_low) / reach if reach > 0.0 else 0.0
    return kept._replace(
        kind=TABLE, amps=low[0] + low[1] * most_emf, amps_slope=low[1], supply=at_low + rise * most_emf,
        supply_slope=rise,
    ), numbers(_table(setting, until, most_emf))  # fmt: skip


def _straight_until(setting: Setting, most_emf: float) -> float:
    """Up to which back-EMF the mean current is linear from the lowest one on, by halving."""
    amps, slope = setting.mean_current(-most_emf)
    low, high = -most_emf, most_emf
    while high - low > 1e-12 * most_emf:
        middle = 0.5 * (low + high)
        here, rise = setting.mean_current(middle)
        same = rise == slope and abs(here - amps - slope * (middle + most_emf)) <= 1e-11 * (abs(amps) + abs(here))
        low, high = (middle, high) if same else (low, middle)
    return high


def _table(setting: Setting, least_emf: float, most_emf: float) -> list[float]:
    """[lowest back-EMF, spacing, then of each node: current, its slope, supply current]."""
    spacing = (most_emf - least_emf) / NODES
    flat = [least_emf, spacing]
    for node in range(NODES + 1):
        emf = least_emf + node * spacing
        flat += [*setting.mean_current(emf), setting.mean_supply_current(emf)]
    return flat


def can_be_stepped(setting: Setting) -> bool:
    """Its current follows from the back-EMF and itself alone: no further state, such as a capacitor's."""
    return isinstance(setting, Chopper | SwitchedSetting)


def phases_of(setting: Setting) -> tuple[Phase, ...]:
    """The parts of a period, of a setting that can be stepped."""
    if isinstance(setting, SwitchedSetting):
        return setting.phases
    assert isinstance(setting, Chopper)
    on = Branch(setting.on_volts, 0.0, 0.0, 0.0, 1.0)
    off = Branch(-setting.diode_drop_v, 0.0, 0.0, 0.0, 0.0)
    parts = (Phase(setting.on_s, on, _BLOCKED), Phase(setting.period_s - setting.on_s, off, _BLOCKED))
    return tuple(part for part in parts if part.seconds > 0.0)


def place_in(winding: Winding, data: Numbers, phase_s: float) -> tuple[int, float]:
    """(part of the period, s left of it) at a phase in s; a mean current knows no parts."""
    if winding.kind != 0:
        return 0, math.inf
    for number in range(winding.phases):
        seconds = data[7 * number]
        left = seconds - phase_s
        if left > 1e-9 * seconds:
            return number, left
        phase_s -= seconds
    return 0, data[0]


part_at = compiled(place_in)


def numbers(values: Iterable[float]) -> Numbers:
    """A row of numbers in the form that the functions below are quickest with: an array for compiled ones."""
    if available():
        return np.array(list(values), dtype=np.float64)
    return tuple(float(value) for value in values)


@compiled
def flow(
    winding: Winding, data: Numbers, amps: float, emf: float, seconds: float, phase: int
) -> tuple[float, float, float]:
    """(current at the end in A, charge through the motor, charge from the supply in A·s), the current through zero
    where it gets there; exact for a constant back-EMF within one part of the period."""
    at = 7 * phase
    charge = drawn = 0.0
    while seconds > 0.0:
        if amps > 0.0 or (amps == 0.0 and emf < data[at + 1]):
            volts, more_ohms, share = data[at + 1], data[at + 2], data[at + 3]
        elif amps < 0.0 or emf > data[at + 4]:
            volts, more_ohms, share = data[at + 4], data[at + 5], data[at + 6]
        else:
            break
        ohms = winding.ohms + more_ohms
        tau, level = winding.henry / ohms, (volts - emf) / ohms
        part = seconds
        fallen = -math.expm1(-part / tau)
        end = amps + (level - amps) * fallen
        if end * amps < 0.0:
            part = tau * math.log1p(-amps / level)
            fallen, end = amps / (amps - level), 0.0
        gone = level * part + (amps - level) * tau * fallen
        charge, drawn = charge + gone, drawn + share * gone
        amps, seconds = end, seconds - part
    return amps, charge, drawn


@compiled
def pulse(
    winding: Winding, data: Numbers, amps: float, emf: float, seconds: float, phase: int
) -> tuple[float, float, float, float, float]:
    """(current at the end, charge, share of it that the supply gives, derivatives of current and charge by the
    back-EMF), as `flow`, while one and the same circuit conducts; a share below −1: it does not."""
    at = 7 * phase
    if amps > 0.0 or (amps == 0.0 and emf < data[at + 1]):
        volts, ohms, share = data[at + 1], winding.ohms + data[at + 2], data[at + 3]
    elif amps < 0.0 or emf > data[at + 4]:
        volts, ohms, share = data[at + 4], winding.ohms + data[at + 5], data[at + 6]
    else:
        return 0.0, 0.0, -2.0, 0.0, 0.0
    tau, level = winding.henry / ohms, (volts - emf) / ohms
    fallen = -math.expm1(-seconds / tau)
    end = amps + (level - amps) * fallen
    charge = level * seconds + (amps - level) * tau * fallen
    return end, charge, share if end * amps >= 0.0 else -2.0, -fallen / ohms, (tau * fallen - seconds) / ohms


@compiled
def mean_current(winding: Winding, data: Numbers, emf: float) -> tuple[float, float]:
    """(mean motor current in A, its derivative by the back-EMF in A/V)."""
    w = winding
    if w.kind == 2 or (w.kind == 3 and emf < data[0]):
        return w.amps + w.amps_slope * emf, w.amps_slope
    if w.kind == 3:
        return _between(data, emf)
    if emf < w.boundary_emf:
        volts = (w.on_volts + w.drop) * w.on_s / w.period - w.drop
        return (volts - emf) / w.ohms, -1.0 / w.ohms
    if w.on_s == 0.0 or emf >= w.on_volts:
        return 0.0, 0.0
    below = emf + w.drop
    swing = (w.on_volts - emf) * w.rise / below
    conduction = w.on_s + w.tau * math.log1p(swing)
    slope = -w.tau * w.rise * (w.on_volts + w.drop) / (below * below * (1.0 + swing))
    scale = w.ohms * w.period
    return ((w.on_volts + w.drop) * w.on_s - below * conduction) / scale, -(conduction + below * slope) / scale


@compiled
def mean_supply_current(winding: Winding, data: Numbers, emf: float) -> float:
    """Mean supply current, A."""
    w = winding
    if w.kind == 2 or (w.kind == 3 and emf < data[0]):
        return w.supply + w.supply_slope * emf
    if w.kind == 3:
        return _supply_between(data, emf)
    if w.on_s == 0.0 or emf >= w.on_volts:
        return 0.0
    rising = (w.on_volts - emf) / w.ohms
    valley = 0.0
    if emf < w.boundary_emf:
        valley = ((w.on_volts + w.drop) * w.carry - emf - w.drop) / w.ohms
    return (rising * w.on_s + (valley - rising) * w.tau * w.rise) / w.period


@compiled
def _between(data: Numbers, emf: float) -> tuple[float, float]:
    """Current and slope by the cubic through values and slopes at either end of the interval; its ends carried on."""
    h = data[1]
    last = (len(data) - 2) // 3 - 2
    node = min(last, max(0, math.floor((emf - data[0]) / h)))
    x = (emf - data[0]) / h - node
    at = 2 + 3 * node
    a, u, b, v = data[at], data[at + 1] * h, data[at + 3], data[at + 4] * h
    c, d = 3.0 * (b - a) - 2.0 * u - v, u + v - 2.0 * (b - a)
    return a + x * (u + x * (c + x * d)), (u + x * (2.0 * c + 3.0 * x * d)) / h


@compiled
def _supply_between(data: Numbers, emf: float) -> float:
    """Supply current, straight in between."""
    last = (len(data) - 2) // 3 - 2
    node = min(last, max(0, math.floor((emf - data[0]) / data[1])))
    x = (emf - data[0]) / data[1] - node
    at = 4 + 3 * node
    return data[at] + x * (data[at + 3] - data[at])
