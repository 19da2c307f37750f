"""What all links share: the rules of link.py, written once. A kind of link supplies four small hooks.

Nothing here knows a socket, a port or a library; foreign exceptions are mapped in `as_link_error` and nowhere else.
"""

from __future__ import annotations

import errno
import math
from abc import ABC, abstractmethod
from contextlib import suppress

from sweeprig.clock import Clock
from sweeprig.errors import LinkError, LinkGarbled, LinkLost, LinkMisuse, LinkTimeout, SweeprigError
from sweeprig.link.framing import parse, parse_line, show, still_owed
from sweeprig.link.link import LARGEST_LINE
from sweeprig.roles import Reply

CHUNK = 65_536
"""Bytes taken from a port at once; with the largest reply it bounds what a link holds."""

REMEMBERED, REMEMBERED_BYTES = 256, 256
"""Messages that a link keeps with their terminator, and the longest of them."""

QUIET_S = 0.2
"""A line is drained when nothing has come for so long."""

_LINE, _NOTHING, _STREAM = Reply.LINE, Reply.NOTHING, Reply.STREAM

# By name, so that this module imports no library that a rig may not need.
_TIMEOUT_NAMES = frozenset({"SerialTimeoutException"})
_LOST_NAMES = frozenset({"termios.error"})


