"""Faults of motor, stage, supply and tachometer: a machine that passes everything on and alters what a fault alters.

Each begins at a bench time and ends at one. The physics stays the machine's own; instruments and ports are not here.
"""

from __future__ import annotations

import heapq
import math
import random
from collections.abc import Callable, Iterator
from typing import Any, NamedTuple, Protocol, runtime_checkable

from sweeprig.errors import ConfigError
from sweeprig.job.fault_models import SimulatedFault
from sweeprig.simbench.bench import Struck
from sweeprig.simbench.chopper import DIODE_DROP_V, Chopper, chopper
from sweeprig.simbench.loose_tach import LooseTach
from sweeprig.simbench.stage import PlainLowSide, Stage

BREAKDOWN_V = 60.0
"""Drain voltage at which a switch without freewheel diode ends the current. Common practice, no source: a 55 V part."""
PUMPED_UP = 1.5
BINDING_STEP_S = 0.5
OF_TACH = ("broken_tach_wire", "loose_coupling")


class Drive(NamedTuple):
    """The gate signal: as commanded, or as a fault has it."""

    pwm_hz: float
    duty_percent: float
    on: bool


class Feed(NamedTuple):
    """The supply's setting, likewise."""

    volts: float
    current_limit_amps: float
    on: bool


@runtime_checkable
class CanBind(Protocol):
    """A machine whose bearing can go bad."""

    def bind(self, extra_nm: float) -> None: ...


@runtime_checkable
class HasStage(Protocol):
    """A machine whose stage can be changed."""

    def use_stage(self, stage: Stage) -> Stage: ...


class NoDiode(PlainLowSide):
    """The low-side stage without its diode: the node rises until the switch breaks down, and the current soon ends.

    Left out: while the switch is in breakdown the current also comes from the supply.
    """

    def setting(
        self, supply_v: float, resistance_ohm: float, inductance_henry: float, pwm_hz: float, duty_percent: float,
        conducts: bool,
    ) -> Chopper:  # fmt: skip
        drop = max(DIODE_DROP_V, BREAKDOWN_V - supply_v)
        duty = duty_percent if conducts else 0.0
        return chopper(supply_v, resistance_ohm, inductance_henry, pwm_hz, duty, diode_drop_v=drop)


