"""The simulated bench in the same process: `simbench:NAME`. Bytes go through a `BytePort`, no operating system between.

What answers lives in room simbench; here is only what it must offer.
"""

from __future__ import annotations

from typing import Protocol, runtime_checkable

from sweeprig.clock import Clock
from sweeprig.link.base import BaseLink

FORM = "simbench:NAME"


@runtime_checkable
class BytePort(Protocol):
    """The far end of an in-process link. Nothing of it waits.

    A peer that has closed raises ConnectionError from `read` and `write`; one that refuses, from `open`.
    """

    def open(self) -> None:
        """A fresh connection: what an earlier one left unread is gone. Also called on one that is open."""
        ...

    def write(self, data: bytes) -> None: ...

    def next_ready(self) -> float:
        """Clock time at which unread bytes are or will be readable; infinity if there are none in sight."""
        ...

    def read(self) -> bytes:
        """All that is readable now, b"" for nothing."""
        ...

    def close(self) -> None:
        """May be called twice."""
        ...


class InProcessLink(BaseLink):
    knows_when_ready = True

    def __init__(self, address: str, clock: Clock, terminator: bytes, port: BytePort) -> None:
        super().__init__(address, clock, terminator)
        self._port = port
        # asked several times in every exchange: the port's own methods stand in the place of two that only pass on
        self._read = port.read  # type: ignore[method-assign]  # same signature, one call less
        self._put = port.write
        self.ready_at = port.next_ready  # type: ignore[method-assign]  # same signature, one call less

    def resynchronise(self, deadline: float) -> None:
        """Opened anew, then drained: behind a port may be a serial line, on which a late reply still arrives."""
        self.open(deadline)
        self._fall_silent(deadline)

    def ready_at(self) -> float:
        return self._port.next_ready()

    def _open(self, deadline: float) -> None:
        del deadline
        self._port.open()

    def _read(self) -> bytes:
        return self._port.read()

    def _write(self, data: bytes, deadline: float) -> None:
        del deadline
        self._put(data)

    def _shut(self) -> None:
        self._port.close()

    def _advice(self) -> str:
        return "The simulated instrument was told to be lost: see the faults in the rig file"
