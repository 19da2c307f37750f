"""Far ends for the link tests: a TCP peer, a pseudo-terminal and an in-process port driven by hand, a planned link.

No threads: the kernel keeps connections and bytes until the test plays the peer.
"""

from __future__ import annotations

import contextlib
import math
import os
import select
import socket
import sys
from collections.abc import Callable, Iterator, Sequence
from typing import Protocol

import pytest

from sweeprig.clock import SystemClock, Waitable
from sweeprig.link.base import BaseLink
from sweeprig.link.inprocess import InProcessLink
from sweeprig.link.registry import open_link
from sweeprig.roles import Reply

PATIENCE_S = 5.0
START = 100.0


class Far(Protocol):
    """The instrument's side of one link."""

    address: str

    def receive(self, size: int) -> bytes: ...
    def reply(self, data: bytes) -> None: ...
    def vanish(self) -> None: ...


class TcpFar:
    """A listening socket; the connection opened last is the one spoken to."""

    def __init__(self) -> None:
        self.listener = socket.create_server(("127.0.0.1", 0))
        self.listener.settimeout(PATIENCE_S)
        self.port = self.listener.getsockname()[1]
        self.address = f"TCPIP0::127.0.0.1::{self.port}::SOCKET"
        self.taken: list[socket.socket] = []

    def accept(self) -> socket.socket:
        taken, _ = self.listener.accept()
        taken.settimeout(PATIENCE_S)
        self.taken.append(taken)
        return taken

    @property
    def peer(self) -> socket.socket:
        if select.select([self.listener], [], [], 0 if self.taken else PATIENCE_S)[0]:
            self.accept()
        return self.taken[-1]

    def receive(self, size: int) -> bytes:
        data = b""
        peer = self.peer
        while len(data) < size and (more := peer.recv(size - len(data))):
            data += more
        return data

    def reply(self, data: bytes) -> None:
        self.peer.sendall(data)

    def vanish(self) -> None:
        self.peer.close()

    def close(self) -> None:
        self.listener.close()
        for taken in self.taken:
            taken.close()


class PtyFar:
    """A pseudo-terminal; the master is the instrument."""

    def __init__(self) -> None:
        import tty

        self.master, slave = os.openpty()
        tty.setraw(slave)
        self.device = os.ttyname(slave)
        self.slave = slave
        self.address = f"serial:{self.device}"

    def receive(self, size: int) -> bytes:
        data = b""
        while len(data) < size and select.select([self.master], [], [], PATIENCE_S)[0]:
            data += os.read(self.master, size - len(data))
        return data

    def reply(self, data: bytes) -> None:
        os.write(self.master, data)

    def vanish(self) -> None:
        self.close()

    def close(self) -> None:
        for handle in (self.master, self.slave):
            with contextlib.suppress(OSError):
                os.close(handle)


class PortFar:
    """An in-process port (`BytePort`) that the test feeds by hand."""

    address = "simbench:meter"

    def __init__(self) -> None:
        self.written = b""
        self.unread = b""
        self.gone = False
        self.opened = 0

    def open(self) -> None:
        self.opened += 1
        self.unread = b""

    def write(self, data: bytes) -> None:
        self.written += data

    def next_ready(self) -> float:
        return -math.inf if self.unread or self.gone else math.inf

    def read(self) -> bytes:
        if self.gone and not self.unread:
            raise ConnectionResetError("the peer closed the connection")
        data, self.unread = self.unread, b""
        return data

    def close(self) -> None:
        self.unread = b""

    def receive(self, size: int) -> bytes:
        data, self.written = self.written[:size], self.written[size:]
        return data

    def reply(self, data: bytes) -> None:
        self.unread += data

    def vanish(self) -> None:
        self.gone = True


class Pair:
    """An open link and its far end."""

    def __init__(self, link: BaseLink, far: Far, clock: SystemClock) -> None:
        self.link = link
        self.far = far
        self.clock = clock

    def ask(self, message: bytes, reply: Reply = Reply.LINE, early: bool = False) -> None:
        """Send, and see that the far end got it."""
        self.link.send(message, reply, self.clock.now() + 1.0, early)
        assert self.far.receive(len(message) + 1) == message + b"\n"

    def awaited(self, within_s: float = PATIENCE_S) -> bytes | None:
        """What `take` gives by then."""
        return wait_for(self.link, self.clock, within_s)

    def arrived(self) -> None:
        """Wait until bytes, or the end of the connection, have reached the link's side."""
        self.clock.wait(self.clock.now() + PATIENCE_S, on=(self.link,))


