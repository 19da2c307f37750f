"""Raw TCP against loopback servers: what only a network connection can do wrong. Rows: the failures of links.md."""

from __future__ import annotations

import socket
import struct
import sys
import threading
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from sweeprig.clock import SystemClock
from sweeprig.errors import ConfigError, LinkError, LinkGarbled, LinkLost, LinkMisuse, LinkTimeout
from sweeprig.link.registry import open_link
from sweeprig.link.tcp import TcpLink, parse_address
from sweeprig.link.together import together
from sweeprig.roles import Ask, Reply, Steps

if TYPE_CHECKING:
    from tests.link.conftest import Pair, TcpFar

linux_only = pytest.mark.skipif(sys.platform != "linux", reason="relies on how Linux counts")


def reading(within_s: float) -> Steps[bytes]:
    answer = yield Ask(b"READ?", within_s=within_s)
    return answer.raw


def test_row_1_reply_then_close(tcp_pair: Pair) -> None:
    """Row A1: the reply that came before the peer closed is taken; the next message is LinkLost, not a timeout."""
    tcp_pair.ask(b"READ?")
    tcp_pair.far.reply(b"1.5\n")
    tcp_pair.far.vanish()
    assert tcp_pair.awaited() == b"1.5"
    tcp_pair.arrived()
    with pytest.raises(LinkLost, match="peer closed"):
        tcp_pair.link.send(b"READ?", Reply.LINE, tcp_pair.clock.now() + 5.0)


def test_row_1_half_a_reply_then_close(tcp_pair: Pair) -> None:
    """Rows A1 and A7: a reply cut off by the close is no value; its bytes are in the error."""
    tcp_pair.ask(b"READ?")
    tcp_pair.far.reply(b"1.2")
    tcp_pair.far.vanish()
    with pytest.raises(LinkLost) as caught:
        tcp_pair.awaited()
    assert caught.value.partial == b"1.2"


def test_row_2_resynchronise_ends_where_nobody_listens(tcp_pair: Pair, tcp_far: TcpFar) -> None:
    """Row A2: resynchronising with a peer that is gone ends with LinkLost, within the deadline."""
    tcp_pair.ask(b"READ?")
    tcp_far.vanish()
    tcp_far.listener.close()
    with pytest.raises(LinkLost):
        tcp_pair.awaited()
    began = tcp_pair.clock.now()
    with pytest.raises(LinkLost, match="refused"):
        tcp_pair.link.resynchronise(began + 2.0)
    assert tcp_pair.clock.now() - began < 1.0


def test_row_2_resynchronise_ends_although_the_peer_streams(tcp_pair: Pair, tcp_far: TcpFar) -> None:
    """Row A2: a peer that streams without end is garbled; resynchronising leaves its stream behind."""
    tcp_pair.ask(b"READ?")
    first = tcp_far.peer
    first.setblocking(False)
    first.send(b"x" * 100_000)
    with pytest.raises(LinkGarbled):
        tcp_pair.awaited()
    tcp_pair.link.resynchronise(tcp_pair.clock.now() + 2.0)
    tcp_pair.ask(b"*IDN?", early=True)
    assert tcp_far.peer is not first
    tcp_far.reply(b"A,B,C,D\n")
    assert tcp_pair.awaited() == b"A,B,C,D"


def test_row_3_reset_is_mapped(tcp_pair: Pair, tcp_far: TcpFar) -> None:
    """Row A3: a connection reset in mid-exchange is LinkLost with the system's error as its cause."""
    tcp_pair.ask(b"READ?")
    tcp_far.peer.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
    tcp_far.vanish()
    with pytest.raises(LinkLost, match="Check power, cable and address") as caught:
        tcp_pair.awaited()
    assert isinstance(caught.value.__cause__, ConnectionResetError)


def test_row_4_closed_port_is_refused_at_opening(tcp_far: TcpFar, clock: SystemClock) -> None:
    """Row A4: opening a closed port fails at the opening, not at the first query."""
    tcp_far.listener.close()
    with pytest.raises(LinkLost, match="refused") as caught:
        open_link(tcp_far.address, clock, clock.now() + 2.0)
    assert isinstance(caught.value.__cause__, ConnectionRefusedError)


def test_row_4_an_open_link_is_not_identified(tcp_far: TcpFar, clock: SystemClock) -> None:
    """Row A4: an accepted connection proves nothing: before the identity answer no other message is taken."""
    link = open_link(tcp_far.address, clock, clock.now() + 2.0)
    try:
        assert not link.identified
        with pytest.raises(LinkMisuse):
            link.send(b"READ?", Reply.LINE, clock.now() + 1.0)
    finally:
        link.close()


@linux_only
def test_row_5_opening_keeps_its_deadline(clock: SystemClock) -> None:
    """Row A5: a connection that is not taken (the listener's queue is full) is LinkLost at the deadline."""
    with socket.create_server(("127.0.0.1", 0), backlog=0) as listener:
        port = listener.getsockname()[1]
        waiting = [socket.socket() for _ in range(4)]
        for each in waiting:
            each.setblocking(False)
            each.connect_ex(("127.0.0.1", port))
        began = clock.now()
        with pytest.raises(LinkLost, match="not taken in time"):
            open_link(f"TCPIP0::127.0.0.1::{port}::SOCKET", clock, began + 0.2)
        for each in waiting:
            each.close()
    assert 0.2 <= clock.now() - began < 1.5


