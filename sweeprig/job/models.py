"""The job: a rig, a motor and a sweep, with what is said about it in the report.

Only values. Reading files is loader.py, checks across tables are cross_checks.py.
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

from pydantic import PrivateAttr

from sweeprig.job.amounts import Strict, Words
from sweeprig.job.motor_models import Motor
from sweeprig.job.rig_models import Limits, Rig
from sweeprig.job.sweep_models import Sweep


class Job(Strict):
    """A rig + a motor + a sweep. `cautions_acknowledged`: a person has read the cautions of the manual's `safety`."""

    title: Annotated[str, Words()]
    client: Annotated[str, Words()] | None = None
    place: Annotated[str, Words()] | None = None
    operator: Annotated[str, Words()] | None = None
    cautions_acknowledged: bool = False
    rig: Rig
    motor: Motor
    sweep: Sweep
    _rig_folder: Path | None = PrivateAttr(None)

    @property
    def rig_folder(self) -> Path | None:
        """The folder of the rig's file: a user's own dialects lie beside it. None: the job is not from a file."""
        return self._rig_folder

    def found_in(self, rig_folder: Path) -> Job:
        """The same job, whose rig stands in a file in `rig_folder`."""
        copy = self.model_copy()
        copy._rig_folder = rig_folder
        return copy

    def __eq__(self, other: object) -> bool:
        """Equal when all that the files say is equal, wherever they lie."""
        return isinstance(other, Job) and all(getattr(self, key) == getattr(other, key) for key in Job.model_fields)

    def limits(self) -> Limits:
        """The rig's limits, each lowered to the motor's maximum where that is lower. What protection must use."""
        rig, motor = self.rig.limits, self.motor
        hottest = [limit for limit in (rig.winding_temperature, motor.maximum_temperature) if limit is not None]
        return rig.model_copy(
            update={
                "current": min(rig.current, motor.maximum_current),
                "motor_voltage": min(rig.motor_voltage, motor.maximum_voltage),
                "speed": min(rig.speed, motor.maximum_speed),
                "locked_rotor_time": min(rig.locked_rotor_time, motor.locked_rotor_time),
                "winding_temperature": min(hottest, default=None),
            }
        )
