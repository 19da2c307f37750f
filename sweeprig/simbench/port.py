"""The byte side of one simulated instrument: what is written reaches it, what it answers becomes readable in time.

Keeps the link room's BytePort contract (open, write, next_ready, read, close) without importing it.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable
from typing import Any, Protocol

LONGEST_LINE = 4096
Callback = Callable[[Any], None]
"""What an event calls, with the argument that was given with it."""


class Receiver(Protocol):
    """What sits behind a port."""

    def receive(self, line: bytes) -> None:
        """One line without its terminator, now."""
        ...

    def overrun(self) -> None:
        """A line was longer than the input buffer and was lost."""
        ...


class Timeline(Protocol):
    """What a port needs of the bench."""

    now: float
    touched: int
    unread: int

    def at(self, time: float, callback: Callback, argument: object) -> None: ...


class Port:
    """`latency_s` passes before an answer; each byte takes `byte_s` both ways (0.0 on a network).

    longest_line  bytes of one message; a longer one is dropped up to its terminator and reported as overrun
    terminator    LF, CR LF or CR, added to answers; of a message its last byte ends it, and a CR before LF is dropped
    """

    def __init__(
        self,
        bench: Timeline,
        receiver: Receiver,
        latency_s: float,
        byte_s: float = 0.0,
        longest_line: int = LONGEST_LINE,
        terminator: bytes = b"\n",
    ) -> None:
        self._bench = bench
        self._receiver = receiver
        self._latency_s = latency_s
        self._byte_s = byte_s
        self._longest_line = longest_line
        self._terminator = terminator
        self._ending = terminator.decode("latin-1")
        self._end = terminator[-1:]
        self._partial = b""
        self._dropping = False
        self._received_until = 0.0
        self._sent_until = 0.0
        self._answers: deque[tuple[float, bytes]] = deque()
        self.is_open = False

    @property
    def accepts(self) -> bool:
        """Whether a new client finds anybody: False while the instrument's end is not there at all."""
        return True

    @property
    def may_vanish(self) -> bool:
        """It may go and come back, so a served terminal needs a name that stays."""
        return False

    def open(self) -> None:
        """Opening flushes what an earlier client left unread, and its unfinished line."""
        self.flush()
        self.is_open = True

    def close(self) -> None:
        """What is under way is lost; the instrument itself goes on."""
        self.is_open = False
        self.flush()

    def flush(self) -> None:
        """Drop unfinished input and unread answers."""
        self._partial = b""
        self._dropping = False
        self._bench.unread -= len(self._answers)
        self._bench.touched += 1
        self._answers.clear()

    def write(self, data: bytes) -> None:
        """Bytes from the client; each whole line reaches the instrument when its last byte has."""
        last = len(data) - 1
        if data.find(self._end) == last <= self._longest_line and not self._partial and not self._dropping:
            line = data[:last] if data[last - 1 : last] != b"\r" else data[: last - 1]
            self._when(self._arrival(last + 1), self._receiver.receive, line)
            return
        start = max(self._bench.now, self._received_until)
        self._received_until = start + len(data) * self._byte_s
        *lines, rest = data.split(self._end)
        arrived = 0
        for line in lines:
            arrived += len(line) + 1
            whole, self._partial = self._partial + line, b""
            self._deliver(start + arrived * self._byte_s, whole)
        self._partial += rest
        if len(self._partial) > self._longest_line:
            self._partial, self._dropping = b"", True

    def _arrival(self, count: int) -> float:
        """When the last of so many bytes, sent now, has come through the line."""
        now = self._bench.now
        if self._byte_s == 0.0:
            return now
        start = now if now > self._received_until else self._received_until
        self._received_until = arrival = start + count * self._byte_s
        return arrival

    def _deliver(self, time: float, line: bytes) -> None:
        if self._dropping or len(line) > self._longest_line:
            self._dropping = False
            self._when(time, self._overrun, line)
        else:
            self._when(time, self._receiver.receive, line.removesuffix(b"\r"))

    def _when(self, time: float, callback: Callback, line: bytes) -> None:
        if time <= self._bench.now:
            callback(line)
        else:
            self._bench.at(time, callback, line)

    def _overrun(self, _: bytes) -> None:
        self._receiver.overrun()

    def send(self, text: str) -> None:
        """An answer of the instrument, formed now, one letter a byte (Latin-1: a block may hold any byte).

        The terminator is added. Lost when nobody holds the port open."""
        self.put((text + self._ending).encode("latin-1"))

    def put(self, raw: bytes) -> None:
        """These bytes, terminator and all, become readable when latency and line have let them through."""
        if not self.is_open:
            return
        bench = self._bench
        ready = bench.now + self._latency_s
        if self._byte_s:
            ready = self._sent_until = max(ready, self._sent_until) + len(raw) * self._byte_s
        self._answers.append((ready, raw))
        bench.touched += 1
        bench.unread += 1

    def next_ready(self) -> float:
        """Bench time at which bytes become readable; infinity while no answer is under way."""
        return self._answers[0][0] if self._answers else math.inf

    def read(self) -> bytes:
        """What is readable now, and nothing of what is still under way."""
        answers = self._answers
        if not answers:
            return b""
        bench = self._bench
        now = bench.now
        if answers[0][0] > now:
            return b""
        raw = answers.popleft()[1]
        bench.unread -= 1
        while answers and answers[0][0] <= now:
            raw += answers.popleft()[1]
            bench.unread -= 1
        return raw
