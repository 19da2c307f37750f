"""The rig file's simulated power stage and supply: the parts that the simulated bench puts between supply and motor.

Bare SI numbers, each unit in its name, as in the motor file's `[simulated]`. What they do is `simbench`'s.
"""

from __future__ import annotations

from typing import Annotated, Literal

from sweeprig.job.amounts import Number, Strict

_Ohms = Annotated[float, Number(0.0, 10.0, "A power stage with more would be a resistor")]
_Drop = Annotated[float, Number(0.0, 2.0, "No diode of a small stage drops more")]


class SimulatedStage(Strict):
    """Its switches and diodes.

    recirculation   where the motor's current goes in the off-time: a diode, or a switch (`synchronous`, bridges only)
    decay           H bridge only: `slow` shorts the motor in the off-time, `fast` reverses the bridge
    on_time_error_s the on-time is by so much longer (or shorter) than commanded: switch delays
    load_capacitor_farad, _ohm  a capacitor across the motor's terminals, and its series resistance
    """

    recirculation: Literal["diode", "synchronous"] | None = None
    decay: Literal["slow", "fast"] = "slow"
    switch_resistance_ohm: _Ohms = 0.0
    diode_drop_volts: _Drop = 0.5
    diode_resistance_ohm: _Ohms = 0.0
    dead_time_s: Annotated[float, Number(0.0, 1e-4, "A longer one would be no PWM stage")] = 0.0
    on_time_error_s: Annotated[float, Number(-1e-3, 1e-3, "A slower switch is no PWM switch")] = 0.0
    load_capacitor_farad: (
        Annotated[float, Number(1e-9, 1e-3, "Leave it out for none; a larger one would drive the motor by itself")]
        | None
    ) = None
    load_capacitor_ohm: Annotated[float, Number(1e-3, 100.0, "A charge without resistance has no current")] = 0.1


class SimulatedSource(Strict):
    """The supply that feeds the stage. Without this table it is ideal: stiff, and it takes what a bridge gives back."""

    resistance_ohm: _Ohms = 0.0
    capacitor_farad: Annotated[float, Number(1e-5, 1.0, "Its voltage is reckoned as constant within a PWM period")] = (
        470e-6
    )
    limit_response_s: Annotated[float, Number(0.0, 1.0, "A current limit answers in milliseconds")] = 0.0
    bleeder_ohm: Annotated[float, Number(10.0, 1e7, "What empties the capacitor after output off")] = 1000.0
    clamp_volts: Annotated[float, Number(1.0, 200.0, "It must lie above the supply's own voltage")] | None = None
    blocking_diode_volts: _Drop | None = None
