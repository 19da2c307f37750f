"""The same faults on real sockets and pseudo-terminals, stepped by hand: no thread, no server."""

from __future__ import annotations

import errno
import os
import select
import socket
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from sweeprig.job import load
from sweeprig.job.fault_models import SimulatedFault
from sweeprig.simbench import Bench, build
from sweeprig.simbench.endpoints import Endpoint, endpoint
from sweeprig.simbench.serve import served_rig

needs_pty = pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals are not to be had on Windows")


class Served:
    """One served instrument with one fault, its bench and a client of it."""

    def __init__(self, bench: Bench, name: str) -> None:
        self.bench = bench
        instrument = bench.instruments[name]
        self.endpoint: Endpoint = endpoint(instrument.port, serial=instrument.byte_s > 0.0)
        self.clients: list[socket.socket] = []

    @property
    def place(self) -> tuple[str, int]:
        return "127.0.0.1", int(self.endpoint.address.split("::")[2])

    @property
    def node(self) -> Path:
        return Path(self.endpoint.address.removeprefix("serial:"))

    def client(self) -> socket.socket:
        made = socket.create_connection(self.place, timeout=5.0)
        self.clients.append(made)
        self.turn()
        return made

    def turn(self, seconds: float = 0.0) -> None:
        """What the serving loop does in one round, bench time gone on by so much."""
        handle = self.endpoint.handle()
        if handle is not None:
            select.select([handle], [], [], 0.05)
        self.endpoint.take()
        self.bench.advance(self.bench.now + seconds)
        self.endpoint.give()

    def close(self) -> None:
        for client in self.clients:
            client.close()
        self.endpoint.close()


@pytest.fixture
def served(short_job: Path) -> Iterator[Callable[..., Served]]:
    """`served("board", "late_reply", exchange=1, …)`."""
    made: list[Served] = []

    def serve_one(name: str, kind: str, **more: object) -> Served:
        job = load(short_job)
        spec = SimulatedFault.model_validate({"kind": kind, "instrument": name, **more})
        rig = job.rig.model_copy(update={"simulated_faults": (spec,)})
        made.append(Served(build(job.model_copy(update={"rig": rig})), name))
        return made[-1]

    yield serve_one
    for each in made:
        each.close()


def test_late_on_a_socket(served: Callable[..., Served]) -> None:
    """Nothing for the stated bench time, then the whole answer."""
    meter = served("meter", "late_reply", exchange=1, delay="3 s")
    client = meter.client()
    client.sendall(b"*OPC?\n")
    meter.turn(2.9)
    assert select.select([client], [], [], 0.0)[0] == []
    meter.turn(0.2)
    assert client.recv(64) == b"1\n"


def test_a_closed_socket(served: Callable[..., Served]) -> None:
    """The client reads an orderly end; the next one is served."""
    meter = served("meter", "close", exchange=1)
    client = meter.client()
    client.sendall(b"*OPC?\n")
    meter.turn(0.1)
    assert client.recv(64) == b""
    again = meter.client()
    again.sendall(b"*OPC?\n")
    meter.turn(0.1)
    assert again.recv(64) == b"1\n"


def test_a_reset_socket(served: Callable[..., Served]) -> None:
    """The client gets the system's reset, not an end."""
    meter = served("meter", "reset", exchange=1)
    client = meter.client()
    client.sendall(b"*OPC?\n")
    meter.turn(0.1)
    with pytest.raises(ConnectionResetError):
        client.recv(64)


def test_a_refused_socket(served: Callable[..., Served]) -> None:
    """For its time nobody listens, so the system refuses; then the same port number answers."""
    meter = served("meter", "refuse", start="1 s", lasts="2 s")
    place = meter.place
    meter.turn(1.1)
    with pytest.raises(ConnectionRefusedError):
        socket.create_connection(place, timeout=5.0)
    meter.turn(2.0)
    assert meter.place == place
    client = meter.client()
    client.sendall(b"*OPC?\n")
    meter.turn(0.1)
    assert client.recv(64) == b"1\n"


def test_the_kth_opening_of_a_socket_is_refused(served: Callable[..., Served]) -> None:
    """It is taken and reset at once: only then can openings be counted."""
    meter = served("meter", "refuse", exchange=1)
    with pytest.raises(ConnectionResetError):
        meter.client().recv(64)
    client = meter.client()
    client.sendall(b"*OPC?\n")
    meter.turn(0.1)
    assert client.recv(64) == b"1\n"


@needs_pty
def test_split_on_a_terminal(served: Callable[..., Served]) -> None:
    """Half of the answer, and the other half when its time has come."""
    board = served("board", "split_reply", exchange=1, delay="2 s")
    handle = os.open(board.node, os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK)
    os.write(handle, b"OUTP?;OUTP?\n")
    board.turn(0.1)
    board.turn(0.1)
    assert os.read(handle, 64) == b"0;"
    with pytest.raises(BlockingIOError):
        os.read(handle, 64)
    board.turn(2.0)
    assert os.read(handle, 64) == b"0\n"
    os.close(handle)


@needs_pty
def test_a_terminal_that_moves(served: Callable[..., Served]) -> None:
    """Its node vanishes under the client, the link with it; after the delay the link leads to another node."""
    board = served("board", "node_moves", exchange=1, delay="2 s")
    former = board.node.resolve()
    handle = os.open(board.node, os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK)
    os.write(handle, b"*OPC?\n")
    board.turn(0.1)
    board.turn(0.1)
    with pytest.raises(OSError, match=os.strerror(errno.EIO)):
        os.write(handle, b"*OPC?\n")
    os.close(handle)
    assert not board.node.is_symlink()
    board.turn(2.0)
    assert board.node.resolve() != former
    handle = os.open(board.node, os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK)
    os.write(handle, b"*OPC?\n")
    board.turn(0.1)
    board.turn(0.1)
    assert os.read(handle, 64) == b"1\n"
    os.close(handle)
    folder = board.node.parent
    board.endpoint.close()
    assert not folder.exists()


@needs_pty
def test_a_served_rig_with_a_moving_terminal_is_accepted(short_job: Path, served: Callable[..., Served]) -> None:
    """The rig file that a served bench writes may name the link, at a rate above 1."""
    board = served("board", "node_moves", exchange=1)
    rig = load(short_job).rig
    addresses = {name: f"TCPIP0::127.0.0.1::{place + 5000}::SOCKET" for place, name in enumerate(rig.instruments)}
    from sweeprig.job.frozen_text import rig_document

    text = rig_document(served_rig(rig, addresses | {"board": board.endpoint.address}, 20.0))
    (short_job.parent / "shelter-bench.toml").write_text(text, "utf-8")
    assert load(short_job).rig.instruments["board"].address == board.endpoint.address
