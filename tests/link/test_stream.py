"""Links to instruments that send by themselves: the next whole line that begins after the ask, and nothing older."""

from __future__ import annotations

import math

import pytest

from sweeprig.errors import LinkMisuse
from sweeprig.link.inprocess import InProcessLink
from sweeprig.roles import Reply


class StillClock:
    """Time stands; waiting is an error of the test."""

    def now(self) -> float:
        return 0.0

    def utc(self) -> float:
        return 0.0

    def wait(self, until: float, on: object = ()) -> None:
        raise AssertionError(f"waited until {until} on {on}")


class Stream:
    """A port that gives what the test puts into it."""

    def __init__(self) -> None:
        self.coming = b""
        self.written: list[bytes] = []

    def open(self) -> None:
        self.coming = b""

    def write(self, data: bytes) -> None:
        self.written.append(data)

    def next_ready(self) -> float:
        return 0.0 if self.coming else math.inf

    def read(self) -> bytes:
        data, self.coming = self.coming, b""
        return data

    def close(self) -> None:
        return


@pytest.fixture
def port() -> Stream:
    return Stream()


@pytest.fixture
def link(port: Stream) -> InProcessLink:
    """Open and identified."""
    made = InProcessLink("simbench:t", StillClock(), b"\n", port)
    made.open(1.0)
    made.identified = True
    return made


def test_what_came_before_is_passed_over(link: InProcessLink, port: Stream) -> None:
    """Lines that nobody read make the link no trouble, and none of them is handed out."""
    port.coming = b"n 1\nn 2\n"
    link.send(b"", Reply.STREAM, 1.0)
    assert link.take() is None
    port.coming = b"n 3\nn 4\n"
    assert link.take() == b"n 3"
    assert (link.dirty, port.written) == ("", [])


@pytest.mark.parametrize("ending", [b"\n", b"\r\n", b"\r"])
def test_a_line_without_its_beginning_is_no_line(link: InProcessLink, port: Stream, ending: bytes) -> None:
    """Asked in the middle of `n 1234.5`: the rest, `34.5`, is dropped, however it is cut, and the next is whole."""
    port.coming = b"n 12"
    link.send(b"", Reply.STREAM, 1.0)
    for piece in (b"3", b"4.5", ending, b"n 6", b"7" + ending):
        assert link.take() is None
        port.coming = piece
    assert link.take() == b"n 67"


def test_the_rest_of_the_same_reading_is_passed_over_too(link: InProcessLink, port: Stream) -> None:
    """Half a line came with the line that was taken: at the next ask its other half is no line."""
    link.send(b"", Reply.STREAM, 1.0)
    port.coming = b"n 1\nn 2"
    assert link.take() == b"n 1"
    port.coming = b"9\n"
    link.send(b"", Reply.STREAM, 1.0)
    port.coming = b"n 3\n"
    assert link.take() == b"n 3"


def test_a_message_is_sent_where_there_is_one(link: InProcessLink, port: Stream) -> None:
    """An identity query on a streaming instrument goes out like any other."""
    link.send(b"*IDN?", Reply.STREAM, 1.0, early=True)
    port.coming = b"SIMULATED,t,1,1.0\n"
    assert link.take() == b"SIMULATED,t,1,1.0"
    assert port.written == [b"*IDN?\n"]


def test_it_never_falls_silent_and_is_resynchronised_all_the_same(link: InProcessLink, port: Stream) -> None:
    """After a timeout the link is dirty; resynchronising waits for no silence and leaves it clean and unidentified."""
    link.send(b"", Reply.STREAM, 1.0)
    port.coming = b"n 1"
    assert link.take() is None
    assert link.declare_timeout() == b"n 1"
    with pytest.raises(LinkMisuse, match="dirty"):
        link.send(b"", Reply.STREAM, 1.0)
    link.resynchronise(1.0)
    assert (link.dirty, link.identified) == ("", False)
