"""`together` on a clock that jumps and links that answer by plan: values, pacing, looking, and who is told."""

from __future__ import annotations

from collections.abc import Generator
from typing import TYPE_CHECKING, Any

import pytest

from sweeprig.errors import LinkGarbled, LinkLost
from sweeprig.link.link import Link
from sweeprig.link.registry import open_link
from sweeprig.link.together import LOOK_S, Result, together
from sweeprig.roles import Answer, Ask, Reply, Steps

if TYPE_CHECKING:
    from tests.link.conftest import JumpingClock, Pair, Planned, PortFar

START = 100.0


def read(times: int = 1, ask: Ask | None = None) -> Steps[list[Answer]]:
    """Steps that ask `ask` so many times and return the answers."""
    answers = []
    for _ in range(times):
        answer = yield Ask(b"READ?") if ask is None else ask
        answers.append(answer)
    return answers


def test_planned_link_is_a_link(jumping: JumpingClock, planned: Planned) -> None:
    """The link double of these tests keeps the contract's shape."""
    assert isinstance(planned(jumping), Link)


def test_values_and_times(jumping: JumpingClock, planned: Planned) -> None:
    """Each answer carries the reply and the clock time at which it was whole."""
    result = together({"meter": (planned(jumping, 0.25), read(2))}, jumping, START + 9.0)
    assert result == {"meter": Result([Answer(b"1.5", START + 0.25), Answer(b"1.5", START + 0.5)])}


def test_no_steps_at_all(jumping: JumpingClock, planned: Planned) -> None:
    """With nothing to do there is nothing to wait for, and steps that ask nothing end at once."""

    def silent() -> Generator[Ask, Answer, int]:
        yield from ()
        return 7

    assert together({}, jumping, START + 1.0) == {}
    assert together({"a": (planned(jumping), silent())}, jumping, START + 1.0)["a"].get() == 7
    assert (jumping.t, jumping.waits) == (START, [])


def test_side_by_side(jumping: JumpingClock, planned: Planned) -> None:
    """All instruments together take as long as the slowest alone."""
    links = {f"i{n}": planned(jumping, delay) for n, delay in enumerate((0.1, 0.7, 0.3))}
    together({name: (link, read(3)) for name, link in links.items()}, jumping, START + 9.0)
    assert jumping.t - START == pytest.approx(3 * 0.7)
    assert links["i0"].sent_at == [0.0, 0.1, 0.2]
    assert links["i2"].sent_at == [0.0, 0.3, 0.6]


def test_waits_only_on_awaited_links(jumping: JumpingClock, planned: Planned) -> None:
    """The clock is given the links with a reply outstanding, and no others."""
    quick, slow = planned(jumping, 0.1), planned(jumping, 0.3)
    together({"quick": (quick, read()), "slow": (slow, read())}, jumping, START + 9.0)
    assert [on for _, on in jumping.waits] == [(quick, slow), (slow,)]


def test_pacing(jumping: JumpingClock, planned: Planned) -> None:
    """A paced ask goes out `after_s` after the previous answer, the first one at once; a pause waits on no link."""
    link = planned(jumping, 0.02)
    together({"board": (link, read(3, Ask(b"FETC:COUN?", after_s=0.1)))}, jumping, START + 9.0)
    assert link.sent_at == pytest.approx([0.0, 0.12, 0.24])
    assert [on for _, on in jumping.waits] == [(link,), (), (link,), (), (link,)]


def test_pacing_holds_nobody_else_up(jumping: JumpingClock, planned: Planned) -> None:
    """While one waits for its pace, another goes on at full speed."""
    link = planned(jumping, 0.01)
    paced = planned(jumping, 0.01)
    steps = {"paced": (paced, read(2, Ask(b"F?", after_s=0.5))), "other": (link, read(40))}
    together(steps, jumping, START + 9.0)
    assert link.sent_at[-1] == pytest.approx(0.39)
    assert paced.sent_at == pytest.approx([0.0, 0.51])


