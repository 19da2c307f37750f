"""Rows of the manual's table of failures that no other file shows: long transfers, lengths at a chunk's edge, speeds.

Rows: `sweeprig manual links`.
"""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING

import pytest

from sweeprig.link.base import CHUNK
from sweeprig.link.registry import open_link
from sweeprig.link.together import together
from sweeprig.roles import Ask, Reply, Steps

if TYPE_CHECKING:
    from sweeprig.clock import SystemClock
    from tests.link.conftest import Pair, PtyFar


def block_reading(within_s: float) -> Steps[bytes]:
    answer = yield Ask(b"TRAC?", Reply.BLOCK, within_s=within_s)
    return answer.raw


def test_a_transfer_in_many_pieces_has_one_deadline(pair: Pair) -> None:
    """Row A18: A block that comes in a hundred pieces, with pauses, is whole as long as its one deadline is kept."""
    data = bytes(range(256)) * 12
    written = b"#4%04d%s\n" % (len(data), data)
    pieces = iter([b"", *(written[at : at + 31] for at in range(0, len(written), 31))])

    def look() -> None:
        if piece := next(pieces, b""):
            pair.far.reply(piece)

    result = together({"scope": (pair.link, block_reading(20.0))}, pair.clock, pair.clock.now() + 30.0, look)["scope"]
    assert result.get() == data
    assert not pair.link.dirty


@pytest.mark.parametrize("length", [*range(CHUNK - 9, CHUNK + 12), 2 * CHUNK - 1, 2 * CHUNK, 2 * CHUNK + 1])
def test_a_reply_as_long_as_a_chunk_has_its_end(tcp_pair: Pair, length: int) -> None:
    """Row A19: Replies whose bytes in all are one or two chunks of the link, or some bytes less or more, come whole."""
    head = 2 + len(str(length))
    data = b"x" * (length - head - 1)
    tcp_pair.ask(b"TRAC?", Reply.BLOCK)
    tcp_pair.far.reply(b"#%d%0*d%s\n" % (head - 2, head - 2, len(data), data))
    assert tcp_pair.awaited() == data
    tcp_pair.ask(b"READ?")
    tcp_pair.far.reply(b"1.5\n")
    assert tcp_pair.awaited() == b"1.5"


@pytest.mark.skipif(sys.platform == "win32", reason="no pseudo-terminals on Windows")
@pytest.mark.parametrize("baud", [9600, 115200])
def test_a_port_is_opened_at_the_stated_speed_only(pty_far: PtyFar, clock: SystemClock, baud: int) -> None:
    """Row C2: Open, and closed again, the port has the stated speed and not that which calls a board's loader."""
    import termios

    def speed() -> int:
        return int(termios.tcgetattr(pty_far.slave)[4])

    link = open_link(f"{pty_far.address}?baud={baud}", clock, clock.now() + 2.0)
    stated = speed()
    link.close()
    assert stated == getattr(termios, f"B{baud}")
    assert speed() == stated
