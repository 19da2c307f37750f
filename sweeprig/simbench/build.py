"""Building the simulated bench of a job: its true motor, and a simulated instrument for each in the rig.

Nothing of conduct, schedule, characterise or the dialects may be imported here: truth and analysis share no formula.
"""

from __future__ import annotations

import random
import zlib
from dataclasses import fields

from sweeprig.errors import ConfigError, UnknownAdapter
from sweeprig.job import Job
from sweeprig.job.simulated_models import SimulatedMotor
from sweeprig.simbench.bench import Bench, Machine
from sweeprig.simbench.board import Board
from sweeprig.simbench.details import detailed_truth
from sweeprig.simbench.faults import fit_port, with_rig_faults
from sweeprig.simbench.generator import Generator
from sweeprig.simbench.instrument import Instrument, Setup
from sweeprig.simbench.kinds.choose import other_kind
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.multimeter import Multimeter
from sweeprig.simbench.pwm_timer import DRIFTS, PwmTimer
from sweeprig.simbench.scope import Scope
from sweeprig.simbench.sound_meter import SoundMeter
from sweeprig.simbench.supply import Supply
from sweeprig.simbench.tachometer import LineTachometer
from sweeprig.simbench.thermometer import Thermometer

SIMULATED_BY_ADAPTER: dict[str, type[Instrument]] = {
    "scpi-multimeter": Multimeter,
    "scpi-scope": Scope,
    "scpi-supply": Supply,
    "scpi-generator": Generator,
    "scpi-thermometer": Thermometer,
    "scpi-sound-meter": SoundMeter,
    "line-tachometer": LineTachometer,
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

    from sweeprig.simbench.build_plant import plant_of

    rng = np.random.default_rng([job.sweep.seed, session])
    other = other_kind(job.motor, rng, began)
    if other is not None:
        return assemble(job, other, session, began, began_utc)
    plant = plant_of(job.rig, motor_truth(job), job.motor.pulses_per_revolution, rng, now=began, ripple=ripple)
    return assemble(job, plant, session, began, began_utc)


def assemble(job: Job, plant: Machine, session: int = 1, began: float = 0.0, began_utc: float | None = None) -> Bench:
    """The rig's instruments around any plant."""
    bench = Bench(plant, began, began_utc)
    bench.plant = with_rig_faults(job, plant, session, bench.struck)
    begin_in_time(job, bench)
    bench.gate_from = gate_from(job)
    if all(instrument.adapter != "scpi-supply" for instrument in job.rig.instruments.values()):
        # A supply that no instrument controls was set by hand, and is on.
        bench.plant.set_supply(job.sweep.supply[0], job.limits().current, True)
    for name, instrument in job.rig.instruments.items():
        simulated = SIMULATED_BY_ADAPTER.get(instrument.adapter)
        if simulated is None:
            raise UnknownAdapter(
                f"no simulated instrument stands in for the adapter of {name}",
                value=instrument.adapter,
                allowed=", ".join(SIMULATED_BY_ADAPTER),
                topic="simbench",
            )
        made = simulated(setup(job, name, session), bench)
        fit_port(job, made, session)
        bench.add(made)
    return bench


def begin_in_time(job: Job, bench: Bench) -> None:
    """Bring the motor up to the beginning of each fault of the rig: it begins then, whether or not anybody looks."""

    def look(_: object) -> None:
        bench.plant_now()

    for spec in job.rig.simulated_faults or ():
        if spec.what.place == "rig" and spec.start is not None and spec.start >= bench.now:
            bench.at(spec.start, look, None)


def gate_from(job: Job) -> str:
    """The instrument whose output the rig file wires to the gate; "" for the board's own pin."""
    wired = (
        name for name, one in job.rig.instruments.items()
        if one.adapter == "scpi-generator" and one.connected_to == "drive_signal"
    )  # fmt: skip
    return next(wired, "")


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
        pwm_timer=pwm_timer(job) if instrument.adapter == "board" else None,
    )


def pwm_timer(job: Job) -> PwmTimer | None:
    """The rig's timer with digital potentiometer, its parts exactly as the rig file names them."""
    parts = job.rig.pwm_timer
    if parts is None:
        return None
    ppm, percent = DRIFTS[parts.kind]
    return PwmTimer(
        potentiometer_ohm=parts.potentiometer,
        capacitor_farad=parts.capacitor_farad,
        supply_volts=parts.supply,
        end_ohm=parts.end_resistor,
        diode_volts=parts.diode_drop,
        timer_ppm_per_k=ppm,
        timer_percent_per_volt=percent,
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
    if not isinstance(simulated, SimulatedMotor):
        raise ConfigError(
            f"the truth of the simulated motor {job.motor.name!r} is not found by trials: they know one kind only",
            value=simulated.kind,
            allowed="brushed",
            remedy="Compare with the values in its [simulated] table instead",
            topic="simbench",
        )
    plain = {field.name: float(getattr(simulated, field.name)) for field in fields(MotorTruth)}
    return detailed_truth(plain, simulated) or MotorTruth(**plain)
