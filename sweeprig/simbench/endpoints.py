"""Where programs reach a served instrument: a loopback TCP port, or a pseudo-terminal for what sits on a serial line.

One client at a time. Nothing here waits: the serving loop selects, and calls `take` and `give`.
"""

from __future__ import annotations

import errno
import os
import select
import shutil
import socket
import struct
import sys
import tempfile
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Protocol

from sweeprig.simbench.doorbell import Doorbell
from sweeprig.simbench.port import Port

if sys.platform != "win32":
    import pty
    import tty

HAS_PTY = sys.platform != "win32"
HOST = "127.0.0.1"
LINKS = "sweeprig-served-"
"""Begins the name of a folder with the link to a terminal that may vanish; rig files with a rate may name it."""
CHUNK = 4096
RESET_AT_ONCE = struct.pack("ii", 1, 0)
"""SO_LINGER on, 0 s: closing sends a reset in place of an orderly end."""


class Endpoint(Protocol):
    """One served instrument. `address` is what the rig file gets; `unsent` is what waits for room to be written."""

    address: str
    port: Port

    @property
    def unsent(self) -> bytes: ...

    def handle(self) -> int | None:
        """What to select for reading; None while there is nothing, or where only `take` itself can tell."""
        ...

    def unseen(self) -> bool:
        """Whether a client may come of whom no handle tells: then `take` has to be called now and then."""
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
        self.unsent = b""
        self._client: socket.socket | None = None
        self._listener: socket.socket | None = None
        self._listen((HOST, 0))

    def _listen(self, where: tuple[str, int]) -> None:
        self._listener = socket.create_server(where)
        self._listener.setblocking(False)
        self._where: tuple[str, int] = self._listener.getsockname()
        self.address = f"TCPIP0::{HOST}::{self._where[1]}::SOCKET"

    def handle(self) -> int | None:
        channel = self._client or self._listener
        return None if channel is None else channel.fileno()

    def unseen(self) -> bool:
        return False

    def _keep_listener(self) -> None:
        """Nobody listens while the instrument is not there: a client is refused by the system, as by a real one."""
        if self._listener is None and self.port.accepts:
            self._listen(self._where)
        elif self._listener is not None and not self.port.accepts:
            self._listener.close()
            self._listener = None

    def take(self) -> None:
        self._keep_listener()
        if self._client is None:
            with suppress(BlockingIOError):
                if self._listener is not None:
                    self._client, _ = self._listener.accept()
                    self._client.setblocking(False)
                    self._client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                    self._with_port(self.port.open)
            return
        try:
            data = self._client.recv(CHUNK)
        except BlockingIOError:
            return
        except OSError:
            data = b""
        if data:
            self._with_port(lambda: self.port.write(data))
        else:
            self._leave()

    def _with_port(self, act: Callable[[], None]) -> None:
        """A connection that the instrument breaks or refuses is broken for the client too: closed, or reset."""
        try:
            act()
        except ConnectionAbortedError:
            self._leave()
        except ConnectionError:
            if self._client is not None:
                self._client.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, RESET_AT_ONCE)
            self._leave()

    def give(self) -> None:
        self._keep_listener()
        self._with_port(self._collect)
        if not self.unsent or self._client is None:
            return
        try:
            sent = self._client.send(self.unsent)
        except BlockingIOError:
            return
        except OSError:
            self._leave()
            return
        self.unsent = self.unsent[sent:]

    def _collect(self) -> None:
        self.unsent += self.port.read()

    def _leave(self) -> None:
        client, self._client, self.unsent = self._client, None, b""
        self.port.close()
        if client is not None:
            client.close()

    def close(self) -> None:
        self._leave()
        if self._listener is not None:
            self._listener.close()


