"""The machine of a motor file: which kind stands for it, built from its `[simulated]` table.

The one place that knows all kinds. Each is imported when it is wanted.
"""

from __future__ import annotations

from dataclasses import fields, replace
from typing import TYPE_CHECKING, TypeVar

from sweeprig.job.motor_models import Motor
from sweeprig.job.simulated_details import TwoBodyHeat
from sweeprig.job.simulated_models import (
    SimulatedControlInput,
    SimulatedElectronic,
    SimulatedGeared,
    SimulatedPrescribed,
)
from sweeprig.simbench.heat import TwoBodies

if TYPE_CHECKING:
    import numpy as np
    from _typeshed import DataclassInstance
    from pydantic import BaseModel

    from sweeprig.simbench.bench import Machine

Truth = TypeVar("Truth", bound="DataclassInstance")


def other_kind(motor: Motor, rng: np.random.Generator, now: float) -> Machine | None:
    """The machine of a motor that is not plainly brushed; None for one that is, or that has no true values."""
    true, pulses = motor.simulated, motor.pulses_per_revolution
    if isinstance(true, SimulatedElectronic):
        from sweeprig.simbench.kinds.electronic import ElectronicFan, ElectronicTruth

        electronic = replace(values(ElectronicTruth, true), heat=bodies(true.heat))
        return ElectronicFan(electronic, pulses, rng, now)
    if isinstance(true, SimulatedControlInput):
        from sweeprig.simbench.kinds.control_input import ControlInputFan, ControlInputTruth

        loss = 0.0 if true.heat is None else true.heat.loss_percent
        inside = replace(values(ControlInputTruth, true), heat=bodies(true.heat), loss_percent=loss)
        return ControlInputFan(inside, pulses, rng, now)
    if isinstance(true, SimulatedPrescribed):
        from sweeprig.simbench.kinds.prescribed import PrescribedMotor, PrescribedTruth

        return PrescribedMotor(values(PrescribedTruth, true), pulses, rng, now)
    if isinstance(true, SimulatedGeared):
        from sweeprig.simbench.kinds.geared import GearedMotor
        from sweeprig.simbench.motor_truth import MotorTruth

        return GearedMotor(
            values(MotorTruth, true), true.gear_ratio, true.backlash_rad, true.own_inertia_percent,
            true.own_friction_percent, pulses, rng, now,
        )  # fmt: skip
    return None


def bodies(table: TwoBodyHeat | None) -> TwoBodies | None:
    """Winding and case as the motor file has them; None where it has not."""
    if table is None:
        return None
    found = {field.name: float(getattr(table, field.name)) for field in fields(TwoBodies) if hasattr(table, field.name)}
    return TwoBodies(**found)


def values(kind: type[Truth], table: BaseModel) -> Truth:
    """The dataclass `kind` with the values that the table has under the same names."""
    found = {field.name: getattr(table, field.name) for field in fields(kind) if hasattr(table, field.name)}
    return kind(**{name: float(value) if type(value) is int else value for name, value in found.items()})
