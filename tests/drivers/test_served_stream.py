"""A tachometer that sends by itself, and a captured waveform, over a real pseudo-terminal and a real socket."""

from __future__ import annotations

import sys
import threading
from collections.abc import Iterator

import pytest
from sweeprig_drivers.line_tachometer import LineTachometer
from sweeprig_drivers.scope import ScpiScope

from sweeprig.clock import SystemClock
from sweeprig.conformance import over_link, perform
from sweeprig.dialects import find_dialect
from sweeprig.errors import LinkGarbled
from sweeprig.job import load, shipped
from sweeprig.link.link import Link
from sweeprig.link.registry import open_link
from sweeprig.roles import AdapterSetup, Identity, Window
from sweeprig.simbench.serve import serve

RATE = 20.0
PATIENCE_S = 20.0

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals are not to be had on Windows")


@pytest.fixture
def addresses() -> Iterator[dict[str, str]]:
    """The full bench, served at 20 times real time; nothing turns."""
    found: dict[str, str] = {}
    is_ready, told_to_stop = threading.Event(), threading.Event()

    def ready(opened: dict[str, str]) -> None:
        found.update(opened)
        is_ready.set()

    thread = threading.Thread(target=serve, args=(load(shipped("full-bench")), RATE, None, told_to_stop.is_set, ready))
    thread.start()
    assert is_ready.wait(PATIENCE_S)
    yield found
    told_to_stop.set()
    thread.join(PATIENCE_S)
    assert not thread.is_alive()


def identified(adapter: LineTachometer, link: Link, clock: SystemClock) -> Identity:
    """Asked again after a resynchronise, as a run does it: one of its lines may come before the answer.

    The answer takes some 2 ms of the 12.5 ms between lines, so ten attempts fail by chance once in 1e8 runs."""
    for _ in range(9):
        try:
            return perform(adapter.identify(), over_link(link, clock))
        except LinkGarbled:
            link.resynchronise(clock.now() + PATIENCE_S)
    return perform(adapter.identify(), over_link(link, clock))


def test_a_streaming_tachometer_over_a_terminal(addresses: dict[str, str]) -> None:
    """Identity amid its lines, a reading of fresh lines, and all of it again after a resynchronise that waits for no
    silence: there is none."""
    clock = SystemClock()
    link = open_link(addresses["tachometer"], clock, clock.now() + PATIENCE_S)
    adapter = LineTachometer(AdapterSetup("tachometer", {}, find_dialect("speed-lines", None)))
    exchange = over_link(link, clock)
    assert addresses["tachometer"].startswith("serial:")
    for _ in range(2):
        assert identified(adapter, link, clock).simulated
        clock.wait(clock.now() + 0.2)
        reading = perform(adapter.measure(Window(1.0)), exchange)["speed"]
        assert (reading.value, reading.flags) == (None, ("no_data:no_edges",))
        assert reading.raw == "n 0.0 1/min | n 0.0 1/min | n 0.0 1/min | n 0.0 1/min"
        link.resynchronise(clock.now() + PATIENCE_S)
    link.close()


def test_a_waveform_over_a_socket(addresses: dict[str, str]) -> None:
    """1000 bytes of any value, terminators among them or not, arrive as one block: the idle node's level is read."""
    clock = SystemClock()
    link = open_link(addresses["node"], clock, clock.now() + PATIENCE_S)
    setup = AdapterSetup("node", {"trace_channel": 1}, find_dialect("measure-channel-list", None))
    adapter, exchange = ScpiScope(setup), over_link(link, clock)
    perform(adapter.identify(), exchange)
    readings = perform(adapter.measure(Window(0.5)), exchange)
    assert readings["duty"].flags == ("no_data:overload",)
    assert readings["highest"].value == pytest.approx(0.0, abs=0.5)
    assert readings["lowest"].value == pytest.approx(0.0, abs=0.5)
    link.close()
