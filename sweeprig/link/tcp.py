"""Raw TCP: `TCPIP0::host::port::SOCKET`. Never blocks by itself; it waits by the clock, and only where it may.

A host name is looked up by the system, which no deadline here bounds: rig files of unattended runs give numbers.
"""

from __future__ import annotations

import errno
import os
import re
import socket
from contextlib import suppress
from typing import Any

from sweeprig.clock import POLL_S, Clock
from sweeprig.errors import ConfigError
from sweeprig.link.base import CHUNK, BaseLink

FORM = "TCPIP0::host::port::SOCKET"
_ADDRESS = re.compile(r"TCPIP\d*::(?P<host>\[[^\[\]]+\]|[^:\s\[\]]+)::(?P<port>\d{1,5})::SOCKET", re.IGNORECASE)

_UNDER_WAY = (errno.EINPROGRESS, errno.EWOULDBLOCK, errno.EINTR)

# A dead path is found within about two minutes of silence; the usual network box forgets idle ones after five.
_KEEPALIVE = (("TCP_KEEPIDLE", 60), ("TCP_KEEPINTVL", 10), ("TCP_KEEPCNT", 5))


def parse_address(address: str) -> tuple[str, int]:
    """(host, port); ConfigError where it is no such address. A numeric IPv6 host stands in square brackets."""
    match = _ADDRESS.fullmatch(address.strip())
    if match is None or not 0 < int(match["port"]) < 65_536:
        raise ConfigError("no address of a raw TCP socket", value=address, allowed=f"{FORM}, port 1 to 65535")
    return match["host"].strip("[]"), int(match["port"])


class TcpLink(BaseLink):
    """One TCP connection."""

    def __init__(self, address: str, clock: Clock, terminator: bytes = b"\n") -> None:
        super().__init__(address, clock, terminator)
        self._host, self._port = parse_address(address)
        self._socket: socket.socket | None = None

    def fileno(self) -> int | None:
        return None if self._socket is None else self._socket.fileno()

    def _open(self, deadline: float) -> None:
        refusal: OSError = ConnectionRefusedError("the host name gave no address")
        for family, kind, protocol, _, place in socket.getaddrinfo(self._host, self._port, type=socket.SOCK_STREAM):
            tried = socket.socket(family, kind, protocol)
            try:
                tried.setblocking(False)
                _set_options(tried)
                self._connect(tried, place, deadline)
            except OSError as error:
                tried.close()
                refusal = error
            except BaseException:
                tried.close()
                raise
            else:
                self._socket = tried
                return
        raise refusal

    def _connect(self, tried: socket.socket, place: tuple[Any, ...], deadline: float) -> None:
        """Connect within the deadline. The clock cannot wait for "writable", so the state is polled."""
        failed = tried.connect_ex(place)
        while failed == 0 or failed in _UNDER_WAY:
            if _connected(tried):
                return
            now = self._clock.now()
            if now >= deadline:
                raise TimeoutError("the connection was not taken in time")
            self._clock.wait(min(deadline, now + POLL_S))
            failed = tried.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
        raise OSError(failed, os.strerror(failed))

    def _read(self) -> bytes:
        if self._socket is None:
            raise ConnectionError("the connection is closed")
        try:
            data = self._socket.recv(CHUNK)
        except BlockingIOError:
            return b""
        if not data:
            raise ConnectionResetError("the peer closed the connection")
        return data

    def _write(self, data: bytes, deadline: float) -> None:
        if self._socket is None:
            raise ConnectionError("the connection is closed")
        left = memoryview(data)
        while True:
            with suppress(BlockingIOError):
                left = left[self._socket.send(left) :]
            if not left:
                return
            now = self._clock.now()
            if now >= deadline:
                raise TimeoutError(f"the peer takes nothing more: {len(left)} of {len(data)} bytes were not sent")
            self._clock.wait(min(deadline, now + POLL_S))

    def _shut(self) -> None:
        gone, self._socket = self._socket, None
        if gone is not None:
            gone.close()


def _set_options(tried: socket.socket) -> None:
    tried.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    tried.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
    for name, value in _KEEPALIVE:
        if hasattr(socket, name):
            tried.setsockopt(socket.IPPROTO_TCP, getattr(socket, name), value)


def _connected(tried: socket.socket) -> bool:
    try:
        tried.getpeername()
    except OSError:
        return False
    return True
