"""Whether a rig file describes a rig: roles point at its instruments, clips sit where they may, addresses fit.

Pure, called by cross_checks.py. Facts of wiring from the trade's practice, without a source.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterator

from pydantic_core import PydanticCustomError

from sweeprig.errors import ConfigError
from sweeprig.job.amounts import Amount, as_written, shown
from sweeprig.job.fault_checks import fault_checks
from sweeprig.job.models import Job
from sweeprig.job.problems import Sources, misfit
from sweeprig.job.rig_models import Instrument
from sweeprig.job.stage_checks import stage_checks
from sweeprig.job.timer_models import timer_checks
from sweeprig.job.toml_source import KeyPath
from sweeprig.roles import ACTUATORS, UNIT_OF_ROLE

SHORTEST_HEARTBEAT_S = 0.05
"""Real seconds: below this an ordinary machine's scheduling fakes a lost heartbeat."""

SERVED_LINKS = "/sweeprig-served-"
"""Begins the folder in which a served terminal that may move has the link that stays."""

_HEARTBEAT = Amount("s", 0.1, 10.0, "What the board's firmware takes")
_FIRMWARE_HEARTBEAT_S = 1.0  # drivers/firmware/README.md: the default of SYST:COMM:TIM
_LOOPBACK = ("::127.0.0.1::", "::LOCALHOST::")
_UNGROUNDED = {"low_side_diode": "a low-side switch", "h_bridge": "an H bridge"}


