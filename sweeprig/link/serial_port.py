"""A serial port: `serial:/dev/serial/by-id/…` or `serial:COM3`, optionally with `?baud=9600`.

Exclusive, and no read or write of it can hang. Opening may reset a board, so resynchronising drains instead of
reopening while the port is alive. How long a board takes to start again is no business of this module.
"""

from __future__ import annotations

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


def parse_address(address: str) -> tuple[str, int]:
    """(port, baud); ConfigError where it is no such address."""
    scheme, _, rest = address.strip().partition(":")
    port, _, query = rest.partition("?")
    options = dict(parse_qsl(query, keep_blank_values=True))
    baud = options.pop("baud", str(BAUD))
    if scheme.lower() != "serial" or not port or options or not (baud.isascii() and baud.isdigit() and int(baud) > 0):
        raise ConfigError("no address of a serial port", value=address, allowed=FORM)
    return port, int(baud)


class SerialLink(BaseLink):
    """One serial port, 8 data bits, no parity, 1 stop bit. The name is resolved anew at each opening."""

    def __init__(self, address: str, clock: Clock, terminator: bytes = b"\n") -> None:
        super().__init__(address, clock, terminator)
        self._device, self._baud = parse_address(address)
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
        return "The port is gone: check the cable and power, then its name"
