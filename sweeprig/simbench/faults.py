"""The fault plan of a job: the rig file's list put in place between instruments, motor and their ports, seeded.

Which fault does what is faults_of_*.py's (instruments and links) and rig_faults.py's (motor, stage, supply).
"""

from __future__ import annotations

import random
from typing import TYPE_CHECKING, cast

from sweeprig.simbench import faults_of_answers, faults_of_instruments, faults_of_links
from sweeprig.simbench.faults_of_instruments import require_heartbeat
from sweeprig.simbench.faulty_port import Fault, FaultyPort, When
from sweeprig.simbench.rig_faults import FaultyMachine

if TYPE_CHECKING:
    from sweeprig.job import Job
    from sweeprig.simbench.bench import Machine, Struck
    from sweeprig.simbench.instrument import Instrument

KINDS: dict[str, type[Fault]] = {
    **faults_of_answers.KINDS,
    **faults_of_links.KINDS,
    **faults_of_instruments.KINDS,
}
"""Kinds that sit on a port, by name."""


def fit_port(job: Job, instrument: Instrument, session: int) -> None:
    """Give the instrument a port with its faults, if the rig file has any for it; the same seed gives the same ones.

    ConfigError for a fault that this instrument cannot have.
    """
    listed = list(enumerate(job.rig.simulated_faults or ()))
    mine = [(place, spec) for place, spec in listed if spec.instrument == instrument.name]
    if not mine:
        return
    port = instrument.new_port(FaultyPort, instrument)
    for place, spec in mine:
        rng = random_for(job, session, place, spec.kind)
        fault = KINDS[spec.kind](spec, When(spec, random.Random(rng.random())), port, rng)
        require_heartbeat(fault)
        port.faults.append(fault)
        fault.plan()
    instrument.port = port


def random_for(job: Job, session: int, place: int, kind: str) -> random.Random:
    """The generator of the fault at this place of the list: another one in each session."""
    return random.Random(f"{job.sweep.seed}/{session}/fault {place}/{kind}")


def with_rig_faults(job: Job, machine: Machine, session: int, struck: list[Struck]) -> Machine:
    """The machine with the rig's faults, if the rig file has any; each that begins is put down in `struck`.

    ConfigError for a fault that this kind of simulated motor cannot have.
    """
    listed = enumerate(job.rig.simulated_faults or ())
    mine = [(spec, random_for(job, session, place, spec.kind)) for place, spec in listed if spec.what.place == "rig"]
    if not mine:
        return machine
    return cast("Machine", FaultyMachine(machine, mine, job.motor.pulses_per_revolution, struck))
