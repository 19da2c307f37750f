"""The motor file's `[simulated]` table: the true motor of the simulated bench, one model for each kind of motor.

Bare SI numbers, each unit in its name. What the values do is `simbench`'s; no physics and no checks across files here.
"""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag

from sweeprig.job.amounts import Number, Strict
from sweeprig.job.simulated_details import (
    SimulatedCogging,
    SimulatedDrift,
    SimulatedHeat,
    SimulatedInputHeat,
    SimulatedLoad,
)

_Positive = Annotated[float, Number(0.0, 1e6, "A motor has none of nothing", above=True)]
_OrZero = Annotated[float, Number(0.0, 1e6, "It cannot be negative")]
_Spread = Annotated[float, Number(0.0, 50.0, "A standard deviation in percent of the mean")]
_Percent = Annotated[float, Number(0.0, 100.0, "A part of the whole")]


class BrushedValues(Strict):
    """The values of a brushed motor with its load."""

    resistance_ohm: _Positive
    inductance_henry: _Positive
    torque_constant_nm_per_a: _Positive
    inertia_kg_m2: _Positive
    quadratic_load_nm_s2: _OrZero
    viscous_friction_nm_s: _OrZero
    running_friction_nm: _OrZero
    running_friction_spread_percent: _Spread
    breakaway_friction_nm: _OrZero
    breakaway_friction_spread_percent: _Spread
    friction_correlation_s: _Positive
    barrier_angle_rad: _OrZero
    thermal_resistance_k_per_w: _OrZero
    thermal_time_constant_s: _Positive


class SimulatedMotor(BrushedValues):
    """A brushed motor; the kind need not be written. Its further tables are optional."""

    kind: Literal["brushed"] = Field("brushed", exclude=True)
    heat: SimulatedHeat | None = None
    cogging: SimulatedCogging | None = None
    load: SimulatedLoad | None = None
    drift: SimulatedDrift | None = None


class SimulatedGeared(BrushedValues):
    """A brushed motor on a gear: inertia and frictions are those of motor and load together, at the motor's shaft.

    backlash_rad           play of the gear, at the output shaft
    own_inertia_percent    the motor's own part of the inertia; own_friction_percent likewise of both frictions
    """

    kind: Literal["geared"]
    gear_ratio: Annotated[float, Number(1.0, 10_000.0, "Turns of the motor in one of the output shaft")]
    backlash_rad: Annotated[float, Number(0.0, 1.0, "Play at the output shaft; a radian is a broken tooth")]
    own_inertia_percent: Annotated[float, Number(0.0, 100.0, "The motor's part of the inertia", above=True)]
    own_friction_percent: _Percent


class SimulatedElectronic(Strict):
    """A fan with its own commutation, made for steady supply, on a chopped one.

    wake_s            from supply voltage to the first current in the winding
    holdup_farad      capacitor behind charge_ohm that carries it through the off-time; 0 for none
    soft_start_s      ramp of the drive level from nothing to full; 0 for none
    lock_detect_s     it pushes so long against a locked rotor; lock_rest_s is the pause before it tries again
    backward_limit_rpm  it refuses to start while turning backwards faster than this
    draught_rpm       the draught turns a free wheel backwards so fast; 0 for none
    tach_chopped      its tachometer output goes high in every off-time
    """

    kind: Literal["electronic"]
    resistance_ohm: _Positive
    torque_constant_nm_per_a: _Positive
    inertia_kg_m2: _Positive
    quadratic_load_nm_s2: _OrZero
    viscous_friction_nm_s: _OrZero
    running_friction_nm: _OrZero
    running_friction_spread_percent: _Spread
    breakaway_friction_nm: _OrZero
    breakaway_friction_spread_percent: _Spread
    friction_correlation_s: _Positive
    barrier_angle_rad: _OrZero
    own_amps: Annotated[float, Number(0.0, 10.0, "What the electronics draw without the winding")]
    lowest_volts: Annotated[float, Number(0.0, 100.0, "Below it the electronics reset", above=True)]
    wake_s: Annotated[float, Number(0.0, 10.0, "From supply voltage to the first current")]
    holdup_farad: Annotated[float, Number(0.0, 1.0, "0 for none; more than 1 F is no fan")] = 0.0
    charge_ohm: Annotated[float, Number(0.0, 1000.0, "Switch, leads and capacitor together", above=True)] = 0.5
    soft_start_s: Annotated[float, Number(0.0, 60.0, "0 for none")] = 0.0
    lock_detect_s: Annotated[float, Number(0.0, 60.0, "Electronics push for a while before they give up", above=True)]
    lock_rest_s: Annotated[float, Number(0.0, 600.0, "A pause so short protects nothing", above=True)]
    backward_limit_rpm: _OrZero = 0.0
    draught_rpm: Annotated[float, Number(0.0, 10_000.0, "Backwards; 0 for none")] = 0.0
    draught_spread_percent: _Spread = 0.0
    tach_chopped: bool = False
    heat: SimulatedHeat | None = None