def test_nothing_is_answered_at_once(jumping: JumpingClock, planned: Planned) -> None:
    """A message that awaits no reply is answered b"" at the same clock time, and the next goes out then."""

    def steps() -> Steps[list[Answer]]:
        first = yield Ask(b"OUTP OFF", Reply.NOTHING, early=True)
        second = yield Ask(b"OUTP?", early=True)
        return [first, second]

    link = planned(jumping, 0.2, b"0")
    result = together({"supply": (link, steps())}, jumping, START + 9.0)["supply"].get()
    assert result == [Answer(b"", START), Answer(b"0", START + 0.2)]
    assert [(message, early) for _, message, _, early in link.sent] == [(b"OUTP OFF", True), (b"OUTP?", True)]


def test_first_messages_of_all_go_first(jumping: JumpingClock, planned: Planned) -> None:
    """Switching off reaches every link before any of them is asked for its proof."""
    order: list[tuple[str, bytes]] = []

    def steps() -> Steps[None]:
        yield Ask(b"OFF", Reply.NOTHING)
        yield Ask(b"OFF?", Reply.LINE)

    together(
        {name: (planned(jumping), steps()) for name in ("drive", "supply")},
        jumping,
        START + 9.0,
        traffic=lambda name, direction, data, _: order.append((name, direction.encode() + data)),
    )
    assert order[:4] == [("drive", b">OFF"), ("supply", b">OFF"), ("drive", b">OFF?"), ("supply", b">OFF?")]


@pytest.mark.parametrize(
    "ask", [Ask(b"READ?", within_s=3.0), Ask(b"FETC?", after_s=3.0), Ask(b"OUTP 1", Reply.NOTHING)]
)
def test_look_interval(jumping: JumpingClock, planned: Planned, ask: Ask) -> None:
    """`look` is called at the start and never less often than every 50 ms, awaiting, pausing or busy."""
    looks: list[float] = []
    steps = {"a": (planned(jumping, 2.0), read(2, ask)), "b": (planned(jumping, 0.013), read(100))}
    together(steps, jumping, START + 9.0, look=lambda: looks.append(jumping.t))
    assert looks[0] == START
    assert len(looks) >= 1.3 / 0.05
    gaps = [later - earlier for earlier, later in zip(looks, [*looks[1:], jumping.t], strict=True)]
    assert max(gaps) <= 0.05 + 1e-9


def test_a_reply_at_the_very_deadline_counts(jumping: JumpingClock, planned: Planned) -> None:
    """Bytes that are there when the deadline comes are a reply, not a timeout."""
    result = together({"a": (planned(jumping, 0.5), read(1, Ask(b"R?", within_s=0.5)))}, jumping, START + 9.0)
    assert result["a"].error is None


def test_a_stuck_write_cannot_blind_the_look(jumping: JumpingClock, planned: Planned) -> None:
    """A write is bounded by the look interval, or by the exchange's deadline if that is earlier."""
    link = planned(jumping)
    together({"a": (link, read(1, Ask(b"R?", within_s=5.0)))}, jumping, START + 9.0)
    together({"a": (link, read(1, Ask(b"R?", within_s=0.02)))}, jumping, START + 9.0)
    assert [deadline - at for at, _, deadline, _ in link.sent] == pytest.approx([0.05, 0.02])


def test_on_result_at_the_moment_each_ends(jumping: JumpingClock, planned: Planned) -> None:
    """`on_result` hears of each instrument when it ends, not when all have."""
    ended: list[tuple[str, float]] = []
    steps = {name: (planned(jumping, delay), read()) for name, delay in (("slow", 0.9), ("quick", 0.2))}
    together(steps, jumping, START + 9.0, on_result=lambda name, _: ended.append((name, round(jumping.t - START, 9))))
    assert ended == [("quick", 0.2), ("slow", 0.9)]


