"""The rig while it is in use: adapters on their links, and who serves which role.

Opening, identifying and configuring happen here; switching off in `switch_off`, reading in `perform`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, cast

from sweeprig.clock import Clock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.locks import LINK, AddressLock
from sweeprig.conduct.policies import policies
from sweeprig.conduct.protection import Guard
from sweeprig.conduct.sanity import MotorFacts
from sweeprig.dialects import find_dialect
from sweeprig.errors import ConfigError, LinkError, RoleMissing, SweeprigError, WrongInstrument
from sweeprig.job import Job
from sweeprig.job.pwm_choice import frequencies
from sweeprig.job.rig_models import Limits, Rig
from sweeprig.link import registry
from sweeprig.link.link import Link
from sweeprig.link.together import Result, together
from sweeprig.quantities import Reading
from sweeprig.roles import (
    ACTUATORS,
    Adapter,
    AdapterSetup,
    Drive,
    Identity,
    Steps,
    Supply,
    Window,
)

Traffic = Callable[[str, str, bytes, float], None]
Look = Callable[[], None]


@dataclass(frozen=True, slots=True)
class RigUse:
    """A rig and what is used of a motor with it: the limits that hold, and how its tachometer counts.

    folder   where the rig file lies: a user's own dialects are found beside it
    pwm_hz   frequencies whose whole periods instruments have to average over; without those of which they cannot
    motor    what bounds its readings; None where nothing will be swept
    """

    rig: Rig
    limits: Limits
    pulses_per_revolution: float
    folder: Path | None
    pwm_hz: tuple[float, ...] = ()
    motor: MotorFacts | None = None

    @classmethod
    def of_job(cls, job: Job) -> RigUse:
        motor = job.motor
        facts = MotorFacts(
            motor.kind == "brushed", motor.nominal_voltage, motor.maximum_speed, motor.longest_time_constant
        )
        pwm_hz = tuple(one.used_hz for one in frequencies(job) if not one.spread)
        return cls(job.rig, job.limits(), motor.pulses_per_revolution, job.rig_folder, pwm_hz, facts)


@dataclass(slots=True)
class OpenRig:
    """Instruments by their name in the rig file. `source`: role → instrument name for every role that is offered."""

    use: RigUse
    clock: Clock
    adapters: dict[str, Adapter]
    links: dict[str, Link]
    source: dict[str, str]
    roles: Mapping[str, str]
    guard: Guard
    traffic: Traffic | None = None
    identities: dict[str, Identity] = field(default_factory=dict)
    settings: dict[str, dict[str, str]] = field(default_factory=dict)
    """Instrument → what it said of itself when it was last configured."""
    pulse: Look | None = None
    """Called while anything is waited for that nobody watches: the sign of life of this process. It never raises."""
    off_confirmed_at: float = -math.inf
    """When drive and supply last confirmed that they are off, s."""
    locks: list[AddressLock] = field(default_factory=list)

    @property
    def drive(self) -> Drive:
        return cast(Drive, self.adapters[self.source["drive"]])

    @property
    def supply(self) -> Supply | None:
        name = self.source.get("supply")
        return None if name is None else cast(Supply, self.adapters[name])

    @property
    def off_is_supply_off(self) -> bool:
        """A control input that is let go means full speed: such a fan is off without supply only."""
        return self.use.rig.drive_kind == "control_input"

    @property
    def rotation_channel(self) -> str:
        return f"{self.source['speed']}.edge_age"

    @property
    def simulated(self) -> bool:
        return bool(self.identities) and all(identity.simulated for identity in self.identities.values())

    def ask(self, steps: Mapping[str, Steps[Any]], within_s: float, look: Look | None = None) -> dict[str, Result]:
        """Drive steps on several instruments at once; one result each, none raised."""
        pairs = {name: (self.links[name], each) for name, each in steps.items()}
        return together(pairs, self.clock, self.clock.now() + within_s, look or self.pulse, traffic=self.traffic)

    def tell(self, name: str, steps: Steps[Any], look: Look | None = None) -> Any:
        """Steps on one instrument; its error is raised with the instrument's name."""
        return value_of(name, self.ask({name: steps}, BOUNDS["exchange_s"], look)[name])

    def ask_off(self, roles: Iterable[str]) -> dict[str, Result]:
        """Switch off, on every link that is there, at once and blind where it must be; one result each, none raised.

        What listens to the traffic may be what failed: when it raises, everything is sent again without it."""
        names = dict.fromkeys(self.source[role] for role in roles if self.source.get(role) in self.links)
        try:
            return self.ask({name: self.adapters[name].switch_off() for name in names}, BOUNDS["off_s"])
        except Exception:  # noqa: BLE001 - whatever a listener raises, the drive goes off
            self.traffic = None
            return self.ask({name: self.adapters[name].switch_off() for name in names}, BOUNDS["off_s"])

    def read(self, names: Iterable[str], window: Window, look: Look) -> dict[str, Reading]:
        """One cycle: all `names` measure side by side over one window. Every reading passes the guard as it comes."""
        readings: dict[str, Reading] = {}
        failed: list[tuple[str, Exception]] = []
        guard, pairs = self.guard, {}
        for name in names:
            pairs[name] = (self.links[name], self.adapters[name].measure(window))

        def arrived(name: str, result: Result) -> None:
            if result.error is not None:
                failed.append((name, result.error))
                return
            found = by_channel(result.value)
            guard.take(found)
            readings.update(found)

        deadline = self.clock.now() + window.seconds + BOUNDS["cycle_s"]
        together(pairs, self.clock, deadline, look, arrived, self.traffic)
        for name, error in failed:
            raise named(name, error)
        return readings

    def serving(self, roles: Iterable[str]) -> tuple[str, ...]:
        """Instruments that the roles and the protection need, each once; the tachometer always: it feeds the board."""
        wanted = dict.fromkeys(self.source[role] for role in roles if role in self.source)
        wanted[self.source["speed"]] = None
        wanted.update(dict.fromkeys(channel.partition(".")[0] for channel in self.guard.channels()))
        return tuple(wanted)

    def close(self) -> None:
        for link in self.links.values():
            link.close()
        for lock in self.locks:
            lock.release()
        self.locks.clear()