class SimulatedControlInput(Strict):
    """A fan with a control input, after the published 4-wire specification.

    below_minimum     below the minimum duty: A stays at minimum speed; B too, and off at 0 %; C slows until its
                      current no longer commutates
    bend_percent      how far speed lies above (or below) the straight line half-way up, percent of the maximum
    start_rpm_percent, start_pulse_s  speed and time of the pulse with which it starts
    fail_percent      type C: mean duty at which it stops, and spread_percent how that wanders
    """

    kind: Literal["control_input"]
    maximum_rpm: Annotated[float, Number(0.0, 100_000.0, "At nominal voltage and full duty", above=True)]
    nominal_volts: Annotated[float, Number(0.0, 100.0, "12 V in the specification", above=True)] = 12.0
    lowest_volts: Annotated[float, Number(0.0, 100.0, "Below it the fan does not run", above=True)]
    minimum_duty_percent: Annotated[float, Number(0.0, 100.0, "Below it speed no longer follows", above=True)]
    minimum_rpm_percent: Annotated[float, Number(0.0, 30.0, "The specification allows 30 % of the maximum", above=True)]
    below_minimum: Literal["A", "B", "C"]
    bend_percent: Annotated[float, Number(-10.0, 10.0, "The specification allows 10 % either way")] = 0.0
    time_constant_s: _Positive
    coast_time_constant_s: _Positive
    coast_rpm_per_s: Annotated[float, Number(0.0, 1e6, "Friction's part of coasting down", above=True)]
    own_amps: Annotated[float, Number(0.0, 10.0, "What it draws at standstill")]
    full_amps: Annotated[float, Number(0.0, 1.5, "The specification allows 1.5 A", above=True)]
    spike_amps: Annotated[float, Number(0.0, 2.2, "The specification allows 2.2 A at start-up")]
    spike_s: Annotated[float, Number(0.0, 1.0, "The specification allows 1.0 s")]
    start_rpm_percent: Annotated[float, Number(0.0, 30.0, "The specification allows 30 % of the maximum")]
    start_pulse_s: Annotated[float, Number(0.0, 2.0, "The specification allows 2 s")]
    fail_percent: _Percent = 0.0
    spread_percent: Annotated[float, Number(0.0, 10.0, "A standard deviation in percent duty")] = 0.0
    correlation_s: _Positive = 1.0
    speed_spread_percent: _Spread = 0.0
    heat: SimulatedInputHeat | None = None


class SimulatedPrescribed(Strict):
    """A cheap motor that stops and starts by a prescribed law, for statistics; it has no mechanics to speak of.

    stall_duty_percent     half of the holds of hold_time_s survive at this duty
    stall_spread_percent   standard deviation of the stopping law; start_spread_percent of the starting law
    floor_per_hour         hazard that no duty cures
    scatter_percent        standard deviation of a threshold that is drawn anew for each setting
    drift_percent_per_hour by which both thresholds rise
    kick_s                 time at full duty after which half of the starts hold out a step down; 0: all do, at once.
                           At a kick duty D it is kick_s·(100/D)^kick_power; kick_spread is the standard deviation of
                           its natural logarithm
    """

    kind: Literal["prescribed"]
    law: Literal["exponential", "gaussian"]
    stall_duty_percent: _Percent
    stall_spread_percent: Annotated[float, Number(0.0, 50.0, "In percent duty", above=True)]
    hold_time_s: Annotated[float, Number(0.0, 1e6, "The time that the stall duty belongs to", above=True)]
    start_duty_percent: _Percent
    start_spread_percent: Annotated[float, Number(0.0, 50.0, "In percent duty", above=True)]
    floor_per_hour: _OrZero = 0.0
    scatter_percent: Annotated[float, Number(0.0, 20.0, "In percent duty")] = 0.0
    drift_percent_per_hour: Annotated[float, Number(-20.0, 20.0, "In percent duty")] = 0.0
    top_rpm: Annotated[float, Number(0.0, 100_000.0, "At full duty", above=True)]
    dead_percent: Annotated[float, Number(0.0, 99.0, "Duty at which the straight line of speed meets zero")] = 0.0
    time_constant_s: _Positive
    full_amps: Annotated[float, Number(0.0, 50.0, "Motor current at full duty")]
    kick_s: Annotated[float, Number(0.0, 60.0, "Time of a pulse at full duty")] = 0.0
    kick_spread: Annotated[float, Number(0.0, 3.0, "Of the natural logarithm of the time", above=True)] = 0.3
    kick_power: Annotated[float, Number(0.0, 5.0, "Of the kick duty")] = 1.0


def _kind_of(value: object) -> str:
    """The mark of the kind that a table names; a table without one, and what is no table, is taken as brushed."""
    kind = value.get("kind", "brushed") if isinstance(value, dict) else getattr(value, "kind", "brushed")
    return f"[{kind}]"


Simulated = Annotated[
    Annotated[SimulatedMotor, Tag("[brushed]")]
    | Annotated[SimulatedGeared, Tag("[geared]")]
    | Annotated[SimulatedElectronic, Tag("[electronic]")]
    | Annotated[SimulatedControlInput, Tag("[control_input]")]
    | Annotated[SimulatedPrescribed, Tag("[prescribed]")],
    Discriminator(_kind_of),
]
"""One of the kinds, told apart by the key `kind`. Marks in brackets: problems.py takes them out of the key's path."""

KINDS = ("brushed", "geared", "electronic", "control_input", "prescribed")