class FaultyMachine:
    """Keeps the machine's protocol: what is not altered here is the machine's own.

    faults   of place `rig`, in the order of the rig file, each with the generator of its random times
    struck   gets an entry for each fault that begins
    """

    def __init__(
        self,
        machine: Any,
        faults: list[tuple[SimulatedFault, random.Random]],
        pulses_per_revolution: float,
        struck: list[Struck],
    ) -> None:
        self._machine = machine
        self._struck = struck
        self._drive, self._feed = Drive(1000.0, 0.0, False), Feed(0.0, 0.0, False)
        self._tach = LooseTach(machine, pulses_per_revolution)
        self._reversed_since: float | None = None
        self._reversed_vs = 0.0
        self._own_stage: Stage | None = None
        self._bound_nm = 0.0
        self._in_force: dict[int, SimulatedFault] = {}
        self._lifted: set[int] = set()
        self._due: list[tuple[float, int, int, Callable[[int], None]]] = []
        self._faults = faults
        self._order = 0
        for place, (spec, _) in enumerate(faults):
            _require(machine, spec)
            end = math.inf if spec.lasts is None else (spec.start or 0.0) + spec.lasts
            if end > machine.now:
                self._at(spec.start or 0.0, place, self._begin)
                self._at(end, place, self._end)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._machine, name)

    # ---- as the bench sees it ------------------------------------------------------------------------------------

    @property
    def edges(self) -> int:
        return self._tach.edges

    @property
    def last_edge_at(self) -> float:
        return self._tach.last_edge_at

    @property
    def motor_volt_seconds(self) -> float:
        """∫ V dt between the meter's clips, which stay on the motor's leads: while these are swapped it runs back."""
        true = float(self._machine.motor_volt_seconds)
        since = self._reversed_since
        return true + self._reversed_vs if since is None else 2.0 * since - true + self._reversed_vs

    def wave(self) -> Any:
        """None while the leads are swapped: no instrument here resolves a period of a voltage that runs backwards."""
        return self._machine.wave() if self._reversed_since is None else None

    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None:
        self._drive = Drive(pwm_hz, duty_percent, on)
        self._apply()

    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None:
        self._feed = Feed(volts, current_limit_amps, on)
        self._apply()

    def advance(self, to: float) -> None:
        """Let the physics run until `to` (s), stopping where a fault begins, ends or changes."""
        while self._due and self._due[0][0] <= to:
            time, _, place, act = heapq.heappop(self._due)
            if time > self._machine.now:
                self._machine.advance(time)
            act(place)
        self._machine.advance(to)

    # ---- beginning and end ---------------------------------------------------------------------------------------

    def _at(self, time: float, place: int, act: Callable[[int], None]) -> None:
        self._order += 1
        heapq.heappush(self._due, (time, self._order, place, act))

    def _begin(self, place: int) -> None:
        spec = self._faults[place][0]
        first = not self._others(spec)
        self._in_force[place] = spec
        self._struck.append(Struck(self._machine.now, spec.kind, "", 0))
        if spec.kind in OF_TACH and first:
            self._tach.let_go(spec.seconds)
        elif spec.kind == "reverse_rotation" and first:
            self._reversed_since = float(self._machine.motor_volt_seconds)
        elif spec.kind == "missing_diode" and first:
            self._own_stage = self._machine.use_stage(NoDiode())
        elif spec.kind == "brush_bounce":
            self._next_bounce(place)
        elif spec.kind == "motor_overheats":
            self._at(self._machine.now + BINDING_STEP_S, place, self._bind_more)
        self._apply()

    def _end(self, place: int) -> None:
        spec = self._in_force.pop(place)
        self._lifted.discard(place)
        if self._others(spec):
            pass
        elif spec.kind in OF_TACH:
            self._tach.follow()
        elif spec.kind == "reverse_rotation" and self._reversed_since is not None:
            true = float(self._machine.motor_volt_seconds)
            self._reversed_vs += 2.0 * (self._reversed_since - true)
            self._reversed_since = None
        elif spec.kind == "missing_diode" and self._own_stage is not None:
            self._machine.use_stage(self._own_stage)
        self._apply()

    def _others(self, spec: SimulatedFault) -> bool:
        """Another fault of the same kind (of the tachometer: of either kind) is in force: both are one."""
        same = OF_TACH if spec.kind in OF_TACH else (spec.kind,)
        return any(other.kind in same for other in self._in_force.values())

    def _next_bounce(self, place: int) -> None:
        spec, rng = self._faults[place]
        self._at(self._machine.now + rng.expovariate(spec.number), place, self._lift)

    def _lift(self, place: int) -> None:
        if place in self._in_force:
            self._lifted.add(place)
            self._at(self._machine.now + self._in_force[place].seconds, place, self._fall)
            self._apply()

    def _fall(self, place: int) -> None:
        if place in self._in_force:
            self._lifted.discard(place)
            self._next_bounce(place)
            self._apply()

    def _bind_more(self, place: int) -> None:
        if place in self._in_force:
            self._at(self._machine.now + BINDING_STEP_S, place, self._bind_more)
            self._apply()

    # ---- what is in force ----------------------------------------------------------------------------------------

    def _apply(self) -> None:
        """Tell the machine its drive, supply and friction as the faults in force have them."""
        machine, drive, feed, bound = self._machine, self._drive, self._feed, 0.0
        for place, spec in sorted(self._in_force.items()):
            drive = self._driven(drive, place, spec)
            feed = _fed(feed, spec)
            bound += self._binding(spec)
        if bound != self._bound_nm:
            self._bound_nm = bound
            machine.bind(bound)
        machine.set_supply(*feed)
        machine.set_drive(*drive)

    def _driven(self, drive: Drive, place: int, spec: SimulatedFault) -> Drive:
        if spec.kind == "switch_short":
            return Drive(drive.pwm_hz, 100.0, True)
        if spec.kind == "switch_open" or place in self._lifted:
            return drive._replace(on=False)
        return drive

    def _binding(self, spec: SimulatedFault) -> float:
        """Extra friction, Nm. A motor that overheats: even growth up to the torque at rest on the set voltage."""
        if spec.kind == "seized_rotor":
            return math.inf
        if spec.kind != "motor_overheats":
            return 0.0
        truth = self._machine.truth
        most = truth.torque_constant_nm_per_a * self._feed.volts / truth.resistance_ohm
        part = (self._machine.now - (spec.start or 0.0)) / spec.seconds if spec.seconds > 0.0 else 1.0
        return float(most * min(1.0, max(0.0, part)))


def _fed(feed: Feed, spec: SimulatedFault) -> Feed:
    if spec.kind == "supply_dropout":
        return feed._replace(volts=min(feed.volts, spec.voltage or 0.0))
    if spec.kind == "supply_pumped_up" and feed.on:
        return feed._replace(volts=max(feed.volts, feed.volts * PUMPED_UP if spec.voltage is None else spec.voltage))
    return feed


def _require(machine: object, spec: SimulatedFault) -> None:
    """ConfigError where this machine cannot have the fault."""
    needs: dict[str, type] = {"seized_rotor": CanBind, "motor_overheats": CanBind, "missing_diode": HasStage}
    needed = needs.get(spec.kind)
    if needed is not None and not isinstance(machine, needed):
        raise ConfigError(
            "this kind of simulated motor cannot have such a fault",
            value=spec.kind,
            allowed=", ".join(_of_any_motor()),
            remedy="Take it out of [[simulated_faults]], or use a brushed motor",
            topic="simbench",
        )


def _of_any_motor() -> Iterator[str]:
    yield from (
        "switch_short", "switch_open", "loose_coupling", "broken_tach_wire", "supply_dropout", "supply_pumped_up",
        "brush_bounce", "reverse_rotation",
    )  # fmt: skip
