"""A port that goes wrong by plan: what stands between an instrument and its client, in process and served alike.

Here: when a fault acts, and where on the way of the bytes. What each kind does to them is faults_of_*.py's.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from typing import TYPE_CHECKING, NamedTuple

from sweeprig.job.fault_models import SimulatedFault
from sweeprig.simbench.bench import Struck
from sweeprig.simbench.port import Port

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench
    from sweeprig.simbench.instrument import Instrument


def nothing(_: object) -> None:
    """An event for whoever waits for the next one: what `accepts` says changes then."""


class When:
    """Which messages (or openings) of one port a fault strikes. Ask once for each one that it could act on."""

    def __init__(self, spec: SimulatedFault, rng: random.Random) -> None:
        self._spec = spec
        self._first = spec.exchange or 1
        self._probability = 1.0 if spec.probability is None else spec.probability / 100.0
        self._start = spec.start or 0.0
        self._lasts = math.inf if spec.lasts is None else spec.lasts
        self._end = self._start + self._lasts if spec.exchange is None or spec.start is not None else None
        once = spec.what.once and spec.probability is None and spec.lasts is None
        self._left = math.inf
        if spec.exchange is not None and spec.lasts is None:
            self._left = spec.exchanges or 1
        elif once:
            self._left = 1
        self._rng = rng

    def chosen(self, number: int, now: float) -> bool:
        """Whether the message of this number, now (bench time, s), is struck; a random draw only where one decides."""
        if number < self._first or now < self._start or self._left <= 0:
            return False
        if self._end is None:
            self._end = now + self._lasts
        if now >= self._end or (self._probability < 1.0 and self._rng.random() >= self._probability):
            return False
        self._left -= 1
        return True

    @property
    def start_alone(self) -> float | None:
        """Bench time, s, at which it begins where nothing but time decides; None where messages or chance do too."""
        stated = self._spec.exchange is None and self._spec.probability is None
        return self._spec.start if stated else None

    def is_over(self, now: float) -> bool:
        """Whether a fault that is given by time alone has happened, or ended, before now: a later session is spared."""
        once = self._left < math.inf
        return self._start < now if once else self._end is not None and self._end <= now

    def end(self) -> float:
        """Bench time, s, at which it ends; known once it has begun."""
        return math.inf if self._end is None else self._end

    def take(self) -> None:
        """One of those that are left has happened, or never will."""
        self._left -= 1

    def give_back(self) -> None:
        """The fault found nothing to act on after all."""
        self._left += 1

    def in_window(self, now: float) -> bool:
        """True in the time of a fault that is given by time alone: then it can be seen without asking."""
        timed = self._first == 1 and self._probability == 1.0 and self._left == math.inf
        return timed and self._end is not None and self._start <= now < self._end


class Piece(NamedTuple):
    """Bytes that set out `after_s` (s) after the answer was formed."""

    after_s: float
    raw: bytes


class Fault:
    """One fault of one port. A subclass overrides the hook of the place that it acts at.

    acting    chosen for the message that came last
    swallows  a chosen message does not reach the instrument
    sudden    given by time alone it happens at that time, between messages too
    """

    at_opening = False
    sudden = False
    on_answer = False
    swallows = False

    def __init__(self, spec: SimulatedFault, when: When, port: FaultyPort, rng: random.Random) -> None:
        self.spec, self.when, self.port, self.rng = spec, when, port, rng
        self.acting = False

    def concerns(self, line: bytes) -> bool:
        """Whether it can act on this message."""
        return not self.on_answer or b"?" in line

    def opening(self) -> None:
        """A client comes. May raise ConnectionRefusedError."""

    def line(self, line: bytes) -> bytes | None:
        """What of a chosen message reaches the instrument; None: nothing."""
        self.strike()
        return None if self.swallows else line

    def strike(self) -> None:
        """What happens with a chosen message."""

    def passed(self) -> None:
        """A message came that was not chosen."""

    def answer(self, pieces: list[Piece]) -> list[Piece]:
        """What becomes of the answer to a chosen message."""
        return pieces

    def plan(self) -> None:
        """Have it happen at its time, where it is one that does. One whose time was in an earlier session never does
        again in this one."""
        start, now = self.when.start_alone, self.port.bench.now
        if not self.sudden or start is None:
            return
        if self.when.is_over(now):
            self.when.take()
        else:
            self.port.bench.at(max(start, now), self._at_its_time, None)

    def _at_its_time(self, _: object) -> None:
        self.when.take()
        self.note()
        self.strike()

    def note(self) -> None:
        """Put down that it acted."""
        port = self.port
        number = port.openings if self.at_opening else port.exchanges
        port.bench.struck.append(Struck(port.bench.now, self.spec.kind, port.instrument.name, number))


class FaultyPort(Port):
    """Keeps the port's contract towards both sides, and lets its faults at every message, answer and opening.

    exchanges   whole messages so far, in this session; openings likewise
    A connection that was broken raises ConnectionError from `read` and `write` until it is closed or opened again.
    """

    def __init__(
        self,
        bench: Bench,
        instrument: Instrument,
        latency_s: float,
        byte_s: float,
        longest_line: int,
        terminator: bytes,
    ) -> None:
        super().__init__(bench, self, latency_s, byte_s, longest_line, terminator)
        self.bench, self.instrument = bench, instrument
        self.terminator = terminator
        self.faults: list[Fault] = []
        self.exchanges = self.openings = 0
        self.mute = False
        self._deaf_until = self._busy_until = self._gone_until = -math.inf
        self._broken: ConnectionError | None = None
        self._broken_at = math.inf
        self._connection = 0
        self._sent_out = -math.inf

    # the client's side

    @property
    def accepts(self) -> bool:
        now = self.bench.now
        refusing = (fault.when.in_window(now) for fault in self.faults if fault.spec.kind == "refuse")
        return now >= self._gone_until and not any(refusing)

    @property
    def may_vanish(self) -> bool:
        return any(fault.spec.what.place in ("link", "opening") for fault in self.faults)

    def open(self) -> None:
        """A fresh connection; ConnectionRefusedError where a fault has it so."""
        self.close()
        self.openings += 1
        now = self.bench.now
        if now < self._gone_until:
            raise ConnectionRefusedError("nothing is there")
        self.mute = False
        chosen = [fault for fault in self.faults if fault.at_opening and fault.when.chosen(self.openings, now)]
        for fault in chosen:
            fault.note()
            fault.opening()
        self._keep_late(super().open)

    def close(self) -> None:
        self._mend()
        self._keep_late(super().close)

    def _mend(self) -> None:
        if self._broken is not None:
            self._broken, self._broken_at = None, math.inf
            self.bench.unread -= 1

    def write(self, data: bytes) -> None:
        if self._broken is not None:
            raise self._broken
        super().write(data)

    def read(self) -> bytes:
        if self._broken is not None:
            raise self._broken
        return super().read()

    def next_ready(self) -> float:
        """A broken connection can be seen at once."""
        return min(self._broken_at, super().next_ready())

    def flush(self) -> None:
        super().flush()
        self._connection += 1
        self._sent_out = -math.inf

    def _keep_late(self, act: Callable[[], None]) -> None:
        """What is under way on a serial line arrives whoever listens; on a network it dies with its connection."""
        before = self._connection, self._sent_out
        act()
        if self._byte_s:
            self._connection, self._sent_out = before

    # between the two

    def receive(self, line: bytes) -> None:
        """A whole message, on its way to the instrument."""
        self.exchanges += 1
        now = self.bench.now
        for fault in self.faults:
            fault.acting = not fault.at_opening and fault.concerns(line) and fault.when.chosen(self.exchanges, now)
        through: bytes | None = line
        for fault in self.faults:
            if fault.acting and through is not None:
                if not fault.on_answer:
                    fault.note()
                through = fault.line(through)
            else:
                fault.passed()
        if through is None or self.mute or self._broken is not None or now < self._deaf_until:
            return
        if now < self._busy_until:
            self.bench.at(self._busy_until, self.instrument.receive, through)
        else:
            self.instrument.receive(through)

    def overrun(self) -> None:
        self.instrument.overrun()

    def put(self, raw: bytes) -> None:
        """An answer of the instrument."""
        pieces = [Piece(0.0, raw)]
        for fault in self.faults:
            if fault.acting and fault.on_answer:
                before, pieces = pieces, fault.answer(pieces)
                if pieces == before:
                    fault.when.give_back()
                else:
                    fault.note()
        for after_s, part in pieces:
            self.late(after_s, part)

    # what faults do

    def late(self, after_s: float, raw: bytes) -> None:
        """Bytes that set out in `after_s`, s; never before what was given earlier: a line keeps the order."""
        now = self.bench.now
        self._sent_out = due = max(now + after_s, self._sent_out)
        if due <= now:
            super().put(raw)
        else:
            self.bench.at(due, self._arrived, (self._connection, raw))

    def _arrived(self, argument: tuple[int, bytes]) -> None:
        connection, raw = argument
        if connection == self._connection and not self.mute:
            super().put(raw)

    def break_off(self, error: ConnectionError) -> None:
        """The connection is gone from now on; what was under way is lost. Nothing, where nobody holds one."""
        if not self.is_open:
            return
        self.flush()
        self.is_open = False
        self._mend()
        self._broken, self._broken_at = error, self.bench.now
        self.bench.unread += 1
        self.bench.touched += 1

    def be_gone(self, seconds: float) -> None:
        """Nobody can open it for so long."""
        self._gone_until = self.bench.now + seconds
        self.bench.at(self._gone_until, nothing, None)

    def be_deaf(self, seconds: float) -> None:
        """Messages are lost for so long, whoever sends them."""
        self._deaf_until = self.bench.now + seconds

    def be_busy(self, seconds: float) -> None:
        """Messages wait for so long."""
        self._busy_until = self.bench.now + seconds
