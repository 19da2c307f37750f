"""Whether the simulated faults of a rig file fit the rig, and each of them itself: where, when, how strong.

Pure, called by wiring_checks.py. What a fault does is not known here.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterator, Mapping

from sweeprig.errors import ConfigError
from sweeprig.job.fault_models import SimulatedFault
from sweeprig.job.problems import Sources, misfit
from sweeprig.job.rig_models import Instrument, Rig
from sweeprig.job.toml_source import KeyPath

_STRENGTH = ("delay", "count", "voltage", "text")


def fault_checks(rig: Rig, sources: Sources) -> Iterator[ConfigError]:
    """Everything that is wrong with the list, fault by fault."""
    for position, fault in enumerate(rig.simulated_faults or ()):
        path: KeyPath = ("rig", "simulated_faults", position)
        yield from _place(fault, path, rig.instruments, sources)
        if fault.kind == "missing_diode" and rig.stage != "low_side_diode":
            what, remedy = "the stage of this rig has no diode to miss", "Remove this fault"
            yield misfit(sources, (*path, "kind"), what, "with stage low_side_diode", remedy, topic="simbench")
        yield from _time(fault, path, sources)
        for key in _STRENGTH:
            if getattr(fault, key) is not None and key not in fault.what.takes:
                takes = ", ".join(part for part in _STRENGTH if part in fault.what.takes) or "none of these"
                what = f"the fault {fault.kind} takes no {key}: {fault.what.about.replace('`', '')}"
                yield misfit(sources, (*path, key), what, takes, f"Remove {key}", topic="simbench")


def _place(
    fault: SimulatedFault, path: KeyPath, instruments: Mapping[str, Instrument], sources: Sources
) -> Iterator[ConfigError]:
    """A fault of the rig has no instrument; every other one has an instrument of this rig."""
    named, allowed = fault.instrument, ", ".join(instruments)
    if fault.what.place == "rig":
        if named is not None:
            what = f"{fault.kind} is a fault of motor, stage or supply, not of an instrument"
            yield misfit(sources, (*path, "instrument"), what, "no instrument", "Remove it", topic="simbench")
    elif named is None:
        what = f"whose fault {fault.kind} is must be stated"
        remedy = f'Add for example instrument = "{next(iter(instruments), "meter")}"'
        yield misfit(sources, (*path, "instrument"), what, allowed, remedy, topic="simbench")
    elif named not in instruments:
        near = difflib.get_close_matches(named, instruments, 1, 0.5)
        remedy = f'Did you mean "{near[0]}"?' if near else f"Add the table [instruments.{named}]"
        what = f"no instrument is called {named}"
        yield misfit(sources, (*path, "instrument"), what, allowed, remedy, topic="simbench")


def _time(fault: SimulatedFault, path: KeyPath, sources: Sources) -> Iterator[ConfigError]:
    """When it acts is stated, and in words that its kind understands."""
    counted = {"exchange": fault.exchange, "exchanges": fault.exchanges, "probability": fault.probability}
    stated = [key for key, value in counted.items() if value is not None]
    if fault.what.place == "rig":
        for key in stated:
            what = f"{fault.kind} hears no messages: it begins at a bench time"
            yield misfit(sources, (*path, key), what, "start, lasts", f"Use start in place of {key}", topic="simbench")
        if fault.start is None:
            what, remedy = f"when {fault.kind} begins must be stated", 'Add for example start = "60 s"'
            yield misfit(sources, (*path, "start"), what, "start, and lasts if it ends", remedy, topic="simbench")
        return
    if not stated and fault.start is None:
        what = f"when {fault.kind} acts must be stated"
        remedy = "Add for example exchange = 40"
        yield misfit(sources, (*path, "exchange"), what, "exchange, probability or start", remedy, topic="simbench")
    if fault.exchanges is not None and (fault.exchange is None or fault.lasts is not None):
        what = "exchanges says how many from a given exchange on"
        remedy = "Add exchange" if fault.exchange is None else "Remove exchanges or lasts: either ends it"
        yield misfit(sources, (*path, "exchanges"), what, "with exchange, without lasts", remedy, topic="simbench")