class BaseLink(ABC):
    """The state machine of every link. It is made closed; `open` opens it.

    Hooks, which raise whatever they meet: `_open(deadline)` opens the handle, and closes it again if that fails;
    `_read()` gives the bytes that are there, b"" for none, and raises ConnectionError when the peer has closed;
    `_write(data, deadline)` writes all or raises; `_shut()` closes the handle, also half-open or already closed.

    knows_when_ready  `ready_at` is what it says, so that `take` need not be tried before
    """

    knows_when_ready = False

    def __init__(self, address: str, clock: Clock, terminator: bytes = b"\n") -> None:
        self.address = address
        self.dirty = "never opened"
        self.identified = False
        self.empty_lines = 0
        self._clock = clock
        self._terminator = terminator
        self._written: dict[bytes, bytes] = {}
        self._buffer = bytearray()
        self._awaiting: Reply | None = None
        self._blind = False
        self._owed = b""
        self._is_open = False
        self._streams = self._headless = False

    @abstractmethod
    def _open(self, deadline: float) -> None: ...
    @abstractmethod
    def _read(self) -> bytes: ...
    @abstractmethod
    def _write(self, data: bytes, deadline: float) -> None: ...
    @abstractmethod
    def _shut(self) -> None: ...

    def open(self, deadline: float) -> None:
        """Open the handle and start clean and unidentified; LinkLost where that cannot be had by `deadline`."""
        self._close("not open")
        try:
            self._open(deadline)
        except Exception as error:
            self._close("could not be opened")
            mapped = as_link_error(error, self.address, advice=self._advice())
            raise (
                LinkLost(mapped.what, remedy=self._advice()) if isinstance(mapped, LinkTimeout) else mapped
            ) from error
        self._is_open = True
        self._start_clean()

    def send(self, message: bytes, reply: Reply, deadline: float, early: bool = False) -> None:
        """Write `message` and its terminator and await `reply`; see the contract in link.py.

        Bytes that nobody asked for make a clean link dirty (LinkGarbled): the next reply could not be told from them.
        On a dirty link an early message is written blind: the link stays dirty and `take` has no reply to give.
        """
        blind = bool(self.dirty)
        if blind or self._awaiting is not None or not self.identified:
            self._permit(message, early)
        try:
            if data := self._read():
                self._buffer += data
            if reply is _STREAM:
                self._pass_over()
            elif self._buffer:
                blind = self._before_send(early) or blind
            if message:
                self._write(self._written.get(message) or self._ended(message), deadline)
        except Exception as error:
            raise self._failed(error) from error
        if reply is not _NOTHING:
            self._awaiting = reply
            self._blind = blind

    def _ended(self, message: bytes) -> bytes:
        """The message with its terminator. Short ones are remembered: what is asked is nearly always asked again."""
        data = message + self._terminator
        if len(self._written) < REMEMBERED and len(data) <= REMEMBERED_BYTES:
            self._written[message] = data
        return data

    def take(self) -> bytes | None:
        """The whole reply without terminator (of a block: its data), or None for not yet. Never waits."""
        awaiting = self._awaiting
        if awaiting is None or self._blind:
            raise self._nothing_to_take()
        try:
            data = self._read()
            if not data:
                return None
            buffer = self._buffer
            if awaiting is _LINE and not buffer and not self._owed and not self._headless:
                # nearly every reply: one line that is not empty and its LF, nothing before it and nothing behind it
                last = len(data) - 1
                if 0 < last <= LARGEST_LINE and data.find(b"\n") == last and b"\r" not in data:
                    self._awaiting = None
                    return data[:last]
            buffer += data
            if self._headless:
                self._drop_tail()
            if self._owed or (buffer and buffer[0] in b"\r\n"):
                self._skip_empty()
            used, message = parse(awaiting, buffer)
            if message is None:
                return None
            if awaiting is Reply.STREAM:
                self._pass_over(used)
            elif used == len(buffer):
                self._owed = still_owed(awaiting, buffer, used, message)
                buffer.clear()
            else:
                del buffer[:used]
                self._skip_empty()
                self._refuse_stray()
        except Exception as error:
            raise self._failed(error) from error
        self._awaiting = None
        return message

    def declare_timeout(self) -> bytes:
        """The waiter gave up: mark the link dirty and hand over the partial bytes for the record."""
        partial = bytes(self._buffer)
        self._soil("no whole reply by the deadline")
        return partial

    def resynchronise(self, deadline: float) -> None:
        """Closed and opened anew: on a fresh connection no late reply can arrive."""
        self.open(deadline)

    def _fall_silent(self, deadline: float) -> None:
        """Drain until nothing has come for QUIET_S, then begin clean. LinkLost if it never falls silent.

        An instrument that sends by itself never does, and each of its lines stands for itself: nothing to drain."""
        if self._streams:
            self._start_clean()
            return
        try:
            now = self._clock.now()
            quiet_at = now + QUIET_S
            while now < quiet_at:
                if now >= deadline:
                    raise ConnectionError("the instrument did not fall silent in time")
                self._clock.wait(min(quiet_at, deadline), on=(self,))
                now = self._clock.now()
                if self._read():
                    quiet_at = now + QUIET_S
        except Exception as error:
            raise self._failed(error) from error
        self._start_clean()

    def close(self) -> None:
        """Never raises, may be called twice."""
        self._close("closed")

    def fileno(self) -> int | None:
        """What the clock can select on; None where there is nothing, and while closed."""
        return None

    def ready_at(self) -> float:
        return math.inf

    def _advice(self) -> str:
        """What a person can do when this kind of link is lost."""
        return "Check power, cable and address"

    def _start_clean(self) -> None:
        self._buffer.clear()
        self._awaiting = None
        self._blind = False
        self._owed = b""
        self._headless = False
        self.identified = False
        self.dirty = ""

    def _close(self, why: str) -> None:
        with suppress(Exception):
            self._shut()
        self._is_open = False
        self.identified = False
        self._soil(why)

    def _soil(self, why: str) -> None:
        """Dirty from now on. What had come is dropped, so that it can never be read as a reply."""
        self.dirty = why
        self._buffer.clear()
        self._awaiting = None
        self._owed = b""

    def _permit(self, message: bytes, early: bool) -> None:
        """Raise LinkMisuse (LinkLost on a closed link) unless `message` may be sent now; nothing is written then."""
        if self._awaiting is not None and not self._blind:
            raise LinkMisuse(f"{self.address}: {show(message)} was sent before the last reply was taken")
        if not self._is_open:
            raise LinkLost(f"{self.address}: the link is closed ({self.dirty})", remedy="Resynchronise it first")
        if not early and self.dirty:
            raise LinkMisuse(f"{self.address}: {show(message)} was sent on a dirty link ({self.dirty})")
        if not early and not self.identified:
            raise LinkMisuse(f"{self.address}: {show(message)} was sent before the identity query was answered")

    def _nothing_to_take(self) -> LinkError:
        if self._awaiting is None:
            return LinkMisuse(f"{self.address}: no reply is outstanding")
        self._awaiting = None
        return LinkGarbled(
            f"{self.address}: the message was sent blind; its reply cannot be told from a late one ({self.dirty})",
            remedy="Resynchronise the link, then ask again",
        )

    def _before_send(self, early: bool) -> bool:
        """Bytes have come although no reply is due: True if the link is dirty by them and the message goes out blind.

        On a link that has not said who it is they are a banner or half a line; an early message is never held back.
        """
        if self.dirty or not self.identified:
            self._buffer.clear()
            self._owed = b""
            return False
        self._skip_empty()
        if early and self._buffer:
            self._soil(f"bytes came that nobody asked for: {show(self._buffer)}")
            return True
        self._refuse_stray()
        return False

    def _refuse_stray(self) -> None:
        if self._buffer:
            raise LinkGarbled(f"bytes came that nobody asked for: {show(self._buffer)}")

    def _pass_over(self, used: int = 0) -> None:
        """A stream: what has come is dropped behind the `used` bytes of a message; of a line begun, the rest too."""
        self._streams = True
        if len(self._buffer) > used:
            self._headless = self._buffer[-1] not in b"\r\n"
        self._buffer.clear()
        self._owed = b""

    def _drop_tail(self) -> None:
        """The rest of a line whose beginning was passed over is no line."""
        used, message = parse_line(self._buffer)
        del self._buffer[: used if message is not None else len(self._buffer)]
        self._headless = message is None

    def _skip_empty(self) -> None:
        buffer = self._buffer
        while self._owed and buffer:
            place = self._owed.find(buffer[0])
            self._owed = self._owed[place + 1 :] if place >= 0 else b""
            if place >= 0:
                del buffer[0]
        while buffer and buffer[0] in b"\r\n":
            used, message = parse_line(buffer)
            self._owed = still_owed(Reply.LINE, buffer, used, message or b"")
            del buffer[:used]
            self.empty_lines += 1

    def _failed(self, error: Exception) -> LinkError:
        """The error to raise for `error`; the link is dirty, and closed when its peer is lost."""
        mapped = as_link_error(error, self.address, bytes(self._buffer), self._advice())
        if isinstance(mapped, LinkLost):
            self._close(f"lost: {_text(error)}")
        else:
            self._soil(_text(error))
        return mapped


