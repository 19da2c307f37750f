"""The true motor of the simulated bench: what the instruments try to find out.

Only values and their plausibility live here; no physics, and nothing of the analysis may read it.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

from sweeprig.errors import ConfigError
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.drift import Drift
from sweeprig.simbench.heat import TwoBodies
from sweeprig.simbench.load import Load

_MAY_BE_ZERO = (
    "quadratic_load_nm_s2", "viscous_friction_nm_s", "running_friction_nm", "running_friction_spread_percent",
    "breakaway_friction_nm", "breakaway_friction_spread_percent", "barrier_angle_rad", "thermal_resistance_k_per_w",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class MotorTruth:
    """A brushed motor with a fan wheel on it; the fields are the `[simulated]` table of a motor file.

    resistance_ohm                     winding and brushes at 20 degC
    torque_constant_nm_per_a           also the back-EMF constant, V·s/rad
    quadratic_load_nm_s2               load torque = this · ω²
    running_friction_nm                mean Coulomb friction of the turning rotor
    running_friction_spread_percent    its standard deviation, percent of the mean; breakaway likewise
    breakaway_friction_nm              mean torque that a rough spot asks for before it lets the rotor past
    friction_correlation_s             time constant of both frictions' slow random wandering
    barrier_angle_rad                  width of a rough spot: the energy to pass it is torque deficit · this angle
    thermal_resistance_k_per_w         winding to ambient
    """

    resistance_ohm: float
    inductance_henry: float
    torque_constant_nm_per_a: float
    inertia_kg_m2: float
    quadratic_load_nm_s2: float
    viscous_friction_nm_s: float
    running_friction_nm: float
    running_friction_spread_percent: float
    breakaway_friction_nm: float
    breakaway_friction_spread_percent: float
    friction_correlation_s: float
    barrier_angle_rad: float
    thermal_resistance_k_per_w: float
    thermal_time_constant_s: float

    def __post_init__(self) -> None:
        """ConfigError for a negative value, or a zero where the physics would divide by it."""
        for field in fields(MotorTruth):
            value: float = getattr(self, field.name)
            zero_is_fine = field.name in _MAY_BE_ZERO
            if not (value > 0.0 or (value == 0.0 and zero_is_fine)):
                raise ConfigError(
                    f"the simulated motor cannot have this {field.name}",
                    value=f"{value:g}",
                    allowed="zero or more" if zero_is_fine else "more than zero",
                    remedy="Correct the [simulated] table of the motor file",
                )


@dataclass(frozen=True, slots=True)
class DetailedTruth(MotorTruth):
    """A brushed motor whose mechanics or heat are known more closely; each part is a table under `[simulated]`.

    heat      in place of the two thermal values above; cogging in place of the rough spots and their barrier angle
    """

    heat: TwoBodies | None = None
    cogging: Cogging | None = None
    load: Load | None = None
    drift: Drift | None = None
