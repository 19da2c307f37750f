"""Where one reply ends: pure parsers, buffer in, (used, message or None) out. No port, clock or state lives here.

`used` bytes belong to the message and its terminator; with None nothing was used and more bytes are needed.
"""

from __future__ import annotations

from sweeprig.errors import LinkGarbled
from sweeprig.link.link import LARGEST_BLOCK, LARGEST_LINE
from sweeprig.roles import Reply

LF = 0x0A
CR = 0x0D
_SHOWN = 40
Buffer = bytes | bytearray
Parsed = tuple[int, bytes | None]


def parse(reply: Reply, buffer: Buffer) -> Parsed:
    """`parse_line` or `parse_block`, by the reply awaited (never NOTHING)."""
    return parse_block(buffer) if reply is Reply.BLOCK else parse_line(buffer)


def parse_line(buffer: Buffer, largest: int = LARGEST_LINE) -> Parsed:
    """One line, ended by LF, CR LF or CR, without its terminator; an empty line is the message b"".

    Any of the three ends a line whatever the instrument was told to expect: what it answers with often differs from
    what it takes, and a wrong guess would look like silence. A line of more than `largest` bytes is LinkGarbled.
    IEEE 488.2 ends a response with LF and END; on a raw socket or a serial line only the LF is left.
    """
    feed = buffer.find(b"\n")
    carriage = buffer.find(b"\r", 0, feed) if feed >= 0 else buffer.find(b"\r")
    end = carriage if carriage >= 0 else feed
    if (len(buffer) if end < 0 else end) > largest:
        raise LinkGarbled(f"no line: more than {largest} bytes without a terminator, beginning {show(buffer)}")
    if end < 0:
        return 0, None
    return end + (2 if end + 1 == feed and end == carriage else 1), bytes(buffer[:end])


def parse_block(buffer: Buffer, largest: int = LARGEST_BLOCK) -> Parsed:
    """The data of one definite-length block `#nL…L<data>`; LF, CR LF or CR behind it is used up when it is there.

    `n` is one digit 1 to 9, then come n digits with the number of data bytes (IEEE 488.2, definite length arbitrary
    block). The indefinite form `#0` ends only with END, which raw sockets and serial lines do not carry: LinkGarbled,
    like a missing `#`, a length that is no number, and one above `largest`.
    """
    if not buffer:
        return 0, None
    if buffer[0] != ord("#"):
        raise LinkGarbled(f"no block: it begins {show(buffer)} instead of '#'")
    if len(buffer) < 2:
        return 0, None
    digits = buffer[1] - ord("0")
    if digits == 0:
        raise LinkGarbled(
            "no block of known length: '#0' is ended by a signal that this link does not carry",
            remedy="Set the instrument to definite-length blocks",
        )
    if not 1 <= digits <= 9:
        raise LinkGarbled(f"no block: {show(buffer)} has no digit 1 to 9 behind the '#'")
    head = 2 + digits
    length = bytes(buffer[2:head])
    if length and not length.isdigit():
        raise LinkGarbled(f"no block: {show(buffer)} has a length that is no number")
    if len(length) < digits:
        return 0, None
    size = int(length)
    if size > largest:
        raise LinkGarbled(f"no block that may be read: {size} bytes announced, {largest} allowed")
    if len(buffer) < head + size:
        return 0, None
    return head + size + _terminator(buffer, head + size), bytes(buffer[head : head + size])


def still_owed(reply: Reply, buffer: Buffer, used: int, message: bytes) -> bytes:
    """What may still come of the terminator of the parsed `message`: b"", b"\\n" or b"\\r\\n".

    A reply is handed out at its first terminator byte, so the second half of CR LF, or the optional terminator of a
    block, can arrive later; it is no empty line then.
    """
    if used < len(buffer):
        return b""
    if reply is Reply.BLOCK and used == 2 + buffer[1] - ord("0") + len(message):
        return b"\r\n"
    return b"\n" if buffer[used - 1] == CR else b""


def show(buffer: Buffer) -> str:
    """The first bytes, readable in an error text."""
    return repr(bytes(buffer[:_SHOWN]))[1:] + ("…" if len(buffer) > _SHOWN else "")


def _terminator(buffer: Buffer, at: int) -> int:
    """Bytes of the terminator that stands at `at`: 0, 1 or 2."""
    if buffer.startswith(b"\r\n", at):
        return 2
    return 1 if at < len(buffer) and buffer[at] in (LF, CR) else 0