def as_link_error(error: Exception, address: str, partial: bytes = b"", advice: str | None = None) -> LinkError:
    """A foreign exception as one of the four classes; the caller raises it `from error`.

    timeout  TimeoutError without an error number, and the serial library's write timeout
    lost     every other OSError (the serial library's among them), EOFError, the terminal library's own error. An OS
             error ETIMEDOUT is the system's verdict on a connection, not a reply that is late
    garbled  UnicodeError; LinkGarbled from the parsers, which know no address
    misuse   the rest: a wrong argument, a closed handle, our own fault
    """
    kind = _class_for(error)
    remedy = error.remedy if isinstance(error, LinkError) else None
    if remedy is None and kind is LinkLost:
        remedy = advice
    return kind(f"{address}: {_text(error)}", partial=partial or getattr(error, "partial", b""), remedy=remedy)


def _class_for(error: Exception) -> type[LinkError]:
    if isinstance(error, LinkError):
        return type(error)
    names = {name for kind in type(error).__mro__ for name in (kind.__name__, f"{kind.__module__}.{kind.__name__}")}
    if not names.isdisjoint(_TIMEOUT_NAMES):
        return LinkTimeout
    if isinstance(error, TimeoutError) and error.errno != errno.ETIMEDOUT:
        return LinkTimeout
    if isinstance(error, OSError | EOFError) or not names.isdisjoint(_LOST_NAMES):
        return LinkLost
    return LinkGarbled if isinstance(error, UnicodeError) else LinkMisuse


def _text(error: Exception) -> str:
    return error.what if isinstance(error, SweeprigError) else str(error) or type(error).__name__
