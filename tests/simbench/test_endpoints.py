"""Sockets and pseudo-terminals of the served bench, stepped by hand: no thread, no server."""

from __future__ import annotations

import os
import select
import socket
import sys
import tty
from collections.abc import Iterator
from contextlib import suppress
from typing import TYPE_CHECKING

import pytest

from sweeprig.simbench.endpoints import Endpoint, SocketEndpoint, endpoint

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

needs_pty = pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals are not to be had on Windows")


@pytest.fixture
def terminal(bed: Bed) -> Iterator[Endpoint]:
    made = endpoint(bed.board().port, serial=True)
    made.port.close()
    yield made
    made.close()


@pytest.fixture
def listening(bed: Bed) -> Iterator[Endpoint]:
    made = endpoint(bed.multimeter().port, serial=False)
    made.port.close()
    yield made
    made.close()


def opened(terminal: Endpoint) -> int:
    return os.open(terminal.address.removeprefix("serial:"), os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK)


def answer(bed: Bed, served: Endpoint) -> None:
    """Let the instrument take what was written and send what it says."""
    served.take()
    bed.bench.advance(bed.bench.now + 0.1)
    served.give()


@needs_pty
def test_the_terminal_is_raw_before_any_client(bed: Bed, terminal: Endpoint) -> None:
    """Bytes pass unchanged both ways, without echo, though the client sets nothing: all 256 values reach the board."""
    handle = opened(terminal)
    os.write(handle, b"*OPC?\n")
    answer(bed, terminal)
    assert os.read(handle, 64) == b"1\n"
    os.write(handle, bytes(value for value in range(256) if value != 10) + b"\n*ESR?\n")
    answer(bed, terminal)
    # power-on, the command error of a garbled line, and the device error of its 256 bytes being too many
    assert os.read(handle, 64) == b"136\n"
    os.close(handle)


@needs_pty
def test_a_client_that_left_takes_its_half_line_with_it(bed: Bed, terminal: Endpoint) -> None:
    """The end is seen though nobody tells; the next client's first message is understood."""
    first = opened(terminal)
    os.write(first, b"*ID")
    answer(bed, terminal)
    os.close(first)
    terminal.take()
    assert terminal.port.is_open is False
    second = opened(terminal)
    os.write(second, b"*OPC?\n")
    answer(bed, terminal)
    answer(bed, terminal)
    assert os.read(second, 64) == b"1\n"
    os.close(second)


@pytest.mark.skipif(sys.platform != "linux", reason="only Linux gives notice of an opening")
def test_a_terminal_at_rest_wakes_nobody_and_an_opening_does(terminal: Endpoint) -> None:
    """A master without a client always counts as readable, so another handle is waited on: silent until somebody opens,
    and again after he left."""
    for _ in range(2):
        terminal.take()
        resting = terminal.handle()
        assert resting is not None
        assert not terminal.unseen()
        assert select.select([resting], [], [], 0.0)[0] == []
        handle = opened(terminal)
        assert select.select([resting], [], [], 1.0)[0] == [resting]
        terminal.take()
        assert terminal.handle() not in (None, resting)
        assert terminal.port.is_open
        os.close(handle)
        terminal.take()


@needs_pty
def test_without_the_systems_notice_a_terminal_is_looked_at(bed: Bed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Then nothing is to be selected while no client is there, and the next look finds him."""
    monkeypatch.setattr("sweeprig.simbench.doorbell._watched", lambda _: None)
    made = endpoint(bed.board().port, serial=True)
    made.port.close()
    made.take()
    assert (made.handle(), made.unseen()) == (None, True)
    handle = opened(made)
    made.take()
    assert made.port.is_open
    assert not made.unseen()
    os.close(handle)
    made.close()


@needs_pty
def test_the_last_words_of_a_client_are_obeyed(bed: Bed, terminal: Endpoint) -> None:
    """OUTP ON written just before leaving still reaches the board."""
    handle = opened(terminal)
    tty.setraw(handle)
    os.write(handle, b"OUTP ON\n")
    os.close(handle)
    answer(bed, terminal)
    assert [happened.what for happened in bed.bench.record] == ["drive_on"]


def test_an_answer_larger_than_the_buffers_is_sent_in_pieces(bed: Bed, listening: Endpoint) -> None:
    """A client that does not read for a while loses nothing: the rest follows when there is room."""
    _, host, port, _ = listening.address.split("::")
    with socket.create_connection((host, int(port)), 10.0) as client:
        while not listening.port.is_open:
            listening.take()
        client.setblocking(False)
        listening.port.send("x" * 8_000_000)
        bed.bench.advance(1.0)
        listening.give()
        received = 0
        while received < 8_000_001:
            listening.give()
            with suppress(BlockingIOError):
                received += len(client.recv(1 << 20))
    assert received == 8_000_001


def test_a_network_instrument_has_a_socket_address(listening: Endpoint) -> None:
    """VISA resource syntax, on the loopback only."""
    assert isinstance(listening, SocketEndpoint)
    assert listening.address.startswith("TCPIP0::127.0.0.1::")
    assert listening.address.endswith("::SOCKET")
