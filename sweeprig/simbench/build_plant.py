"""The plant of a job: a brushed motor on the power stage and supply that the rig file describes.

Instruments and faults are `build`'s.
"""

from __future__ import annotations

import math
import random
from dataclasses import replace

import numpy as np

from sweeprig.job.rig_models import Rig
from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.detailed import DetailedFedPlant, DetailedPlant
from sweeprig.simbench.fed_plant import FedPlant
from sweeprig.simbench.load_capacitor import CapacitorStage
from sweeprig.simbench.motor_truth import DetailedTruth, MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.source import Source
from sweeprig.simbench.stage import Stage


def stage_of(rig: Rig) -> Stage | None:
    """The rig's power stage; None for the plain one: an ideal low-side switch with a diode on an ideal supply."""
    parts, supply = rig.simulated_stage, rig.simulated_source
    kind = rig.stage or "low_side_diode"
    in_supply_lead, at_switch = burden_ohm(rig, "supply_lead"), burden_ohm(rig, "switch_shunt")
    if kind == "low_side_diode" and parts is None and supply is None and in_supply_lead + at_switch == 0.0:
        return None
    more: dict[str, float] = {"switch_ohms": at_switch}
    if parts is not None:
        more = {
            "switch_ohms": parts.switch_resistance_ohm + at_switch,
            "diode_volts": parts.diode_drop_volts,
            "diode_ohms": parts.diode_resistance_ohm,
            "dead_time_s": parts.dead_time_s,
            "on_time_error_s": parts.on_time_error_s,
        }
    stated = None if parts is None else parts.recirculation
    switched = SwitchedStage(
        kind,
        synchronous=stated == "synchronous" or (stated is None and kind != "low_side_diode"),
        fast_decay=parts is not None and parts.decay == "fast",
        supply_ohms=(0.0 if supply is None else supply.resistance_ohm) + in_supply_lead,
        holds_bus=supply is not None,
        **more,
    )
    if parts is None or parts.load_capacitor_farad is None:
        return switched
    return CapacitorStage(switched, parts.load_capacitor_farad, parts.load_capacitor_ohm)


def burden_ohm(rig: Rig, place: str) -> float:
    """What the ammeters at a place add to the circuit, ohm: `burden_ohm` of their `[simulated.NAME]` tables."""
    return sum(
        rig.simulated.get(name, {}).get("burden_ohm", 0.0)
        for name, instrument in rig.instruments.items()
        if instrument.connected_to == place
    )


def source_of(rig: Rig) -> Source | None:
    """The rig's supply; None for an ideal one."""
    said = rig.simulated_source
    if said is None:
        return None
    clamp = math.inf if said.clamp_volts is None else said.clamp_volts
    return Source(said.capacitor_farad, said.limit_response_s, said.bleeder_ohm, clamp, said.blocking_diode_volts)


def plant_of(
    rig: Rig,
    motor: MotorTruth,
    pulses_per_revolution: float,
    rng: np.random.Generator | random.Random,
    now: float = 0.0,
    ripple: bool = True,
) -> Plant:
    """This motor on the rig's stage and supply, cold and still."""
    stage, source = stage_of(rig), source_of(rig)
    in_motor_lead = burden_ohm(rig, "motor_lead")
    if in_motor_lead > 0.0:
        # the voltmeter sits outside the ammeter: its burden is read as a part of the winding
        motor = replace(motor, resistance_ohm=motor.resistance_ohm + in_motor_lead)
    if isinstance(motor, DetailedTruth):
        if source is None:
            return DetailedPlant(motor, pulses_per_revolution, rng, now=now, ripple=ripple, stage=stage)
        return DetailedFedPlant(motor, pulses_per_revolution, rng, source, now=now, ripple=ripple, stage=stage)
    if source is None:
        return Plant(motor, pulses_per_revolution, rng, now=now, ripple=ripple, stage=stage)
    return FedPlant(motor, pulses_per_revolution, rng, source, now=now, ripple=ripple, stage=stage)
