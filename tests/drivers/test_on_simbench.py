"""The adapters on the simulated bench, in process, through real links and `together`."""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest
from sweeprig_drivers.board import Board
from sweeprig_drivers.multimeter import ScpiMultimeter
from sweeprig_drivers.scope import ScpiScope
from sweeprig_drivers.supply import ScpiSupply

from sweeprig.conformance import checks, over_link, perform
from sweeprig.dialects import find_dialect
from sweeprig.job import load, shipped
from sweeprig.link.link import Link
from sweeprig.link.registry import open_link
from sweeprig.link.together import together
from sweeprig.quantities import Reading
from sweeprig.roles import Adapter, AdapterSetup, DriveSetting, Steps, SupplySetting, Window
from sweeprig.simbench.bench import Bench
from sweeprig.simbench.build import build

KINDS: dict[str, Callable[[AdapterSetup], Adapter]] = {
    "meter": ScpiMultimeter, "scope": ScpiScope, "supply": ScpiSupply, "board": Board,
}  # fmt: skip
DRIVE = (DriveSetting(1000.0, 60.0), DriveSetting(250.0, 62.5))
SUPPLY = (SupplySetting(12.0, 1.5), SupplySetting(5.0, 0.5))
SETTINGS: dict[str, tuple[DriveSetting, DriveSetting] | tuple[SupplySetting, SupplySetting] | None] = {
    "meter": None, "scope": None, "supply": SUPPLY, "board": DRIVE,
}  # fmt: skip


@pytest.fixture
def bench() -> Bench:
    """The README's demo job, motor cold and still."""
    return build(load(shipped("demo")))


def adapter_for(name: str) -> Adapter:
    job = load(shipped("demo"))
    instrument = job.rig.instruments[name]
    dialect = {} if instrument.dialect is None else find_dialect(instrument.dialect, None)
    return KINDS[name](
        AdapterSetup(name, instrument.options, dialect, pulses_per_revolution=job.motor.pulses_per_revolution)
    )


def link_to(bench: Bench, name: str) -> Link:
    return open_link(f"simbench:{name}", bench.clock, bench.clock.now() + 5.0, ports=bench.ports)


@pytest.mark.parametrize("name", sorted(KINDS))
def test_our_adapters_keep_the_contract_on_the_simulated_bench(name: str, bench: Bench) -> None:
    """The same suite as on scripted instruments passes over a link, whose instrument keeps its settings throughout."""
    link = link_to(bench, name)
    found = checks(lambda: adapter_for(name), lambda: over_link(link, bench.clock), SETTINGS[name])
    assert [check for check in found if not check.passed] == []


@pytest.mark.parametrize("name", sorted(KINDS))
def test_asking_changes_nothing(name: str, bench: Bench) -> None:
    """Identity, settings and readings obey no state-changing message: the bench counts them."""
    adapter, link = adapter_for(name), link_to(bench, name)
    exchange = over_link(link, bench.clock)
    perform(adapter.identify(), exchange)
    perform(adapter.settings(), exchange)
    perform(adapter.measure(Window(0.5)), exchange)
    assert bench.state_changes[name] == 0


def test_side_by_side_they_see_the_running_motor(bench: Bench) -> None:
    """At 12 V and 60 % of 1 kHz all four read what the bench really does; reading takes little more than the window."""
    adapters, links = {name: adapter_for(name) for name in KINDS}, {name: link_to(bench, name) for name in KINDS}
    for name, adapter in adapters.items():
        exchange = over_link(links[name], bench.clock)
        perform(adapter.identify(), exchange)
        perform(adapter.configure(), exchange)
    supply, board = adapters["supply"], adapters["board"]
    assert isinstance(supply, ScpiSupply)
    assert isinstance(board, Board)
    feed = over_link(links["supply"], bench.clock)
    perform(supply.apply(SUPPLY[0]), feed)
    perform(supply.switch_on(), feed)
    drive = over_link(links["board"], bench.clock)
    perform(board.apply(DRIVE[0]), drive)
    perform(board.switch_on(), drive)
    perform(board.measure(Window(8.0)), drive)
    began, angle = bench.now, bench.plant_now().angle  # type: ignore[attr-defined] # the true angle is the plant's own
    steps: dict[str, tuple[Link, Steps[dict[str, Reading]]]] = {
        name: (links[name], adapter.measure(Window(1.0, 1000.0))) for name, adapter in adapters.items()
    }
    results = together(steps, bench.clock, bench.now + 5.0)
    took, turned = bench.now - began, bench.plant_now().angle - angle  # type: ignore[attr-defined] # as above
    readings = {reading.channel: reading for result in results.values() for reading in result.get().values()}
    values = {channel: reading.value for channel, reading in readings.items()}
    assert 1.0 <= took <= 1.5
    # the simulated truth; 2 % for the half gate by which the two windows differ while friction wanders
    assert values["board.speed"] == pytest.approx(turned / took * 60.0 / (2.0 * math.pi), rel=0.02)
    assert values["scope.duty"] == pytest.approx(60.0, abs=0.2)
    assert values["scope.frequency"] == pytest.approx(1000.0, rel=1e-3)
    assert values["supply.volts"] == pytest.approx(12.0, abs=0.05)
    assert [reading.flags for reading in readings.values()] == [()] * 8
    edge_gap = values["board.edge_gap"]
    assert edge_gap is not None
    assert edge_gap < 0.1


def test_a_lapsed_heartbeat_is_seen_when_switching_on(bench: Bench) -> None:
    """The board stops by itself after 2 s of silence and queues why; after that the output is off until asked again."""
    board, exchange = adapter_for("board"), over_link(link_to(bench, "board"), bench.clock)
    assert isinstance(board, Board)
    perform(board.identify(), exchange)
    perform(board.configure(), exchange)
    assert board.power_on is True
    perform(board.apply(DRIVE[0]), exchange)
    perform(board.switch_on(), exchange)
    bench.advance(bench.now + 2.5)
    assert [happened.why for happened in bench.record if happened.what == "drive_off"] == ["heartbeat"]
    assert perform(board.settings(), exchange)["output"] == "0"
