"""The shared state machine: the mapping of foreign errors, and that no failure leaves a handle open."""

from __future__ import annotations

import errno
import io
import socket
import sys
from typing import TYPE_CHECKING

import pytest
import serial

from sweeprig.clock import SystemClock
from sweeprig.errors import LinkError, LinkGarbled, LinkLost, LinkMisuse, LinkTimeout
from sweeprig.link.base import BaseLink, as_link_error
from sweeprig.roles import Reply

if TYPE_CHECKING:
    from tests.link.conftest import Pair, PortFar

FOREIGN: list[tuple[Exception, type[LinkError]]] = [
    (TimeoutError("timed out"), LinkTimeout),
    (serial.SerialTimeoutException("Write timeout"), LinkTimeout),
    (TimeoutError(errno.ETIMEDOUT, "Connection timed out"), LinkLost),
    (OSError(errno.ETIMEDOUT, "Connection timed out"), LinkLost),
    (ConnectionRefusedError(errno.ECONNREFUSED, "refused"), LinkLost),
    (ConnectionResetError(errno.ECONNRESET, "reset"), LinkLost),
    (ConnectionAbortedError(errno.ECONNABORTED, "aborted"), LinkLost),
    (BrokenPipeError(errno.EPIPE, "broken pipe"), LinkLost),
    (PermissionError(errno.EACCES, "permission denied"), LinkLost),
    (FileNotFoundError(errno.ENOENT, "no such file"), LinkLost),
    (OSError(errno.EIO, "input/output error"), LinkLost),
    (OSError(errno.ENOTTY, "inappropriate ioctl"), LinkLost),
    (OSError(errno.EHOSTUNREACH, "no route to host"), LinkLost),
    (OSError("bare"), LinkLost),
    (socket.gaierror(socket.EAI_NONAME, "name or service not known"), LinkLost),
    (serial.SerialException("device reports readiness to read but returned no data"), LinkLost),
    (serial.PortNotOpenError(), LinkLost),
    (EOFError(), LinkLost),
    (UnicodeDecodeError("ascii", b"\xb5", 0, 1, "ordinal not in range"), LinkGarbled),
    (ValueError("could not convert"), LinkMisuse),
    (io.UnsupportedOperation("fileno"), LinkLost),
    (TypeError("a bytes-like object is required"), LinkMisuse),
    (ZeroDivisionError("float division by zero"), LinkMisuse),
    (KeyError("port"), LinkMisuse),
    (LinkLost("the peer is gone"), LinkLost),
    (LinkGarbled("no line", partial=b"x"), LinkGarbled),
]
if sys.platform != "win32":
    import termios

    FOREIGN.append((termios.error(errno.EIO, "input/output error"), LinkLost))
NAMES = [f"{type(error).__module__}.{type(error).__qualname__}-{number}" for number, (error, _) in enumerate(FOREIGN)]


class Broken(BaseLink):
    """A link whose hooks raise what they are told to, and which counts the closings of its handle."""

    def __init__(self, clock: SystemClock, error: Exception, at: str) -> None:
        super().__init__("broken", clock)
        self.error = error
        self.at = at
        self.shut = 0

    def fails(self, at: str) -> None:
        if self.at == at:
            raise self.error

    def _open(self, deadline: float) -> None:
        del deadline
        self.fails("open")

    def _read(self) -> bytes:
        self.fails("read")
        return b""

    def _write(self, data: bytes, deadline: float) -> None:
        del data, deadline
        self.fails("write")

    def _shut(self) -> None:
        self.shut += 1
        self.fails("shut")


@pytest.mark.parametrize(("error", "expected"), FOREIGN, ids=NAMES)
def test_every_foreign_error_is_mapped(error: Exception, expected: type[LinkError]) -> None:
    """Rows A3 and C12: Each foreign exception has one class of the four, and the text names the link."""
    mapped = as_link_error(error, "TCPIP0::x::1::SOCKET", b"12.", "Look at the cable")
    assert type(mapped) is expected
    assert mapped.what.startswith("TCPIP0::x::1::SOCKET: ")
    assert mapped.partial == b"12."
    assert (mapped.remedy == "Look at the cable") is (expected is LinkLost)


