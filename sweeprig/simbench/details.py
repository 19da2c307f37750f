"""From the tables of a motor file to the true motor with closer mechanics and heat, and to its plant.

Only the translation lives here; no physics, no instruments.
"""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.job.simulated_models import SimulatedMotor
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.drift import Drift
from sweeprig.simbench.heat import TwoBodies
from sweeprig.simbench.load import Load
from sweeprig.simbench.motor_truth import DetailedTruth


def detailed_truth(plain: Mapping[str, float], simulated: SimulatedMotor) -> DetailedTruth | None:
    """The true motor with the tables that the motor file has; None where it has none."""
    heat, cogging, load, drift = simulated.heat, simulated.cogging, simulated.load, simulated.drift
    if heat is None and cogging is None and load is None and drift is None:
        return None
    loads = None
    if load is not None:
        corners = {"curve_rpm": tuple(load.curve_rpm), "curve_nm": tuple(load.curve_nm)}
        loads = Load(**{**load.model_dump(), **corners})
    return DetailedTruth(
        **plain,
        heat=None if heat is None else TwoBodies(**heat.model_dump()),
        cogging=None if cogging is None else Cogging(**cogging.model_dump()),
        load=loads,
        drift=None if drift is None else Drift(**drift.model_dump()),
    )
