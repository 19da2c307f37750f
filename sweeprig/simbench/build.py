"""Building the simulated bench of a job: its true motor, and a simulated instrument for each in the rig.

Nothing of conduct, schedule, characterise or the dialects may be imported here: truth and analysis share no formula.
"""

from __future__ import annotations

import random
import zlib
from dataclasses import fields

from sweeprig.errors import ConfigError, UnknownAdapter
from sweeprig.job import Job
from sweeprig.simbench.bench import Bench, Machine
from sweeprig.simbench.board import Board
from sweeprig.simbench.instrument import Instrument, Setup
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.multimeter import Multimeter
from sweeprig.simbench.scope import Scope
from sweeprig.simbench.supply import Supply

SIMULATED_BY_ADAPTER: dict[str, type[Instrument]] = {
    "scpi-multimeter": Multimeter,
    "scpi-scope": Scope,
    "scpi-supply": Supply,
    "board": Board,
}


def build(job: Job, session: int = 1, began: float = 0.0, began_utc: float | None = None, ripple: bool = True) -> Bench:
    """The bench of a job: its simulated motor, cold and still, and one instrument for each in the rig.

    session    seeds friction and reading noise; the instruments' own errors are the same in every session
    began      bench time, s, at which it begins (a resumed run goes on there); began_utc: UTC seconds at that moment
    Errors: ConfigError without a `[simulated]` table in the motor file; UnknownAdapter for an adapter that no
    simulated instrument stands in for.
    """
    import numpy as np

    from sweeprig.simbench.plant import Plant

    rng = np.random.default_rng([job.sweep.seed, session])
    plant = Plant(motor_truth(job), job.motor.pulses_per_revolution, rng, now=began, ripple=ripple)
    return assemble(job, plant, session, began, began_utc)


def assemble(job: Job, plant: Machine, session: int = 1, began: float = 0.0, began_utc: float | None = None) -> Bench:
    """The rig's instruments around any plant."""
    bench = Bench(plant, began, began_utc)
    for name, instrument in job.rig.instruments.items():
        simulated = SIMULATED_BY_ADAPTER.get(instrument.adapter)
        if simulated is None:
            raise UnknownAdapter(
                f"no simulated instrument stands in for the adapter of {name}",
                value=instrument.adapter,
                allowed=", ".join(SIMULATED_BY_ADAPTER),
                topic="simbench",
            )
        bench.add(simulated(setup(job, name, session), bench))
    return bench


def setup(job: Job, name: str, session: int) -> Setup:
    """What the instrument of this name is built from."""
    instrument, seed = job.rig.instruments[name], job.sweep.seed
    return Setup(
        name=name,
        serial=f"SIM{zlib.crc32(f'{job.rig.name}/{name}'.encode()):08X}",
        errors_rng=random.Random(f"{seed}/{name}/errors"),
        noise=random.Random(f"{seed}/{session}/{name}/noise"),
        connected_to=instrument.connected_to,
        accuracy=instrument.accuracies(),
        options=instrument.options,
        errors=job.rig.simulated.get(name, {}),
        terminator=instrument.terminator_bytes,
    )


def motor_truth(job: Job) -> MotorTruth:
    """The true motor from the motor file's `[simulated]` table."""
    simulated = job.motor.simulated
    if simulated is None:
        raise ConfigError(
            f"the motor {job.motor.name!r} has no true values for the simulated bench",
            remedy="Add a [simulated] table to the motor file, or run on real instruments",
            topic="simbench",
        )
    return MotorTruth(**{field.name: float(getattr(simulated, field.name)) for field in fields(MotorTruth)})