@pytest.mark.parametrize("at", ["read", "write"])
@pytest.mark.parametrize(("error", "expected"), FOREIGN, ids=NAMES)
def test_a_failed_send_is_mapped(error: Exception, expected: type[LinkError], at: str, clock: SystemClock) -> None:
    """Whatever reading or writing raises leaves `send` as one of the four, cause kept, link dirty, closed if lost."""
    link = Broken(clock, error, at)
    link.open(clock.now())
    link.identified = True
    opened = link.shut
    with pytest.raises(LinkError) as caught:
        link.send(b"READ?", Reply.LINE, clock.now())
    assert type(caught.value) is expected
    assert caught.value.__cause__ is error
    assert link.dirty
    assert (link.shut > opened) is (expected is LinkLost)


@pytest.mark.parametrize(("error", "expected"), FOREIGN, ids=NAMES)
def test_a_failed_take_is_mapped(error: Exception, expected: type[LinkError], clock: SystemClock) -> None:
    """Whatever reading raises leaves `take` as one of the four, cause kept, link dirty, closed if lost."""
    link = Broken(clock, error, "later")
    link.open(clock.now())
    link.identified = True
    link.send(b"READ?", Reply.LINE, clock.now())
    link.at = "read"
    opened = link.shut
    with pytest.raises(LinkError) as caught:
        link.take()
    assert type(caught.value) is expected
    assert caught.value.__cause__ is error
    assert link.dirty
    assert (link.shut > opened) is (expected is LinkLost)


@pytest.mark.parametrize(("error", "expected"), FOREIGN, ids=NAMES)
def test_a_failed_opening_is_mapped(error: Exception, expected: type[LinkError], clock: SystemClock) -> None:
    """Whatever opening raises is mapped and its handle closed; one that was not taken in time is lost."""
    link = Broken(clock, error, "open")
    with pytest.raises(LinkError) as caught:
        link.open(clock.now())
    assert type(caught.value) is (LinkLost if expected is LinkTimeout else expected)
    assert caught.value.__cause__ is error
    assert link.shut == 2  # what was open before, and what was half open
    assert link.dirty == "could not be opened"


def test_closing_never_raises(clock: SystemClock) -> None:
    """Row A16: An error of the old handle's closing is swallowed: it must not keep a link from being opened anew."""
    link = Broken(clock, OSError("stuck"), "shut")
    link.open(clock.now())
    link.close()
    link.close()
    link.resynchronise(clock.now())
    assert link.dirty == ""


def test_interrupts_are_not_mapped(clock: SystemClock) -> None:
    """Ctrl-C in the middle of an exchange is no link error."""

    class Interrupted(Broken):
        def _read(self) -> bytes:
            raise KeyboardInterrupt

    link = Interrupted(clock, ValueError(), "never")
    link.open(clock.now())
    link.identified = True
    with pytest.raises(KeyboardInterrupt):
        link.send(b"READ?", Reply.LINE, clock.now())


def test_resynchronising_in_process_opens_anew(port_pair: Pair, port_far: PortFar) -> None:
    """On the simulated bench resynchronising is a fresh connection, and what still comes late is drained."""
    port_pair.ask(b"READ?")
    port_far.reply(b"1.")
    assert port_pair.link.take() is None
    port_pair.link.declare_timeout()
    port_far.reply(b"5\n")
    port_pair.link.resynchronise(port_pair.clock.now() + 2.0)
    assert (port_far.opened, port_far.unread, port_pair.link.dirty) == (2, b"", "")


def test_in_process_link_knows_when_bytes_will_be_there(port_pair: Pair, port_far: PortFar) -> None:
    """The simulated bench's clock asks the link, and the link its port, for the next moment with bytes."""
    assert port_pair.link.ready_at() == float("inf")
    port_far.reply(b"1\n")
    assert port_pair.link.ready_at() == -float("inf")
    assert port_pair.link.fileno() is None


def test_other_terminators_are_sent(port_far: PortFar, clock: SystemClock) -> None:
    """The terminator given at opening ends every message sent."""
    from sweeprig.link.inprocess import InProcessLink

    link = InProcessLink("simbench:meter", clock, b"\r\n", port_far)
    link.open(clock.now())
    link.send(b"*IDN?", Reply.LINE, clock.now(), early=True)
    assert port_far.written == b"*IDN?\r\n"