class JumpingClock:
    """Jumps to the next reply or to `until`; keeps what was waited on."""

    def __init__(self) -> None:
        self.t = START
        self.waits: list[tuple[float, tuple[Waitable, ...]]] = []

    def now(self) -> float:
        return self.t

    def utc(self) -> float:
        return self.t

    def wait(self, until: float, on: Sequence[Waitable] = ()) -> None:
        self.waits.append((until, tuple(on)))
        self.t = max(self.t, min([until, *(link.ready_at() for link in on)]))
        assert self.t < 1e9, "waited for ever"


class PlannedLink:
    """Answers each message after `delay` with `text`; None stays silent; an exception is raised by take or send."""

    def __init__(
        self, clock: JumpingClock, delay: float = 0.01, text: bytes | None = b"1.5", error: Exception | None = None
    ) -> None:
        self.clock = clock
        self.delay = delay
        self.text = text
        self.error = error
        self.error_at = "take"
        self.address = "planned"
        self.dirty = ""
        self.identified = True
        self.empty_lines = 0
        self.partial = b""
        self.sent: list[tuple[float, bytes, float, bool]] = []
        self.due = math.inf

    def send(self, message: bytes, reply: Reply, deadline: float, early: bool = False) -> None:
        if self.error is not None and self.error_at == "send":
            raise self.error
        self.sent.append((self.clock.t, message, deadline, early))
        if reply is not Reply.NOTHING and self.text is not None:
            self.due = self.clock.t + self.delay

    def take(self) -> bytes | None:
        if self.clock.t < self.due:
            return None
        self.due = math.inf
        if self.error is not None:
            raise self.error
        return self.text

    def declare_timeout(self) -> bytes:
        self.dirty = "no whole reply by the deadline"
        return self.partial

    def resynchronise(self, deadline: float) -> None:
        raise AssertionError(f"nothing below conduct heals a link ({deadline})")

    def close(self) -> None:
        raise AssertionError("the loop owns no link")

    def fileno(self) -> int | None:
        return None

    def ready_at(self) -> float:
        return self.due

    @property
    def sent_at(self) -> list[float]:
        return [round(at - START, 9) for at, *_ in self.sent]


Planned = type[PlannedLink]


def wait_for(link: BaseLink, clock: SystemClock, within_s: float) -> bytes | None:
    until = clock.now() + within_s
    raw = link.take()
    while raw is None and clock.now() < until:
        clock.wait(until, on=(link,))
        raw = link.take()
    return raw


@pytest.fixture
def jumping() -> JumpingClock:
    return JumpingClock()


@pytest.fixture
def planned() -> Planned:
    """The link double of the `together` tests; test files may not import each other."""
    return PlannedLink


@pytest.fixture
def clock() -> SystemClock:
    return SystemClock()


@pytest.fixture
def tcp_far() -> Iterator[TcpFar]:
    far = TcpFar()
    yield far
    far.close()


@pytest.fixture
def pty_far() -> Iterator[PtyFar]:
    if sys.platform == "win32":
        pytest.skip("no pseudo-terminals on Windows")
    far = PtyFar()
    yield far
    far.close()


@pytest.fixture
def port_far() -> PortFar:
    return PortFar()


@pytest.fixture
def opened(clock: SystemClock) -> Iterator[Callable[[Far], Pair]]:
    """Opens an identified link to a far end, and closes it after the test."""
    links: list[BaseLink] = []

    def open_to(far: Far) -> Pair:
        ports = {"meter": far} if isinstance(far, PortFar) else None
        link = open_link(far.address, clock, clock.now() + PATIENCE_S, ports=ports)
        assert isinstance(link, BaseLink)
        link.identified = True
        links.append(link)
        return Pair(link, far, clock)

    yield open_to
    for link in links:
        link.close()


@pytest.fixture(params=["tcp", "pty", "port"])
def pair(request: pytest.FixtureRequest, opened: Callable[[Far], Pair]) -> Pair:
    """One pair of every kind of link: the contract is the same for all."""
    return opened(request.getfixturevalue(f"{request.param}_far"))


@pytest.fixture
def port_pair(opened: Callable[[Far], Pair], port_far: PortFar) -> Pair:
    pair = opened(port_far)
    assert isinstance(pair.link, InProcessLink)
    return pair


@pytest.fixture
def tcp_pair(opened: Callable[[Far], Pair], tcp_far: TcpFar) -> Pair:
    return opened(tcp_far)


@pytest.fixture
def pty_pair(opened: Callable[[Far], Pair], pty_far: PtyFar) -> Pair:
    return opened(pty_far)
