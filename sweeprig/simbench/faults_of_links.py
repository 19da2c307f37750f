"""Faults of the connection: closed, reset, refused, silent, out of links, flooded, gone and back under another name.

Each acts on the port alone, whatever the instrument behind it is doing.
"""

from __future__ import annotations

import math

from sweeprig.simbench.faulty_port import Fault, nothing

EVERY_S = 0.05
"""Interval of the pieces of garbage."""


class Close(Fault):
    swallows = sudden = True

    def strike(self) -> None:
        self.port.break_off(ConnectionAbortedError("the instrument closed the connection"))


class Reset(Fault):
    swallows = sudden = True

    def strike(self) -> None:
        self.port.break_off(ConnectionResetError("the instrument reset the connection"))


class NodeMoves(Fault):
    swallows = sudden = True

    def strike(self) -> None:
        self.port.break_off(ConnectionResetError("the port vanished"))
        self.port.be_gone(self.spec.seconds)


class Garbage(Fault):
    """Begins at its time or with a chosen message; ends where its time does, or with the connection."""

    swallows = sudden = True
    _flowing = -1

    def strike(self) -> None:
        if self._flowing != self.port.openings:
            self._flowing = self.port.openings
            self._ends = self.when.end()
            self._emit(self._flowing)

    def _emit(self, opening: object) -> None:
        port = self.port
        if opening != port.openings or not port.is_open or port.bench.now >= self._ends:
            self._flowing = -1
            return
        port.late(0.0, bytes(self.rng.randrange(0x20, 0x7F) for _ in range(self.spec.number)))
        port.bench.at(port.bench.now + EVERY_S, self._emit, opening)


class Refuse(Fault):
    at_opening = True

    def plan(self) -> None:
        """Given by time alone nobody listens meanwhile: a served bench has to look when that begins and ends."""
        bench, start = self.port.bench, self.when.start_alone
        for time in (start, self.when.end()) if start is not None else ():
            if bench.now < time < math.inf:
                bench.at(time, nothing, None)

    def opening(self) -> None:
        raise ConnectionRefusedError("the instrument refused the connection")


class AcceptSilent(Fault):
    at_opening = True

    def opening(self) -> None:
        self.port.mute = True


class LinkLimit(Fault):
    """Asked at every opening in its time, so that it can count; it acts only when no link is left."""

    at_opening = True

    def __init__(self, *more: object) -> None:
        super().__init__(*more)  # type: ignore[arg-type]  # handed through
        self._taken: list[float] = []

    def note(self) -> None:
        """Put down by `opening` where it acts."""

    def opening(self) -> None:
        now = self.port.bench.now
        self._taken = [until for until in self._taken if until > now]
        if len(self._taken) >= self.spec.number:
            super().note()
            raise ConnectionRefusedError("the instrument has no link left")
        self._taken.append(now + self.spec.seconds)


class ResetOnOpen(Fault):
    at_opening = True

    def opening(self) -> None:
        self.port.instrument.power_on()
        self.port.be_deaf(self.spec.seconds)


KINDS: dict[str, type[Fault]] = {
    "close": Close,
    "reset": Reset,
    "node_moves": NodeMoves,
    "garbage": Garbage,
    "refuse": Refuse,
    "accept_silent": AcceptSilent,
    "link_limit": LinkLimit,
    "reset_on_open": ResetOnOpen,
}