def test_traffic(jumping: JumpingClock, planned: Planned) -> None:
    """The record gets every message and reply with its time, and the partial bytes of one that failed."""
    record: list[tuple[str, str, bytes, float]] = []

    def keep(*row: Any) -> None:
        record.append((row[0], row[1], row[2], round(row[3] - START, 9)))

    silent = planned(jumping, text=None)
    silent.partial = b"9."
    steps = {"a": (planned(jumping, 0.2), read()), "b": (silent, read(1, Ask(b"R?", within_s=0.5)))}
    together(steps, jumping, START + 9.0, traffic=keep)
    assert record == [
        ("a", ">", b"READ?", 0.0),
        ("b", ">", b"R?", 0.0),
        ("a", "<", b"1.5", 0.2),
        ("b", "<", b"9.", 0.5),
    ]


def test_many_commands_in_a_row(jumping: JumpingClock, planned: Planned) -> None:
    """Ten thousand messages without a reply do not exhaust the stack."""
    link = planned(jumping)
    assert (
        len(together({"a": (link, read(10_000, Ask(b"X", Reply.NOTHING)))}, jumping, START + 9.0)["a"].get()) == 10_000
    )


def test_a_slow_look_starves_nobody(jumping: JumpingClock, planned: Planned) -> None:
    """A look that takes longer than the time between two looks still lets every reply be taken after it."""
    looks: list[float] = []

    def slow() -> None:
        looks.append(jumping.t)
        jumping.t += 0.2
        assert len(looks) < 20, "nothing but looks"

    answers = together({"meter": (planned(jumping, 0.01), read(5))}, jumping, START + 9.0, slow)["meter"].get()
    assert len(answers) == 5
    assert len(looks) <= 7  # one at the start, and at most one before each reply


def test_a_blind_message_fails_at_once_in_process(jumping: JumpingClock, port_far: PortFar) -> None:
    """The reply to a blind message cannot be told from a late one: its steps end at the next look, not when its time
    is up, also on a link that knows that nothing is coming."""
    link = open_link(port_far.address, jumping, START + 1.0, ports={"meter": port_far})
    link.declare_timeout()
    ask = Ask(b"OUTP?", early=True, within_s=2.0)
    result = together({"supply": (link, read(1, ask))}, jumping, START + 9.0, lambda: None)["supply"]
    assert isinstance(result.error, LinkGarbled)
    assert jumping.t <= START + LOOK_S + 1e-9
    assert port_far.written == b"OUTP?\n"


def test_result_get() -> None:
    """A Result gives its value, or raises its error."""
    assert Result(3).get() == 3
    with pytest.raises(LinkLost, match="gone"):
        Result(error=LinkLost("gone")).get()


def test_dialogue_on_every_real_link(pair: Pair) -> None:
    """On every kind of link a dialogue of command, query and paced block query runs through the loop."""

    def dialogue() -> Steps[list[bytes]]:
        yield Ask(b"CONF:VOLT:DC", Reply.NOTHING)
        line = yield Ask(b"READ?")
        block = yield Ask(b"CURV?", Reply.BLOCK, after_s=0.01)
        return [line.raw, block.raw]

    replies = {b"CONF:VOLT:DC": b"", b"READ?": b"+1.5E+00\r\n", b"CURV?": b"#13a\nb\n"}
    sent: list[bytes] = []

    def keep(*row: Any) -> None:
        sent.extend([row[2]] if row[1] == ">" else [])

    def look() -> None:
        """The instrument: answers, in their order, the messages that went out since the last look."""
        while sent:
            message = sent.pop(0)
            assert pair.far.receive(len(message) + 1) == message + b"\n"
            pair.far.reply(replies[message])

    until = pair.clock.now() + 5.0
    result = together({"meter": (pair.link, dialogue())}, pair.clock, until, look, traffic=keep)["meter"]
    assert result.get() == [b"+1.5E+00", b"a\nb"]
    assert pair.link.empty_lines == 0
