"""Whether the simulated stage and supply of a rig file can be wired as the rig says.

Pure, called by wiring_checks.py.
"""

from __future__ import annotations

from collections.abc import Iterator

from sweeprig.errors import ConfigError
from sweeprig.job.models import Job
from sweeprig.job.problems import Sources, misfit
from sweeprig.job.toml_source import KeyPath


def stage_checks(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Everything that is wrong with the two tables."""
    rig, stage = job.rig, job.rig.simulated_stage
    for table in ("simulated_stage", "simulated_source"):
        if rig.drive_kind == "control_input" and getattr(rig, table) is not None:
            what, remedy = "a fan with a control input has its power stage inside", f"Remove [{table}]"
            yield _error(sources, table, "", what, "with a power switch", remedy)
    if stage is not None and rig.drive_kind != "control_input":
        if stage.recirculation == "synchronous" and rig.stage == "low_side_diode":
            what, remedy = "a low-side switch with a diode has no second switch", 'Write recirculation = "diode"'
            yield _error(sources, "simulated_stage", "recirculation", what, "diode", remedy)
        if stage.decay == "fast" and rig.stage != "h_bridge":
            what, remedy = "only an H bridge can reverse the motor in the off-time", 'Write decay = "slow"'
            yield _error(sources, "simulated_stage", "decay", what, "slow, or stage h_bridge", remedy)
        if stage.dead_time_s > 0.0 and (stage.recirculation == "diode" or rig.stage == "low_side_diode"):
            what, remedy = "dead time is between two switches, and here a diode takes over", "Remove dead_time_s"
            yield _error(sources, "simulated_stage", "dead_time_s", what, "0", remedy)
        yield from _capacitor(job, sources)
    source, highest = rig.simulated_source, max(job.sweep.supply)
    if source is not None and source.clamp_volts is not None and source.clamp_volts <= highest:
        what, remedy = "the clamp would conduct at the supply's own voltage and burn", "Raise it"
        yield _error(sources, "simulated_source", "clamp_volts", what, f"above {highest:g} (supply)", remedy)


def _capacitor(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """A load capacitor is reckoned with for a motor that hangs on the rig's stage; the other kinds have one inside."""
    stage, true = job.rig.simulated_stage, job.motor.simulated
    if stage is None or true is None or stage.load_capacitor_farad is None or true.kind == "brushed":
        return
    what = f"the simulated motor is of kind {true.kind}, and only a brushed one is reckoned with a load capacitor"
    remedy = "Remove it, or name a motor of kind brushed"
    yield _error(sources, "simulated_stage", "load_capacitor_farad", what, "none with this motor", remedy)


def _error(sources: Sources, table: str, key: str, what: str, allowed: str, remedy: str) -> ConfigError:
    path: KeyPath = ("rig", table, key) if key else ("rig", table)
    return misfit(sources, path, what, allowed, remedy, topic="simbench")