def by_channel(measured: Mapping[str, Reading]) -> dict[str, Reading]:
    """What an adapter measured, keyed by the full channel name instead of the quantity."""
    return {reading.channel: reading for reading in measured.values()}


def named(name: str, error: Exception) -> Exception:
    """The same error, its text beginning with the instrument's name; a defect of an adapter is left as it is."""
    if isinstance(error, SweeprigError) and not error.what.startswith(f"{name}: "):
        error.what = f"{name}: {error.what}"
    return error


def value_of(name: str, result: Result) -> Any:
    if result.error is not None:
        raise named(name, result.error)
    return result.value


def open_rig(
    use: RigUse,
    clock: Clock,
    ports: Mapping[str, Any] | None = None,
    traffic: Traffic | None = None,
    pulse: Look | None = None,
) -> OpenRig:
    """Build the adapters, open the links, ask everyone who they are. Nothing is set yet.

    Drive and supply come first and are told to be off before anything else is waited for: whoever drove this rig
    before may have left it driving. What they answer is not looked at here; off is proved when the session opens.

    `ports`: the in-process ports of a simulated bench, for `simbench:` addresses. A failed opening closes all.
    """
    rig = assemble(use, clock, traffic)
    rig.pulse = pulse
    try:
        actuators = {rig.source[role]: None for role in ACTUATORS if role in rig.source}
        for name in actuators:
            open_link(rig, name, ports)
        rig.ask_off(ACTUATORS)
        for name in rig.adapters:
            if name not in actuators:
                open_link(rig, name, ports)
        identify(rig, rig.adapters)
    except BaseException:
        try:
            rig.ask_off(ACTUATORS)
        finally:
            rig.close()
        raise
    return rig


def assemble(use: RigUse, clock: Clock, traffic: Traffic | None = None) -> OpenRig:
    """The rig with its adapters and its guard, no link opened. ConfigError, RoleMissing for what cannot work."""
    adapters = build_adapters(use)
    source = {role: channel.partition(".")[0] for role, channel in use.rig.roles.items()}
    _check_actuators(adapters, source)
    for adapter in adapters.values():
        for pwm_hz in use.pwm_hz:
            adapter.check_window(Window(BOUNDS["cycle_window_s"], pwm_hz))
    return OpenRig(use, clock, adapters, {}, source, use.rig.roles, Guard(policies(use, source, adapters)), traffic)


def assemble_actuators(use: RigUse, clock: Clock) -> OpenRig:
    """Drive and supply alone, for switching off: what is wrong with a meter must not keep the drive from being told."""
    source = {role: channel.partition(".")[0] for role, channel in use.rig.roles.items()}
    adapters = {source[role]: build_adapter(use, source[role]) for role in ACTUATORS if role in source}
    return OpenRig(use, clock, adapters, {}, source, use.rig.roles, Guard([]))


def add_adapters(rig: OpenRig) -> None:
    """The instruments that `assemble_actuators` left out: for the proof."""
    for name in rig.use.rig.instruments:
        if name not in rig.adapters:
            rig.adapters[name] = build_adapter(rig.use, name)
    _check_actuators(rig.adapters, rig.source)


def open_link(
    rig: OpenRig, name: str, ports: Mapping[str, Any] | None = None, within_s: float = BOUNDS["open_s"]
) -> None:
    """Open one instrument's link; a LinkError carries the instrument's name, RigInUse that of who has it."""
    instrument, deadline = rig.use.rig.instruments[name], rig.clock.now() + within_s
    end = instrument.terminator_bytes
    if rig.pulse is not None:
        rig.pulse()
    if not instrument.in_process and not any(lock.address == instrument.address for lock in rig.locks):
        rig.locks.append(AddressLock(instrument.address, LINK, "has the link open").acquire())
    try:
        rig.links[name] = registry.open_link(instrument.address, rig.clock, deadline, ports=ports, terminator=end)
    except LinkError as error:
        raise named(name, error) from error


