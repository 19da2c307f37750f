"""The link contract, the same tests on a real TCP connection, a real pseudo-terminal and an in-process port."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

from sweeprig.errors import LinkGarbled, LinkLost, LinkMisuse
from sweeprig.link.link import LARGEST_LINE, Link
from sweeprig.roles import Reply

if TYPE_CHECKING:
    from tests.link.conftest import Pair

REPLIES = [b"1.5\n", b"1.5\r\n", b"1.5\r", b"1.5\n\n", b"\n1.5\n", b"\r\n1.5\r\n\r\n"]


def test_is_a_link(pair: Pair) -> None:
    """Every kind of link keeps the Link protocol and is clean when it is opened."""
    assert isinstance(pair.link, Link)
    assert pair.link.dirty == ""


@pytest.mark.parametrize("reply", REPLIES)
def test_row_9_terminators(pair: Pair, reply: bytes) -> None:
    """Row A9: LF, CR LF, CR and doubled ones each end a reply, which comes without them."""
    pair.ask(b"READ?")
    pair.far.reply(reply)
    assert pair.awaited() == b"1.5"


def test_row_9_no_terminator(pair: Pair) -> None:
    """Row A9: a reply without a terminator is never a value; its bytes are handed over for the record."""
    pair.ask(b"READ?")
    pair.far.reply(b"1.5")
    assert pair.awaited(0.05) is None
    assert pair.link.declare_timeout() == b"1.5"


def test_row_10_empty_line_behind_a_reply(pair: Pair) -> None:
    """Row A10: a second terminator does not answer the next query; it is counted."""
    pair.ask(b"FIRST?")
    pair.far.reply(b"1\n\n")
    assert pair.awaited() == b"1"
    pair.ask(b"SECOND?")
    pair.far.reply(b"2\n")
    assert pair.awaited() == b"2"
    assert pair.link.empty_lines == 1


def test_row_10_empty_lines_before_a_reply(pair: Pair) -> None:
    """Row A10: empty lines that come after the query are skipped before its reply, and counted."""
    pair.ask(b"READ?")
    pair.far.reply(b"\n\r\n")
    assert pair.awaited(0.02) is None
    pair.far.reply(b"2\n")
    assert pair.awaited() == b"2"
    assert pair.link.empty_lines == 2


def test_second_half_of_cr_lf_is_no_empty_line(pair: Pair) -> None:
    """A CR LF whose LF comes later ends one line only, and nothing is counted."""
    pair.ask(b"FIRST?")
    pair.far.reply(b"1\r")
    assert pair.awaited() == b"1"
    pair.far.reply(b"\n")
    pair.arrived()
    pair.ask(b"SECOND?")
    pair.far.reply(b"2\r\n")
    assert pair.awaited() == b"2"
    assert pair.link.empty_lines == 0


def test_row_44_partial_line_is_no_value(pair: Pair) -> None:
    """Rows A7 and C7: "12." is not yet a reply, "12.7" is one when its terminator has come; the link stays clean."""
    pair.ask(b"READ?")
    pair.far.reply(b"12.")
    assert pair.awaited(0.05) is None
    assert pair.link.dirty == ""
    pair.far.reply(b"7\n")
    assert pair.awaited() == b"12.7"


def test_row_6_late_reply_never_answers_the_next_query(pair: Pair) -> None:
    """Row A6: after a timeout nothing may be asked until the link is resynchronised, and the late reply is gone."""
    pair.ask(b"FIRST?")
    assert pair.awaited(0.02) is None
    pair.link.declare_timeout()
    pair.far.reply(b"1\n")
    with pytest.raises(LinkMisuse, match=r"dirty link \(no whole reply by the deadline\)"):
        pair.link.send(b"SECOND?", Reply.LINE, pair.clock.now() + 1.0)
    pair.link.resynchronise(pair.clock.now() + 5.0)
    assert not pair.link.identified
    pair.ask(b"*IDN?", early=True)
    pair.far.reply(b"SIMULATED,meter,7,0\n")
    assert pair.awaited() == b"SIMULATED,meter,7,0"


def test_row_7_tail_of_a_split_reply_is_never_a_value(pair: Pair) -> None:
    """Row A7: of "1.23", pause, "4E+0" the timeout keeps "1.23" for the record, and the tail never comes out."""
    pair.ask(b"READ?")
    pair.far.reply(b"1.23")
    assert pair.awaited(0.05) is None
    assert pair.link.declare_timeout() == b"1.23"
    pair.far.reply(b"4E+0\n")
    with pytest.raises(LinkMisuse):
        pair.link.take()
    pair.link.resynchronise(pair.clock.now() + 5.0)
    pair.ask(b"*IDN?", early=True)
    assert pair.awaited(0.05) is None


def test_row_1_closed_peer_is_lost_at_once(pair: Pair) -> None:
    """Row A1: a peer that closes instead of answering is LinkLost at once, long before any deadline."""
    pair.ask(b"READ?")
    pair.far.vanish()
    began = pair.clock.now()
    with pytest.raises(LinkLost):
        pair.awaited()
    assert pair.clock.now() - began < 1.0
    assert pair.link.fileno() is None
    assert pair.link.dirty.startswith("lost")


def test_lost_link_refuses_even_early_messages(pair: Pair) -> None:
    """On a link that has lost its peer an early message is LinkLost too: there is no handle to write to."""
    pair.ask(b"READ?")
    pair.far.vanish()
    with pytest.raises(LinkLost):
        pair.awaited()
    with pytest.raises(LinkLost, match="the link is closed"):
        pair.link.send(b"OUTP OFF", Reply.NOTHING, pair.clock.now() + 1.0, early=True)


def test_one_reply_outstanding(pair: Pair) -> None:
    """Rows A13 and B4: A second message before the first reply was taken is misuse; it is not written and the first
    goes on."""
    pair.ask(b"FIRST?")
    with pytest.raises(LinkMisuse, match="before the last reply was taken"):
        pair.link.send(b"SECOND?", Reply.LINE, pair.clock.now() + 1.0)
    pair.far.reply(b"1\n")
    assert pair.awaited() == b"1"
    pair.ask(b"THIRD?")


def test_nothing_is_outstanding_after_a_command(pair: Pair) -> None:
    """Row B3: A message that awaits nothing leaves the link free for the next, and there is nothing to take."""
    pair.ask(b"OUTP ON", Reply.NOTHING)
    with pytest.raises(LinkMisuse, match="no reply is outstanding"):
        pair.link.take()
    pair.ask(b"OUTP?")


def test_block_in_pieces(pair: Pair) -> None:
    """Row B11: A block with LF in its data comes whole, however it was cut; its late terminator is no empty line."""
    pair.ask(b"CURV?", Reply.BLOCK)
    pair.far.reply(b"#1")
    assert pair.awaited(0.02) is None
    pair.far.reply(b"5a\n\n")
    assert pair.awaited(0.02) is None
    pair.far.reply(b"bc")
    assert pair.awaited() == b"a\n\nbc"
    pair.far.reply(b"\r\n")
    pair.arrived()
    pair.ask(b"READ?")
    pair.far.reply(b"1\n")
    assert pair.awaited() == b"1"
    assert pair.link.empty_lines == 0


def test_garbage_behind_a_reply(pair: Pair) -> None:
    """Two lines for one query: which is the reply cannot be known, so the link is garbled and dirty."""
    pair.ask(b"READ?")
    pair.far.reply(b"1\n2\n")
    with pytest.raises(LinkGarbled, match="nobody asked for: '2"):
        pair.awaited()
    assert "nobody asked for" in pair.link.dirty


def test_stray_bytes_before_a_query(pair: Pair) -> None:
    """Bytes that came unasked make the link dirty before the next query is written."""
    pair.far.reply(b"7\n")
    pair.arrived()
    with pytest.raises(LinkGarbled, match="nobody asked for") as caught:
        pair.link.send(b"READ?", Reply.LINE, pair.clock.now() + 1.0)
    assert caught.value.partial == b"7\n"
    assert pair.link.dirty


def test_streaming_garbage_is_bounded(pair: Pair) -> None:
    """A stream without a terminator is garbled as soon as it exceeds the largest line, and nothing of it is kept."""
    pair.ask(b"READ?")
    for _ in range(LARGEST_LINE // 1024):
        pair.far.reply(b"x" * 1024)
        assert pair.awaited(0.01) is None
    pair.far.reply(b"x")
    with pytest.raises(LinkGarbled, match=f"more than {LARGEST_LINE} bytes"):
        pair.awaited()
    assert pair.link.declare_timeout() == b""


def test_early_message_goes_out_although_stray_bytes_came(pair: Pair) -> None:
    """Switching off is never held back: with stray bytes it is written blind and the link is dirty afterwards."""
    pair.far.reply(b"7\n")
    pair.arrived()
    pair.ask(b"OUTP OFF", Reply.NOTHING, early=True)
    assert "nobody asked for" in pair.link.dirty


def test_blind_message_has_no_reply(pair: Pair) -> None:
    """On a dirty link an early query is written, but what then comes is not handed out as its reply."""
    pair.ask(b"READ?")
    pair.link.declare_timeout()
    pair.ask(b"OUTP OFF;OUTP?", early=True)
    pair.far.reply(b"0\n")
    with pytest.raises(LinkGarbled, match="sent blind"):
        pair.link.take()
    pair.ask(b"OUTP OFF", Reply.NOTHING, early=True)


def test_only_early_messages_before_the_identity(pair: Pair) -> None:
    """Row C6: Until the caller says that the instrument is identified, nothing but early messages is written."""
    pair.link.identified = False
    with pytest.raises(LinkMisuse, match="before the identity query was answered"):
        pair.link.send(b"READ?", Reply.LINE, pair.clock.now() + 1.0)
    pair.ask(b"*IDN?", early=True)


def test_banner_before_the_identity_is_dropped(pair: Pair) -> None:
    """Row C5: What an instrument says by itself after opening is not taken for its identity."""
    pair.link.identified = False
    pair.far.reply(b"oot ready\nhalf a li")
    pair.arrived()
    pair.ask(b"*IDN?", early=True)
    pair.far.reply(b"A,B,C,D\n")
    assert pair.awaited() == b"A,B,C,D"


def test_close_twice(pair: Pair) -> None:
    """Closing never raises and may be repeated; a closed link takes no message."""
    pair.link.close()
    pair.link.close()
    assert pair.link.fileno() is None
    with pytest.raises(LinkLost, match="the link is closed"):
        pair.link.send(b"READ?", Reply.LINE, pair.clock.now() + 1.0)