def test_row_5_a_slow_acceptor_is_reached(tcp_far: TcpFar, clock: SystemClock) -> None:
    """Row A5: a server that accepts and answers late, but within the deadline, is no failure."""
    result: dict[str, bytes | None] = {}
    identified = threading.Event()

    def use() -> None:
        link = open_link(tcp_far.address, clock, clock.now() + 5.0)
        link.identified = True
        identified.set()
        result["raw"] = together({"meter": (link, reading(5.0))}, clock, clock.now() + 5.0)["meter"].get()
        link.close()

    user = threading.Thread(target=use)
    user.start()
    assert identified.wait(5.0)
    assert tcp_far.receive(6) == b"READ?\n"
    tcp_far.reply(b"1.5\n")
    user.join(5.0)
    assert result == {"raw": b"1.5"}


def test_row_8_dribble_does_not_move_the_deadline(tcp_pair: Pair, tcp_far: TcpFar) -> None:
    """Rows A7 and A8: one byte every 50 ms for ever ends at the deadline, with the bytes in the error."""
    began = tcp_pair.clock.now()
    dribble = iter([b"", *[b"1"] * 100])  # the first look comes before the query

    def look() -> None:
        tcp_far.reply(next(dribble))

    result = together({"meter": (tcp_pair.link, reading(0.3))}, tcp_pair.clock, began + 5.0, look)["meter"]
    assert 0.3 <= tcp_pair.clock.now() - began < 1.0
    assert isinstance(result.error, LinkTimeout)
    assert set(result.error.partial) == set(b"1")
    assert tcp_pair.link.dirty == "no whole reply by the deadline"


def test_row_8_a_write_keeps_its_deadline(tcp_pair: Pair) -> None:
    """Row A8: 20 MB to a peer that never reads end at the deadline as LinkTimeout, not later."""
    began = tcp_pair.clock.now()
    with pytest.raises(LinkTimeout, match="bytes were not sent"):
        tcp_pair.link.send(b"x" * 20_000_000, Reply.LINE, began + 0.2)
    assert 0.2 <= tcp_pair.clock.now() - began < 1.5
    assert tcp_pair.link.dirty


def test_row_8_the_wall_clock_has_no_say(tcp_pair: Pair) -> None:
    """Rows A8 and D5: with a wall clock that steps back an hour at every look, a reply is late at its monotonic
    deadline."""

    class Stepping(SystemClock):
        steps = 0

        def utc(self) -> float:
            self.steps += 1
            return super().utc() - 3600.0 * self.steps

    clock = Stepping()
    began = clock.now()

    def look() -> None:
        clock.utc()

    result = together({"meter": (tcp_pair.link, reading(0.15))}, clock, began + 5.0, look)["meter"]
    assert isinstance(result.error, LinkTimeout)
    assert 0.15 <= clock.now() - began < 1.0
    assert clock.steps >= 2


@linux_only
def test_opening_and_closing_leaves_no_descriptors(tcp_far: TcpFar, clock: SystemClock) -> None:
    """Row A14: A hundred cycles of open and close, and as many refused openings, leave no descriptor behind."""
    nobody = socket.create_server(("127.0.0.1", 0))
    closed = f"TCPIP0::127.0.0.1::{nobody.getsockname()[1]}::SOCKET"
    nobody.close()
    before = descriptors()
    for _ in range(100):
        link = open_link(tcp_far.address, clock, clock.now() + 2.0)
        tcp_far.accept().close()
        link.close()
        with pytest.raises(LinkError):
            open_link(closed, clock, clock.now() + 2.0)
    assert descriptors() == before


def descriptors() -> int:
    return len(list(Path("/proc/self/fd").iterdir()))


def test_options_of_the_socket(tcp_pair: Pair) -> None:
    """Row A11: Every connection keeps itself alive, sends small messages at once and never blocks."""
    handle = tcp_pair.link.fileno()
    assert handle is not None
    with socket.socket(fileno=socket.dup(handle)) as same:
        assert same.getsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE) != 0
        assert same.getsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY) != 0
    assert isinstance(tcp_pair.link, TcpLink)


def test_a_lost_connection_opens_again(tcp_pair: Pair, tcp_far: TcpFar) -> None:
    """Row A16: After a loss the same link, resynchronised, talks over a new connection, and counts on from there."""
    tcp_pair.ask(b"READ?")
    tcp_far.vanish()
    with pytest.raises(LinkLost):
        tcp_pair.awaited()
    tcp_pair.link.resynchronise(tcp_pair.clock.now() + 2.0)
    assert (tcp_pair.link.dirty, tcp_pair.link.identified) == ("", False)
    tcp_far.accept()
    tcp_pair.ask(b"*IDN?", early=True)


@pytest.mark.parametrize(
    ("address", "parsed"),
    [
        ("TCPIP0::192.168.7.20::5025::SOCKET", ("192.168.7.20", 5025)),
        ("tcpip::meter.lab::5555::socket", ("meter.lab", 5555)),
        ("TCPIP2::[fe80::1]::5025::SOCKET", ("fe80::1", 5025)),
    ],
)
def test_addresses(address: str, parsed: tuple[str, int]) -> None:
    """Host and port are read from the VISA form, in any case; a numeric IPv6 host stands in brackets."""
    assert parse_address(address) == parsed


@pytest.mark.parametrize(
    "address",
    ["TCPIP0::host::SOCKET", "TCPIP0::host::0::SOCKET", "TCPIP0::host::70000::SOCKET", "TCPIP0::a b::1::SOCKET"],
)
def test_malformed_addresses(address: str) -> None:
    """A malformed address is a ConfigError that shows it and the form it should have."""
    with pytest.raises(ConfigError, match="TCPIP0::host::port::SOCKET, port 1 to 65535"):
        parse_address(address)