def build_adapters(use: RigUse) -> dict[str, Adapter]:
    """The adapters of a rig, not connected to anything: unknown names and bad options are refused here."""
    return {name: build_adapter(use, name) for name in use.rig.instruments}


def build_adapter(use: RigUse, name: str) -> Adapter:
    instrument = use.rig.instruments[name]
    kind = registry.find_adapter(instrument.adapter)
    dialect = {} if instrument.dialect is None else find_dialect(instrument.dialect, use.folder)
    setup = AdapterSetup(name, instrument.options, dialect, instrument.accuracies(), use.pulses_per_revolution)
    return cast(Adapter, kind(setup))


def _check_actuators(adapters: Mapping[str, Adapter], source: Mapping[str, str]) -> None:
    if not isinstance(adapters[source["drive"]], Drive):
        raise RoleMissing(
            f"the instrument '{source['drive']}' has the role drive but its adapter cannot set a duty",
            remedy="give the role to a PWM source",
            topic="rig",
        )
    if "supply" in source and not isinstance(adapters[source["supply"]], Supply):
        raise RoleMissing(
            f"the instrument '{source['supply']}' has the role supply but its adapter cannot set a voltage",
            remedy="give the role to a supply",
            topic="rig",
        )
    if "edge_age" not in adapters[source["speed"]].channels:
        raise RoleMissing(
            f"the tachometer '{source['speed']}' does not tell the age of its last edge; a locked rotor cannot be told",
            remedy="use an adapter with the channel edge_age",
            topic="rig",
        )


def identify(rig: OpenRig, names: Iterable[str]) -> None:
    """Ask who they are, all at once; one that does not answer is asked again after a resynchronise, within `wake_s`.

    A board that resets when its port is opened answers only after a second or two (manual: links). One that says to be
    another than before is asked once more: noise in one answer is no other instrument."""
    until = rig.clock.now() + BOUNDS["wake_s"]
    waiting, doubted = list(names), set[str]()
    while waiting:
        results = rig.ask({name: rig.adapters[name].identify() for name in waiting}, BOUNDS["exchange_s"])
        for name in list(waiting):
            error = results[name].error
            if (
                error is None
                and name not in doubted
                and rig.identities.get(name, results[name].value) != results[name].value
            ):
                doubted.add(name)
                _resynchronise(rig, name)
            elif error is None:
                rig.identities[name] = results[name].value
                rig.links[name].identified = True
                waiting.remove(name)
            elif not isinstance(error, LinkError) or rig.clock.now() >= until:
                raise named(name, error)
            else:
                _resynchronise(rig, name)


def _resynchronise(rig: OpenRig, name: str) -> None:
    try:
        rig.links[name].resynchronise(rig.clock.now() + BOUNDS["open_s"])
    except LinkError as error:
        raise named(name, error) from error


def configure(rig: OpenRig) -> dict[str, dict[str, str]]:
    """Configure every instrument and return its settings as it reports them."""
    names = list(rig.adapters)
    for name, result in rig.ask({n: rig.adapters[n].configure() for n in names}, BOUNDS["configure_s"]).items():
        value_of(name, result)
    results = rig.ask({n: rig.adapters[n].settings() for n in names}, BOUNDS["configure_s"])
    rig.settings = {name: value_of(name, result) for name, result in results.items()}
    return rig.settings


def same_instruments(rig: OpenRig, saved: Mapping[str, Identity]) -> None:
    """Refuse to go on with another instrument than the saved run had (maker, model and serial)."""
    for name, old in saved.items():
        new = rig.identities.get(name)
        if new is None or (new.maker, new.model, new.serial) != (old.maker, old.model, old.serial):
            shown = "nobody" if new is None else f"{new.maker} {new.model}, serial {new.serial}"
            raise WrongInstrument(
                f"the instrument '{name}' is another one than this run began with",
                value=f"{shown} instead of {old.maker} {old.model}, serial {old.serial}",
                remedy="connect the instrument of the saved run, or start a new run",
                topic="resume",
            )


def require_heartbeat(rig: OpenRig) -> None:
    """Without a heartbeat of the drive only the supervisor ends a hang: that must be within the locked-rotor time."""
    longest_s = BOUNDS["hang_s"] + BOUNDS["off_s"]
    if rig.drive.heartbeat_s is None and not rig.simulated and longest_s > rig.use.limits.locked_rotor_time:
        raise ConfigError(
            "the drive has no heartbeat: if the runner hung it could stay on for too long",
            value=f"{longest_s:g} s until the supervisor has switched it off",
            allowed=f"the locked-rotor time, {rig.use.limits.locked_rotor_time:g} s",
            remedy="Start with --attended and stay with the rig, or use a drive with a heartbeat",
            topic="safety",
        )