if sys.platform != "win32":

    class PtyEndpoint:
        """A pseudo-terminal, raw before the first byte. No slave descriptor of our own is kept open, so that a client
        that opens and leaves is seen: the master hangs up while there is none. A port that may vanish comes back under
        another name, so its address is a link that follows it, as the by-id links of a real system do.
        """

        def __init__(self, port: Port) -> None:
            self.port = port
            self.unsent = b""
            self._present = False
            self._folder = Path(tempfile.mkdtemp(prefix=LINKS)) if port.may_vanish else None
            self._master: int | None = None
            self._bell: Doorbell | None = None
            self._name = ""
            self._appear()
            self.address = f"serial:{self._name if self._folder is None else self._folder / 'port'}"

        def _appear(self) -> None:
            self._master, name = _open_pty()
            if name == self._name:  # the lowest free name is given first: take the next one
                former, (self._master, name) = self._master, _open_pty()
                os.close(former)
            self._name = name
            self._bell = Doorbell(name)
            self._state = select.poll()
            self._state.register(self._master, select.POLLIN)
            if self._folder is not None:
                (self._folder / "port").symlink_to(name)

        def _vanish(self) -> None:
            """The node is gone, for whoever has it open too."""
            if self._folder is not None:
                (self._folder / "port").unlink(missing_ok=True)
            if self._master is not None:
                os.close(self._master)
            if self._bell is not None:
                self._bell.close()
            self._master = self._bell = None
            self._leave()

        def _is_there(self) -> bool:
            """Follow the instrument's end: a node that nobody holds goes with it, and is there again with it."""
            if self._master is None and self.port.accepts:
                self._appear()
            elif self._master is not None and not self._present and not self.port.accepts:
                self._vanish()
            return self._master is not None

        def handle(self) -> int | None:
            # without a client the master always counts as readable: selecting it would spin
            if self._present or self._bell is None:
                return self._master
            return self._bell.handle

        def unseen(self) -> bool:
            return not self._present and self._bell is not None and self._bell.handle is None

        def take(self) -> None:
            if not self._is_there() or self._master is None:
                return
            if not self._present:
                if self._bell is not None:
                    self._bell.answer()
                happened = dict(self._state.poll(0)).get(self._master, 0)
                if happened & select.POLLHUP and not happened & select.POLLIN:
                    return
                self._present = True
                if not self._with_port(self.port.open):
                    return
            try:
                data = os.read(self._master, CHUNK)
            except BlockingIOError:
                return
            except OSError as error:
                if error.errno != errno.EIO:
                    raise
                data = b""
            if data:
                self._with_port(lambda: self.port.write(data))
            else:
                self._leave()

        def _with_port(self, act: Callable[[], None]) -> bool:
            """A terminal can neither refuse nor close: its node vanishes instead. False: that happened."""
            try:
                act()
            except ConnectionError:
                self._vanish()
                return False
            return True

        def _collect(self) -> None:
            self.unsent += self.port.read()

        def give(self) -> None:
            if not self._is_there() or not self._with_port(self._collect) or self._master is None:
                return
            if not self.unsent or not self._present:
                return
            try:
                sent = os.write(self._master, self.unsent)
            except BlockingIOError:
                return
            except OSError:
                self._leave()
                return
            self.unsent = self.unsent[sent:]

        def _leave(self) -> None:
            self._present, self.unsent = False, b""
            self.port.close()

        def close(self) -> None:
            self._vanish()
            if self._folder is not None:
                shutil.rmtree(self._folder, ignore_errors=True)

    def _open_pty() -> tuple[int, str]:
        """A new terminal, raw: (master, the node's name)."""
        master, slave = pty.openpty()
        tty.setraw(slave)
        name = os.ttyname(slave)
        os.close(slave)
        os.set_blocking(master, False)
        return master, name


def endpoint(port: Port, serial: bool) -> Endpoint:
    """A pseudo-terminal for an instrument on a serial line where the system has them, else a TCP port."""
    if sys.platform != "win32" and serial:
        return PtyEndpoint(port)
    return SocketEndpoint(port)
