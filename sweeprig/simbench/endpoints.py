"""Where programs reach a served instrument: a loopback TCP port, or a pseudo-terminal for what sits on a serial line.

One client at a time. Nothing here waits: the serving loop selects, and calls `take` and `give`.
"""

from __future__ import annotations

import errno
import os
import select
import socket
import sys
from contextlib import suppress
from typing import Protocol

from sweeprig.simbench.port import Port

if sys.platform != "win32":
    import pty
    import tty

HAS_PTY = sys.platform != "win32"
HOST = "127.0.0.1"
CHUNK = 4096


class Endpoint(Protocol):
    """One served instrument. `address` is what the rig file gets."""

    address: str
    port: Port

    def handle(self) -> int | None:
        """What to select for reading; None where only `take` itself can tell."""
        ...

    def take(self) -> None:
        """Accept a waiting client, hand what it wrote to the instrument, notice that it left. Never waits."""
        ...

    def give(self) -> None:
        """Send what the instrument has ready by now. Never waits; what is not taken is sent at the next call."""
        ...

    def close(self) -> None: ...


class SocketEndpoint:
    """A listening socket on the loopback; while a client is there, the next one waits in the queue."""

    def __init__(self, port: Port) -> None:
        self.port = port
        self._unsent = b""
        self._client: socket.socket | None = None
        self._listener = socket.create_server((HOST, 0))
        self._listener.setblocking(False)
        self.address = f"TCPIP0::{HOST}::{self._listener.getsockname()[1]}::SOCKET"

    def handle(self) -> int | None:
        return (self._client or self._listener).fileno()

    def take(self) -> None:
        if self._client is None:
            with suppress(BlockingIOError):
                self._client, _ = self._listener.accept()
                self._client.setblocking(False)
                self._client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                self.port.open()
            return
        try:
            data = self._client.recv(CHUNK)
        except BlockingIOError:
            return
        except OSError:
            data = b""
        if data:
            self.port.write(data)
        else:
            self._leave()

    def give(self) -> None:
        self._unsent += self.port.read()
        if not self._unsent or self._client is None:
            return
        try:
            sent = self._client.send(self._unsent)
        except BlockingIOError:
            return
        except OSError:
            self._leave()
            return
        self._unsent = self._unsent[sent:]

    def _leave(self) -> None:
        client, self._client, self._unsent = self._client, None, b""
        self.port.close()
        if client is not None:
            client.close()

    def close(self) -> None:
        self._leave()
        self._listener.close()


if sys.platform != "win32":

    class PtyEndpoint:
        """A pseudo-terminal, raw before the first byte. No slave descriptor of our own is kept open, so that a client
        that opens and leaves is seen: the master hangs up while there is none.
        """

        def __init__(self, port: Port) -> None:
            self.port = port
            self._unsent = b""
            self._present = False
            self._master, slave = pty.openpty()
            tty.setraw(slave)
            self.address = f"serial:{os.ttyname(slave)}"
            os.close(slave)
            os.set_blocking(self._master, False)
            self._state = select.poll()
            self._state.register(self._master, select.POLLIN)

        def handle(self) -> int | None:
            # without a client the master always counts as readable: selecting it would spin
            return self._master if self._present else None

        def take(self) -> None:
            if not self._present:
                happened = dict(self._state.poll(0)).get(self._master, 0)
                if happened & select.POLLHUP and not happened & select.POLLIN:
                    return
                self._present = True
                self.port.open()
            try:
                data = os.read(self._master, CHUNK)
            except BlockingIOError:
                return
            except OSError as error:
                if error.errno != errno.EIO:
                    raise
                data = b""
            if data:
                self.port.write(data)
            else:
                self._leave()

        def give(self) -> None:
            self._unsent += self.port.read()
            if not self._unsent or not self._present:
                return
            try:
                sent = os.write(self._master, self._unsent)
            except BlockingIOError:
                return
            except OSError:
                self._leave()
                return
            self._unsent = self._unsent[sent:]

        def _leave(self) -> None:
            self._present, self._unsent = False, b""
            self.port.close()

        def close(self) -> None:
            self._leave()
            os.close(self._master)


def endpoint(port: Port, serial: bool) -> Endpoint:
    """A pseudo-terminal for an instrument on a serial line where the system has them, else a TCP port."""
    if sys.platform != "win32" and serial:
        return PtyEndpoint(port)
    return SocketEndpoint(port)
