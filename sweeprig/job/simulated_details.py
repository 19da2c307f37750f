"""Tables under the motor file's `[simulated]` that describe a brushed motor's mechanics and heat more closely.

Bare SI numbers, each unit in its name. What they do is `simbench`'s; no physics here.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated

from pydantic import Field, model_validator

from sweeprig.job.amounts import Number, Strict, problem

_KPerW = Annotated[float, Number(0.0, 1000.0, "Heat always finds some resistance", above=True)]
_JPerK = Annotated[float, Number(0.0, 100_000.0, "Every body takes up heat", above=True)]
_OrZero = Annotated[float, Number(0.0, 1e6, "It cannot be negative")]
_PerHour = Annotated[float, Number(-50.0, 100.0, "In percent per hour of turning; more would be no drift")]
_Corner = Annotated[float, Number(-1e6, 1e6, "A corner of the load curve")]


class TwoBodyHeat(Strict):
    """Winding and case as two bodies."""

    winding_case_k_per_w: _KPerW
    case_ambient_k_per_w: _KPerW
    winding_j_per_k: _JPerK
    case_j_per_k: _JPerK
    ambient_degc: Annotated[float, Number(-60.0, 100.0, "The air around the motor")] = 20.0


class SimulatedHeat(TwoBodyHeat):
    """Of a motor with a winding to reckon with; brushed: in place of one thermal resistance and time constant.

    magnet_percent_per_k   of the torque constant, by the case's temperature; ferrite about −0.2
    """

    magnet_percent_per_k: Annotated[float, Number(-1.0, 0.5, "No magnet fades faster with warmth")] = -0.2


class SimulatedInputHeat(TwoBodyHeat):
    """Of a fan of which only the current is known.

    loss_percent   part of what it draws beyond standstill that warms the winding; the rest moves air
    """

    loss_percent: Annotated[float, Number(0.0, 100.0, "Part of the driving power that warms the winding")] = 40.0


class SimulatedCogging(Strict):
    """Detent torque over the shaft's angle, in place of the rough spots and their barrier angle."""

    amplitude_nm: Annotated[float, Number(0.0, 1e3, "Peak torque; leave the table out for none", above=True)]
    steps_per_revolution: Annotated[int, Number(1, 1000, "Detents in one turn", whole=True)]


class SimulatedLoad(Strict):
    """What else stands against the shaft, and stiction that grows.

    constant_nm    acts at rest too, and may turn the rotor backwards
    draught_rpm    the air alone would turn a free wheel backwards so fast
    curve_rpm, curve_nm   corners of a load over speed: back pressure; straight between them, level beyond
    stiction_percent_per_decade   growth of the breakaway friction per decade of rest beyond stiction_from_s
    """

    constant_nm: _OrZero = 0.0
    draught_rpm: Annotated[float, Number(0.0, 10_000.0, "Backwards; 0 for none")] = 0.0
    draught_spread_percent: Annotated[float, Number(0.0, 50.0, "A standard deviation in percent of the mean")] = 0.0
    draught_correlation_s: Annotated[float, Number(0.1, 3600.0, "How quickly gusts come and go")] = 5.0
    curve_rpm: list[_Corner] = Field(default_factory=list, max_length=100)
    curve_nm: list[_Corner] = Field(default_factory=list, max_length=100)
    stiction_percent_per_decade: Annotated[float, Number(0.0, 100.0, "More would double it every decade")] = 0.0
    stiction_from_s: Annotated[float, Number(0.001, 3600.0, "Rest from which it grows")] = 1.0

    @model_validator(mode="after")
    def _curve_is_one(self) -> SimulatedLoad:
        """A curve has as many torques as speeds, two at least, with rising speeds."""
        x, y = self.curve_rpm, self.curve_nm
        if len(x) != len(y) or len(x) == 1 or any(a >= b for a, b in pairwise(x)):
            what, allowed = "the load curve is none", "as many torques as speeds, two or more, speeds rising"
            raise problem(what, [x, y], allowed, "Correct curve_rpm and curve_nm, or omit both")
        return self


class SimulatedDrift(Strict):
    """What changes while it turns: grease that loosens up, friction and magnet that age."""

    cold_grease_percent: Annotated[float, Number(0.0, 500.0, "Added to running and viscous friction when cold")] = 0.0
    grease_time_constant_s: Annotated[float, Number(1.0, 86_400.0, "How quickly grease loosens up or sets")] = 600.0
    friction_percent_per_hour: _PerHour = 0.0
    magnet_percent_per_hour: _PerHour = 0.0
