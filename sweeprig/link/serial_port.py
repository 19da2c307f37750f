"""A serial port: `serial:/dev/serial/by-id/…` or `serial:COM3`, optionally with `?baud=9600`.

Exclusive, and no read or write of it can hang. Opening may reset a board, so resynchronising drains instead of
reopening while the port is alive. How long a board takes to start again is no business of this module.

A node such as /dev/ttyUSB0 is numbered anew whenever its adapter drops off the bus: the stable name that leads to it is
noted at the first opening and used from then on.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from urllib.parse import parse_qsl

import serial

from sweeprig.clock import Clock
from sweeprig.errors import ConfigError
from sweeprig.link.base import BaseLink

FORM = "serial:PORT or serial:PORT?baud=115200"
BAUD = 115_200
WRITE_S = 0.05
"""Longest time (real seconds) in which the machine must take a message; its buffer holds many, so it takes no time."""
_READ = 4_096

STABLE_NAMES = (Path("/dev/serial/by-id"), Path("/dev/serial/by-path"))
"""Folders of links to the nodes, the better one first: an adapter without a serial number shares its name in the first
with its like; the second names the socket that it is plugged into."""


def parse_address(address: str) -> tuple[str, int]:
    """(port, baud); ConfigError where it is no such address."""
    scheme, _, rest = address.strip().partition(":")
    port, _, query = rest.partition("?")
    options = dict(parse_qsl(query, keep_blank_values=True))
    baud = options.pop("baud", str(BAUD))
    if scheme.lower() != "serial" or not port or options or not (baud.isascii() and baud.isdigit() and int(baud) > 0):
        raise ConfigError("no address of a serial port", value=address, allowed=FORM)
    return port, int(baud)


def stable_name(device: str, folders: Sequence[Path]) -> str:
    """A name in one of `folders` that leads to the node `device` now; `device` itself where there is none, and where it
    is a link, whose owner has chosen it for its stability."""
    node = Path(device)
    if node.is_symlink():
        return device
    for folder in folders:
        try:
            links = sorted(folder.iterdir())
        except OSError:
            continue  # not Linux, or no port is there
        for link in links:
            if link.is_symlink() and link.resolve() == node.resolve():
                return str(link)
    return device


def stable_address(address: str) -> str:
    """The address with the stable name of its port, where there is one now: for processes that come later."""
    device, _ = parse_address(address)
    return address.replace(device, stable_name(device, STABLE_NAMES), 1)


class SerialLink(BaseLink):
    """One serial port, 8 data bits, no parity, 1 stop bit. The name is resolved anew at each opening.

    stable_names   folders in which a stable name for a plain node is looked for, STABLE_NAMES where not given
    """

    def __init__(
        self, address: str, clock: Clock, terminator: bytes = b"\n", stable_names: Sequence[Path] | None = None
    ) -> None:
        super().__init__(address, clock, terminator)
        self._device, self._baud = parse_address(address)
        self._given = self._device
        self._stable_names = STABLE_NAMES if stable_names is None else stable_names
        self._was_open = False
        self._port: serial.Serial | None = None
        self._handle: int | None = None

    def fileno(self) -> int | None:
        return self._handle

    def resynchronise(self, deadline: float) -> None:
        """Drain until the port has been silent for 0.2 s; a closed port is opened. LinkLost if it never falls silent.

        What comes later than that is caught by the identity query, which must follow.
        """
        if self._port is None:
            self.open(deadline)
            return
        self._fall_silent(deadline)

    def _open(self, deadline: float) -> None:
        """Opening a port does not wait, so that `deadline` needs no watching."""
        del deadline
        self._port = serial.Serial(self._device, self._baud, timeout=0, write_timeout=WRITE_S, exclusive=True)
        try:
            self._handle = self._port.fileno()
        except (AttributeError, OSError):
            self._handle = None  # Windows: the clock polls
        if not self._was_open:
            self._device, self._was_open = stable_name(self._device, self._stable_names), True

    def _read(self) -> bytes:
        if self._port is None:
            raise ConnectionError("the port is closed")
        return bytes(self._port.read(_READ))

    def _write(self, data: bytes, deadline: float) -> None:
        """Bounded by WRITE_S, which is not above any deadline that a caller can mean for a few bytes."""
        del deadline
        if self._port is None:
            raise ConnectionError("the port is closed")
        self._port.write(data)

    def _shut(self) -> None:
        gone, self._port, self._handle = self._port, None, None
        if gone is not None:
            gone.close()

    def _advice(self) -> str:
        # the operating system has one text for both
        if Path(self._device).exists():
            return "The port is there: another program may have it open (a modem manager, a terminal)"
        was = (
            "" if self._device == self._given else f" (first opened as {self._given}, looked for under its stable name)"
        )
        return f"The port is gone: check the cable and power, then its name{was}"