def wiring_checks(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """All that is wrong with the rig by itself, and with simulated parts that lack their other half."""
    yield from _role_targets(job, sources)
    yield from _probe_ground(job, sources)
    yield from _stated(job, sources)
    yield from _addresses(job, sources)
    yield from _heartbeat(job, sources)
    yield from _pwm_timer(job, sources)
    yield from _simulated(job, sources)


def _role_targets(job: Job, sources: Sources) -> Iterator[ConfigError]:
    instruments, taken = job.rig.instruments, dict[str, str]()
    for role, target in job.rig.roles.items():
        path: KeyPath = ("rig", "roles", role)
        name, dot, quantity = target.partition(".")
        if role in ACTUATORS and dot:
            what, allowed = f"{role} is a whole instrument, not one of its channels", "the name of an instrument"
            yield _error(sources, path, what, allowed, f'Write {role} = "{name}"')
        elif role not in ACTUATORS and not (dot and quantity and "." not in quantity):
            what = f"{role} is a reading: the name of an instrument, a dot, and the quantity"
            yield _error(sources, path, what, "instrument.quantity", f'Write for example {role} = "{name}.{role}"')
        elif name not in instruments:
            near = difflib.get_close_matches(name, instruments, 1, 0.5)
            remedy = f'Did you mean "{near[0]}{dot}{quantity}"?' if near else f"Add the table [instruments.{name}]"
            yield _error(sources, path, f'no instrument is called "{name}"', ", ".join(instruments), remedy)
        elif dot and target in taken:
            what = f"this channel is already the role {taken[target]}"
            yield _error(sources, path, what, "one role for each channel", "Name the channel that reads this quantity")
        elif dot:
            taken[target] = role
            yield from _accuracy_unit(role, instruments[name], name, quantity, sources)


def _accuracy_unit(
    role: str, instrument: Instrument, name: str, quantity: str, sources: Sources
) -> Iterator[ConfigError]:
    """The accuracy statement of a role's channel is in the role's unit."""
    stated, wanted = instrument.accuracy.get(quantity), UNIT_OF_ROLE[role]
    if stated is not None and stated.plus.unit != wanted:
        path: KeyPath = ("rig", "instruments", name, "accuracy", quantity, "plus")
        what = f"{name}.{quantity} is the rig's {role}, whose accuracy is stated in {wanted}"
        yield _error(sources, path, what, f"an amount in {wanted}", f'Write for example plus = "0 {wanted}"')


def _probe_ground(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """An earthed clip on a motor without a grounded terminal shorts the switch through the mains earth."""
    stage = job.rig.stage
    for name, instrument in job.rig.instruments.items():
        if instrument.earthed and instrument.connected_to == "across_motor" and stage in _UNGROUNDED:
            yield _error(
                sources,
                ("rig", "instruments", name, "connected_to"),
                f"{name} is earthed, and a motor on {_UNGROUNDED[stage]} has no grounded terminal: its clip would "
                f"short the switch through the mains earth, or through the board's USB",
                "drive_signal, switch_node or supply_terminals, with the clip on supply minus",
                "Use a differential probe or two channels subtracted (then earthed = false), or a floating meter",
                topic="safety",
            )


def _stated(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """What must not be assumed: a wrong guess gives a plausible number, wrong by a factor."""
    rig = job.rig
    wants = (
        ("stage", rig.stage is None and rig.drive_kind == "power_switch", "a power switch is one of these stages",
         'stage = "low_side_diode"', "low_side_diode, half_bridge, h_bridge"),
        ("voltage_at", rig.voltage_at is None and "motor_voltage" in rig.roles,
         "the voltage read across the motor and at the switch node differ", 'voltage_at = "across_motor"',
         "across_motor, switch_node"),
        ("current_at", rig.current_at is None and "current" in rig.roles,
         "chopped, supply current and motor current differ by more than a factor of two at low duty",
         'current_at = "supply_lead"', "motor_lead, supply_lead, switch_shunt"),
        ("switch_delay", rig.switch_delay is None and rig.drive_kind == "power_switch" and "duty" not in rig.roles,
         "duty is not measured, so the commanded one must be corrected or bounded", 'switch_delay = "1 us"',
         "0 s to 1 ms"),
    )  # fmt: skip
    for key, missing, reason, example, allowed in wants:
        if missing:
            what = f"this must be stated, not assumed: {reason}"
            yield _error(sources, ("rig", key), what, allowed, f"Add for example {example}")


def _addresses(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """One instrument an address; all in process or none; a rate only where a served simulated bench answers."""
    seen = dict[str, str]()
    inside = [name for name, instrument in job.rig.instruments.items() if instrument.in_process]
    for name, instrument in job.rig.instruments.items():
        path: KeyPath = ("rig", "instruments", name, "address")
        if instrument.address in seen:
            what = f"{seen[instrument.address]} has the same address"
            yield _error(sources, path, what, "one instrument for each address", "Correct one of the two")
        seen.setdefault(instrument.address, name)
        if inside and not instrument.in_process:
            what = f"{inside[0]} is simulated in this process and {name} is not: they would live on different clocks"
            yield _error(
                sources, path, what, "all addresses simbench: or none", "Serve the simulated ones, or use real ones"
            )
        elif job.rig.rate is not None and not _served(instrument.address):
            what = f"rate is for a served simulated bench only, and {name} is not at one of its addresses"
            remedy = "Remove rate: nothing real runs faster"
            yield _error(sources, ("rig", "rate"), what, "no rate", remedy, topic="simbench")
            return


def _served(address: str) -> bool:
    upper = address.upper()
    if upper.startswith("TCPIP"):
        return any(host in upper for host in _LOOPBACK)
    return address.startswith(("serial:/dev/pts/", "serial:/dev/tty")) or SERVED_LINKS in address


def _heartbeat(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """The drive's heartbeat, from the board's options: within the rig's limit, and at `rate` still ≥ 50 ms."""
    drive = job.rig.roles.get("drive", "")
    instrument = job.rig.instruments.get(drive)
    if instrument is None or instrument.adapter != "board":
        return
    path: KeyPath = ("rig", "instruments", drive, "options", "heartbeat")
    stated = instrument.options.get("heartbeat", f"{_FIRMWARE_HEARTBEAT_S} s")
    try:
        heartbeat = _HEARTBEAT.read(stated)
    except PydanticCustomError as wrong:
        said = wrong.context or {}
        yield _error(sources, path, str(said["what"]), str(said["allowed"]), str(said["remedy"]))
        return
    limit = job.rig.limits.heartbeat
    if limit is not None and heartbeat > limit:
        place = sources.where(("rig", "limits", "heartbeat"))
        what = f"the drive would stay on without a sign of life for longer than the rig allows ({place})"
        yield _error(sources, path, what, f"up to {shown(limit, 's')}", "Shorten it", topic="safety")
    real = heartbeat / (job.rig.rate or 1.0)
    if job.rig.rate is not None and real < SHORTEST_HEARTBEAT_S:
        what = (
            f"at this rate the heartbeat of {shown(heartbeat, 's')} lasts {shown(real, 's')}, "
            f"less than {shown(SHORTEST_HEARTBEAT_S, 's')}"
        )
        allowed = f"up to {heartbeat / SHORTEST_HEARTBEAT_S:g}"
        yield _error(sources, ("rig", "rate"), what, allowed, "Serve the bench at a lower rate", topic="simbench")


def _pwm_timer(job: Job, sources: Sources) -> Iterator[ConfigError]:
    drive = job.rig.instruments.get(job.rig.roles.get("drive", ""))
    yield from timer_checks(job.rig.pwm_timer, None if drive is None else drive.adapter, sources)


def _simulated(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Simulated instruments turn a simulated motor; faults belong to instruments that are there."""
    if job.motor.simulated is None and any(entry.in_process for entry in job.rig.instruments.values()):
        what = "the rig's instruments are simulated, and the motor file does not say what the true motor is"
        remedy = "Add [simulated] to the motor file, or name a rig with real addresses"
        yield _error(
            sources, ("motor", "simulated"), what, "a motor with the table [simulated]", remedy, topic="simbench"
        )
    for name in job.rig.simulated:
        if name not in job.rig.instruments:
            allowed = ", ".join(job.rig.instruments)
            path: KeyPath = ("rig", "simulated", name)
            near = difflib.get_close_matches(name, job.rig.instruments, 1, 0.5)
            remedy = f'Did you mean "{near[0]}"?' if near else "Remove the table"
            yield _error(sources, path, f"no instrument is called {as_written(name)}", allowed, remedy)
    yield from fault_checks(job.rig, sources)
    yield from stage_checks(job, sources)


def _error(sources: Sources, path: KeyPath, what: str, allowed: str, remedy: str, topic: str = "rig") -> ConfigError:
    return misfit(sources, path, what, allowed, remedy, topic)
