"""Framing: pure parsers fed whole, halved, byte by byte, with garbage before and after.

Forms after IEEE 488.2 (response message terminator NL; definite and indefinite length arbitrary block response data)
and SCPI-1999 (error queue); clause numbers from memory, forms as in instrument manuals.
"""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.errors import LinkGarbled
from sweeprig.link.framing import parse, parse_block, parse_line, show, still_owed
from sweeprig.roles import Reply

TEXT = st.binary(max_size=60).map(lambda raw: raw.replace(b"\r", b"").replace(b"\n", b""))
TERMINATORS = st.sampled_from([b"\n", b"\r\n", b"\r"])
DATA = st.binary(max_size=300)


def block(data: bytes) -> bytes:
    """The definite-length form, written independently of the parser."""
    length = b"%d" % len(data)
    return b"#%d%s%s" % (len(length), length, data)


@given(text=TEXT, terminator=TERMINATORS)
def test_line_whole(text: bytes, terminator: bytes) -> None:
    """A line with any of the three terminators gives its text and uses text and terminator."""
    assert parse_line(text + terminator) == (len(text + terminator), text)


@given(text=TEXT, terminator=TERMINATORS)
def test_line_byte_by_byte(text: bytes, terminator: bytes) -> None:
    """Without its first terminator byte a line is not there, and nothing of it is used; with it, it is."""
    whole = text + terminator
    assert [parse_line(whole[:n]) for n in range(len(text) + 1)] == [(0, None)] * (len(text) + 1)
    assert parse_line(whole[: len(text) + 1]) == (len(text) + 1, text)


@given(first=TEXT, second=TEXT, terminator=st.sampled_from([b"\n", b"\r\n"]))
def test_line_leaves_what_follows(first: bytes, second: bytes, terminator: bytes) -> None:
    """What stands behind a line is left in the buffer, and is the next line."""
    stream = first + terminator + second + terminator
    used, message = parse_line(stream)
    assert message == first
    assert parse_line(stream[used:]) == (len(second + terminator), second)


@pytest.mark.parametrize(
    ("buffer", "lines"),
    [
        (b"1.5\n\n", [b"1.5", b""]),
        (b"1.5\r\n\r\n", [b"1.5", b""]),
        (b"1.5\r\r", [b"1.5", b""]),
        (b"\n1.5\n", [b"", b"1.5"]),
        (b"\r\n1.5\r\n", [b"", b"1.5"]),
    ],
)
def test_double_terminators_are_empty_lines(buffer: bytes, lines: list[bytes]) -> None:
    """A doubled terminator, of any kind, is one empty line more and no more than one."""
    found = []
    while buffer:
        used, message = parse_line(buffer)
        found.append(message)
        buffer = buffer[used:]
    assert found == lines


@pytest.mark.parametrize(
    "reply",
    [
        b"SIMULATED,bench meter,0,0",  # *IDN?: four fields, "0" where unknown (IEEE 488.2, 10.14 from memory)
        b'-113,"Undefined header"',  # SYST:ERR? (SCPI-1999, 21.8)
        b"+1.23400000E+00;1;#H1F",  # several queries in one message are answered with semicolons (IEEE 488.2, 8.4)
        b"1.0,****,2.0,",  # a text marker for "no value" and a trailing comma, as seen in the wild
        b"12 \xb5A \xff",  # not ASCII: framing hands out bytes and decodes nothing
    ],
)
def test_response_messages_are_one_line(reply: bytes) -> None:
    """Row B9: Commas, semicolons, quotes, '#' and bytes above 127 do not end a response message; NL does."""
    assert parse(Reply.LINE, bytearray(reply + b"\n")) == (len(reply) + 1, reply)


