"""A small plant with known numbers, and instruments on a bench with it, for the tests of the simulated instruments."""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import pytest

from sweeprig.job import load
from sweeprig.job.fault_models import SimulatedFault
from sweeprig.quantities import Accuracy
from sweeprig.simbench import build
from sweeprig.simbench.bench import Bench
from sweeprig.simbench.board import Board
from sweeprig.simbench.chopper import Wave
from sweeprig.simbench.instrument import Instrument, Setup
from sweeprig.simbench.multimeter import Multimeter
from sweeprig.simbench.pwm_timer import PwmTimer
from sweeprig.simbench.scope import Scope
from sweeprig.simbench.supply import Supply

Kind = TypeVar("Kind", bound=Instrument)


class FakePlant:
    """A rotor of constant pulse rate between two times; motor voltage = supply × duty, current 0.25 A while driven."""

    def __init__(self, now: float = 0.0) -> None:
        self.now = now
        self.pulse_hz = 100.0
        self.turns_from = 0.0
        self.turns_until = math.inf
        self.earlier_edges, self.earlier_last_edge_at = 0, -math.inf
        self.settings: list[tuple[float, str, tuple[float, float, bool]]] = []
        self.drive = (1000.0, 0.0, False)
        self.supply = (0.0, 0.0, False)
        self.supply_limited = False
        self.motor_volt_seconds = 0.0
        self.supply_volt_seconds = 0.0
        self.supply_amp_seconds = 0.0
        self.motor_amp_seconds = self.switch_amp_seconds = self.node_volt_seconds = 0.0
        self.means: dict[str, float] = {}
        self.winding_degc = 20.0
        self.present_wave: Wave | None = None
        self.phase_of: Callable[[float], float] = lambda _: 0.0

    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None:
        self.drive = (pwm_hz, duty_percent, on)
        self.settings.append((self.now, "drive", self.drive))

    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None:
        self.supply = (volts, current_limit_amps, on)
        self.settings.append((self.now, "supply", self.supply))

    def advance(self, to: float) -> None:
        seconds = to - self.now
        volts = self.supply[0] if self.supply[2] else 0.0
        duty = self.drive[1] / 100.0 if self.drive[2] else 0.0
        self.motor_volt_seconds += volts * duty * seconds
        self.supply_volt_seconds += volts * seconds
        self.node_volt_seconds += volts * (1.0 - duty) * seconds
        self.supply_amp_seconds += 0.25 * duty * seconds
        for name, mean in self.means.items():
            setattr(self, name, getattr(self, name) + mean * seconds)
        self.now = to

    @property
    def edges(self) -> int:
        turned = min(self.now, self.turns_until) - self.turns_from
        return self.earlier_edges + max(0, math.floor(turned * self.pulse_hz))

    @property
    def last_edge_at(self) -> float:
        edges = self.edges - self.earlier_edges
        return self.turns_from + edges / self.pulse_hz if edges else self.earlier_last_edge_at

    def stop_and_turn_again(self, turns_from: float) -> None:
        """At rest from now until `turns_from`, then turning as before; the edges so far stay counted."""
        self.earlier_edges, self.earlier_last_edge_at = self.edges, self.last_edge_at
        self.turns_from = turns_from

    def wave(self) -> Wave | None:
        return self.present_wave

    def pwm_phase_s(self) -> float:
        return self.phase_of(self.now)


class Bed:
    """A bench with a fake plant, and a client that asks and waits as a program would."""

    def __init__(self) -> None:
        self.plant = FakePlant()
        self.bench = Bench(self.plant)

    def add(
        self,
        kind: type[Kind],
        connected_to: str = "none",
        accuracy: dict[str, Accuracy] | None = None,
        options: dict[str, object] | None = None,
        errors: dict[str, float] | None = None,
        pwm_timer: PwmTimer | None = None,
    ) -> Kind:
        name = kind.model
        instrument = kind(
            Setup(
                name=name,
                serial="SIM1",
                errors_rng=random.Random(f"1/{name}"),
                noise=random.Random(f"1/1/{name}"),
                connected_to=connected_to,
                accuracy=accuracy or {},
                options=options or {},
                errors=errors or {},
                pwm_timer=pwm_timer,
            ),
            self.bench,
        )
        self.bench.add(instrument)
        instrument.port.open()
        return instrument

    def board(self, **more: Any) -> Board:
        return self.add(Board, **more)

    def multimeter(self, connected_to: str = "across_motor", **more: Any) -> Multimeter:
        return self.add(Multimeter, connected_to, **more)

    def bench_supply(self, **more: Any) -> Supply:
        return self.add(Supply, "supply_terminals", **more)

    def scope(self, connected_to: str = "drive_signal", **more: Any) -> Scope:
        return self.add(Scope, connected_to, **more)

    def tell(self, instrument: Instrument, *messages: str) -> None:
        """Send set messages and let their bytes arrive."""
        for message in messages:
            instrument.port.write(message.encode("ascii") + b"\n")
        self.bench.advance(self.bench.now + 0.02)

    def ask(self, instrument: Instrument, message: str, within_s: float = 20.0) -> str:
        """Send a query and wait for its answer as a link on the bench's clock does; "" when none came in time."""
        port = instrument.port
        port.write(message.encode("ascii") + b"\n")
        self.bench.clock.wait(self.bench.now + within_s, (Awaited(instrument),))
        return port.read().decode("ascii").removesuffix("\n")


class Awaited:
    """What the clock waits on: one instrument's port."""

    def __init__(self, instrument: Instrument) -> None:
        self._port = instrument.port

    def fileno(self) -> int | None:
        return None

    def ready_at(self) -> float:
        return self._port.next_ready()


@pytest.fixture
def bed() -> Bed:
    return Bed()


Faulty = Callable[..., Bench]


class Client:
    """A program at one instrument's port, which waits as a link on the bench's clock does."""

    def __init__(self, bench: Bench, name: str) -> None:
        self.bench, self.port = bench, bench.ports[name]
        self.port.open()

    def fileno(self) -> int | None:
        return None

    def ready_at(self) -> float:
        return self.port.next_ready()

    def pieces(self, message: str = "", seconds: float = 1.0) -> list[tuple[float, bytes]]:
        """Write a message; all that comes within `seconds`: (seconds after the message, bytes)."""
        began = self.bench.now
        if message:
            self.port.write(message.encode("ascii") + b"\n")
        came = []
        while self.bench.now < began + seconds:
            self.bench.clock.wait(began + seconds, (self,))
            data = self.port.read()
            came += [(self.bench.now - began, data)] if data else []
        return came

    def ask(self, message: str = "", seconds: float = 1.0) -> bytes:
        return b"".join(data for _, data in self.pieces(message, seconds))


@pytest.fixture
def faulty(short_job: Path) -> Faulty:
    """`faulty({"kind": …}, …, session=1)`: the short job's bench with these faults."""

    def made(*faults: dict[str, object], session: int = 1) -> Bench:
        job = load(short_job)
        specs = tuple(SimulatedFault.model_validate(fault) for fault in faults)
        rig = job.rig.model_copy(update={"simulated_faults": specs})
        return build(job.model_copy(update={"rig": rig}), session)

    return made


def on(kind: str, instrument: str = "supply", **more: object) -> dict[str, object]:
    return {"kind": kind, "instrument": instrument, **more}