def test_line_too_long_is_garbled() -> None:
    """A line of the largest size passes, one byte more is garbled, with and without its terminator."""
    assert parse_line(b"x" * 8 + b"\n", largest=8) == (9, b"x" * 8)
    assert parse_line(b"x" * 8, largest=8) == (0, None)
    for buffer in (b"x" * 9, b"x" * 9 + b"\n"):
        with pytest.raises(LinkGarbled, match="more than 8 bytes"):
            parse_line(buffer, largest=8)


@given(data=DATA, terminator=st.sampled_from([b"", b"\n", b"\r\n", b"\r"]))
def test_block_whole(data: bytes, terminator: bytes) -> None:
    """A block gives its data, LF and '#' in them or not, and uses the optional terminator behind it."""
    assert parse_block(block(data) + terminator) == (len(block(data) + terminator), data)


@given(data=DATA)
def test_block_byte_by_byte(data: bytes) -> None:
    """A block short by any number of bytes is not there yet, and nothing of it is used."""
    whole = block(data)
    assert {parse_block(whole[:n]) for n in range(len(whole))} == {(0, None)}


@given(data=DATA, behind=st.binary(min_size=1, max_size=20).filter(lambda raw: raw[0] not in b"\r\n"))
def test_block_leaves_garbage_behind_it(data: bytes, behind: bytes) -> None:
    """Bytes behind a block that are no terminator are not used."""
    assert parse_block(block(data) + behind) == (len(block(data)), data)


def test_block_examples() -> None:
    """Examples written by hand: one digit, leading zeros, no data, a length of nine digits (IEEE 488.2, 8.7.9)."""
    assert parse_block(b"#15hello") == (8, b"hello")
    assert parse_block(b"#3005hello\n") == (11, b"hello")
    assert parse_block(b"#10\n") == (4, b"")
    assert parse_block(b"#9000000002ab") == (13, b"ab")


@pytest.mark.parametrize(
    ("buffer", "why"),
    [
        (b"#0data\n", "'#0' is ended by a signal"),
        (b"#0", "'#0' is ended by a signal"),
        (b"1.5\n", "instead of '#'"),
        (b"\xff#15hello", "instead of '#'"),
        (b"#A0000000005hello", "no digit 1 to 9"),
        (b"#2x5", "length that is no number"),
        (b"#2-5", "length that is no number"),
        (b"#2 5", "length that is no number"),
    ],
)
def test_block_garbled(buffer: bytes, why: str) -> None:
    """The indefinite form, garbage before the '#', and a header that is no header are garbled at once."""
    with pytest.raises(LinkGarbled, match=why):
        parse_block(buffer)


def test_block_too_large_is_refused_by_its_header() -> None:
    """An announced size above the bound is garbled before any data has come."""
    with pytest.raises(LinkGarbled, match="101 bytes announced, 100 allowed"):
        parse_block(b"#3101", largest=100)
    assert parse_block(b"#3100", largest=100) == (0, None)


@pytest.mark.parametrize(
    ("reply", "buffer", "owed"),
    [
        (Reply.LINE, b"1.5\n", b""),
        (Reply.LINE, b"1.5\r\n", b""),
        (Reply.LINE, b"1.5\r", b"\n"),
        (Reply.LINE, b"1.5\rx", b""),
        (Reply.BLOCK, b"#12ab", b"\r\n"),
        (Reply.BLOCK, b"#12a\n", b"\r\n"),
        (Reply.BLOCK, b"#12ab\n", b""),
        (Reply.BLOCK, b"#12ab\r", b"\n"),
    ],
)
def test_what_is_still_owed(reply: Reply, buffer: bytes, owed: bytes) -> None:
    """After a reply it is known which terminator bytes may still come and would be no empty line."""
    used, message = parse(reply, buffer)
    assert message is not None
    assert still_owed(reply, buffer, used, message) == owed


def test_show_is_short_and_readable() -> None:
    """Error texts show the first 40 bytes, unprintable ones escaped."""
    assert show(b"\xff1.5\n") == r"'\xff1.5\n'"
    assert show(b"a" * 41) == "'" + "a" * 40 + "'…"
