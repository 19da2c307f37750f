"""`together` on a clock that jumps and links that answer by plan: pacing, looking, failing, and who learns of it."""

from __future__ import annotations

import math
from collections.abc import Generator, Sequence
from typing import TYPE_CHECKING, Any

import pytest

from sweeprig.clock import Waitable
from sweeprig.errors import InstrumentRefused, LinkError, LinkGarbled, LinkLost, LinkMisuse, LinkTimeout
from sweeprig.link.link import Link
from sweeprig.link.together import Result, together
from sweeprig.roles import Answer, Ask, Reply, Steps

if TYPE_CHECKING:
    from tests.link.conftest import Pair

START = 100.0


class JumpingClock:
    """Jumps to the next reply or to `until`; keeps what was waited on."""

    def __init__(self) -> None:
        self.t = START
        self.waits: list[tuple[float, tuple[Waitable, ...]]] = []

    def now(self) -> float:
        return self.t

    def utc(self) -> float:
        return self.t

    def wait(self, until: float, on: Sequence[Waitable] = ()) -> None:
        self.waits.append((until, tuple(on)))
        self.t = max(self.t, min([until, *(link.ready_at() for link in on)]))
        assert self.t < 1e9, "waited for ever"


class PlannedLink:
    """Answers each message after `delay` with `text`; None stays silent; an exception is raised by take or send."""

    def __init__(
        self, clock: JumpingClock, delay: float = 0.01, text: bytes | None = b"1.5", error: Exception | None = None
    ) -> None:
        self.clock = clock
        self.delay = delay
        self.text = text
        self.error = error
        self.error_at = "take"
        self.address = "planned"
        self.dirty = ""
        self.identified = True
        self.empty_lines = 0
        self.partial = b""
        self.sent: list[tuple[float, bytes, float, bool]] = []
        self.due = math.inf

    def send(self, message: bytes, reply: Reply, deadline: float, early: bool = False) -> None:
        if self.error is not None and self.error_at == "send":
            raise self.error
        self.sent.append((self.clock.t, message, deadline, early))
        if reply is not Reply.NOTHING and self.text is not None:
            self.due = self.clock.t + self.delay

    def take(self) -> bytes | None:
        if self.clock.t < self.due:
            return None
        self.due = math.inf
        if self.error is not None:
            raise self.error
        return self.text

    def declare_timeout(self) -> bytes:
        self.dirty = "no whole reply by the deadline"
        return self.partial

    def resynchronise(self, deadline: float) -> None:
        raise AssertionError(f"nothing below conduct heals a link ({deadline})")

    def close(self) -> None:
        raise AssertionError("the loop owns no link")

    def fileno(self) -> int | None:
        return None

    def ready_at(self) -> float:
        return self.due

    @property
    def sent_at(self) -> list[float]:
        return [round(at - START, 9) for at, *_ in self.sent]


class Closing:
    """Steps that ask once (or for ever) and keep what ended them."""

    def __init__(self) -> None:
        self.saw: BaseException | None = None
        self.ended = False

    def steps(self, ask: Ask, times: int = 1) -> Steps[list[Answer]]:
        answers = []
        try:
            for _ in range(times):
                answer = yield ask
                answers.append(answer)
        except BaseException as error:
            self.saw = error
            raise
        finally:
            self.ended = True
        return answers


def read(times: int = 1, ask: Ask | None = None) -> Steps[list[Answer]]:
    return Closing().steps(Ask(b"READ?") if ask is None else ask, times)


@pytest.fixture
def jumping() -> JumpingClock:
    return JumpingClock()


def test_planned_link_is_a_link(jumping: JumpingClock) -> None:
    """The link double of these tests keeps the contract's shape."""
    assert isinstance(PlannedLink(jumping), Link)


def test_values_and_times(jumping: JumpingClock) -> None:
    """Each answer carries the reply and the clock time at which it was whole."""
    result = together({"meter": (PlannedLink(jumping, 0.25), read(2))}, jumping, START + 9.0)
    assert result == {"meter": Result([Answer(b"1.5", START + 0.25), Answer(b"1.5", START + 0.5)])}


def test_no_steps_at_all(jumping: JumpingClock) -> None:
    """With nothing to do there is nothing to wait for, and steps that ask nothing end at once."""

    def silent() -> Generator[Ask, Answer, int]:
        yield from ()
        return 7

    assert together({}, jumping, START + 1.0) == {}
    assert together({"a": (PlannedLink(jumping), silent())}, jumping, START + 1.0)["a"].get() == 7
    assert (jumping.t, jumping.waits) == (START, [])


def test_side_by_side(jumping: JumpingClock) -> None:
    """All instruments together take as long as the slowest alone."""
    links = {f"i{n}": PlannedLink(jumping, delay) for n, delay in enumerate((0.1, 0.7, 0.3))}
    together({name: (link, read(3)) for name, link in links.items()}, jumping, START + 9.0)
    assert jumping.t - START == pytest.approx(3 * 0.7)
    assert links["i0"].sent_at == [0.0, 0.1, 0.2]
    assert links["i2"].sent_at == [0.0, 0.3, 0.6]


def test_waits_only_on_awaited_links(jumping: JumpingClock) -> None:
    """The clock is given the links with a reply outstanding, and no others."""
    quick, slow = PlannedLink(jumping, 0.1), PlannedLink(jumping, 0.3)
    together({"quick": (quick, read()), "slow": (slow, read())}, jumping, START + 9.0)
    assert [on for _, on in jumping.waits] == [(quick, slow), (slow,)]


def test_pacing(jumping: JumpingClock) -> None:
    """A paced ask goes out `after_s` after the previous answer, the first one at once; a pause waits on no link."""
    link = PlannedLink(jumping, 0.02)
    together({"board": (link, read(3, Ask(b"FETC:COUN?", after_s=0.1)))}, jumping, START + 9.0)
    assert link.sent_at == pytest.approx([0.0, 0.12, 0.24])
    assert [on for _, on in jumping.waits] == [(link,), (), (link,), (), (link,)]


def test_pacing_holds_nobody_else_up(jumping: JumpingClock) -> None:
    """While one waits for its pace, another goes on at full speed."""
    link = PlannedLink(jumping, 0.01)
    paced = PlannedLink(jumping, 0.01)
    steps = {"paced": (paced, read(2, Ask(b"F?", after_s=0.5))), "other": (link, read(40))}
    together(steps, jumping, START + 9.0)
    assert link.sent_at[-1] == pytest.approx(0.39)
    assert paced.sent_at == pytest.approx([0.0, 0.51])


def test_nothing_is_answered_at_once(jumping: JumpingClock) -> None:
    """A message that awaits no reply is answered b"" at the same clock time, and the next goes out then."""

    def steps() -> Steps[list[Answer]]:
        first = yield Ask(b"OUTP OFF", Reply.NOTHING, early=True)
        second = yield Ask(b"OUTP?", early=True)
        return [first, second]

    link = PlannedLink(jumping, 0.2, b"0")
    result = together({"supply": (link, steps())}, jumping, START + 9.0)["supply"].get()
    assert result == [Answer(b"", START), Answer(b"0", START + 0.2)]
    assert [(message, early) for _, message, _, early in link.sent] == [(b"OUTP OFF", True), (b"OUTP?", True)]


def test_first_messages_of_all_go_first(jumping: JumpingClock) -> None:
    """Switching off reaches every link before any of them is asked for its proof."""
    order: list[tuple[str, bytes]] = []

    def steps() -> Steps[None]:
        yield Ask(b"OFF", Reply.NOTHING)
        yield Ask(b"OFF?", Reply.LINE)

    together(
        {name: (PlannedLink(jumping), steps()) for name in ("drive", "supply")},
        jumping,
        START + 9.0,
        traffic=lambda name, direction, data, _: order.append((name, direction.encode() + data)),
    )
    assert order[:4] == [("drive", b">OFF"), ("supply", b">OFF"), ("drive", b">OFF?"), ("supply", b">OFF?")]


@pytest.mark.parametrize(
    "ask", [Ask(b"READ?", within_s=3.0), Ask(b"FETC?", after_s=3.0), Ask(b"OUTP 1", Reply.NOTHING)]
)
def test_look_interval(jumping: JumpingClock, ask: Ask) -> None:
    """`look` is called at the start and never less often than every 50 ms, awaiting, pausing or busy."""
    looks: list[float] = []
    steps = {"a": (PlannedLink(jumping, 2.0), read(2, ask)), "b": (PlannedLink(jumping, 0.013), read(100))}
    together(steps, jumping, START + 9.0, look=lambda: looks.append(jumping.t))
    assert looks[0] == START
    assert len(looks) >= 1.3 / 0.05
    gaps = [later - earlier for earlier, later in zip(looks, [*looks[1:], jumping.t], strict=True)]
    assert max(gaps) <= 0.05 + 1e-9


def test_look_raises(jumping: JumpingClock) -> None:
    """What `look` raises comes out; links with a reply outstanding are dirty, all steps are closed."""
    awaiting, pausing = PlannedLink(jumping, 1.0), PlannedLink(jumping, 0.01)
    doings = [Closing(), Closing(), Closing()]
    results: list[str] = []

    def look() -> None:
        if jumping.t > START + 0.3:
            raise LinkLost("tripped")

    steps: dict[str, tuple[Link, Steps[Any]]] = {
        "awaiting": (awaiting, doings[0].steps(Ask(b"READ?"))),
        "pausing": (pausing, doings[1].steps(Ask(b"FETC?", after_s=0.8), 9)),
        "done": (PlannedLink(jumping), doings[2].steps(Ask(b"READ?"))),
    }
    with pytest.raises(LinkLost, match="tripped"):
        together(steps, jumping, START + 9.0, look, on_result=lambda name, _: results.append(name))
    assert awaiting.dirty == "given up while a reply was outstanding"
    assert pausing.dirty == ""
    assert [doing.ended for doing in doings] == [True, True, True]
    assert [type(doing.saw) for doing in doings] == [GeneratorExit, GeneratorExit, type(None)]
    assert results == ["done"]
    assert jumping.t - START <= 0.3501


@pytest.mark.parametrize("error", [KeyboardInterrupt(), RuntimeError("no space for the traffic log")])
def test_what_a_callback_raises_ends_the_loop_cleanly(jumping: JumpingClock, error: BaseException) -> None:
    """Ctrl-C, or a fault in `on_result`, leaves the others dirty and closed too, never half-way."""
    slow, doing = PlannedLink(jumping, 1.0), Closing()

    def on_result(*_: object) -> None:
        raise error

    steps: dict[str, tuple[Link, Steps[Any]]] = {
        "quick": (PlannedLink(jumping), read()),
        "slow": (slow, doing.steps(Ask(b"READ?"))),
    }
    with pytest.raises(type(error)):
        together(steps, jumping, START + 9.0, on_result=on_result)
    assert slow.dirty
    assert doing.ended


def test_row_8_timeout(jumping: JumpingClock) -> None:
    """Rows 7 and 8: a late reply dirties its link, reaches its steps, and its Result carries the partial bytes."""
    silent, doing = PlannedLink(jumping, text=None), Closing()
    silent.partial = b"1.2"
    result = together({"meter": (silent, doing.steps(Ask(b"READ?", within_s=0.5)))}, jumping, START + 9.0)["meter"]
    assert jumping.t == START + 0.5
    assert silent.dirty == "no whole reply by the deadline"
    assert isinstance(result.error, LinkTimeout)
    assert doing.saw is result.error
    assert result.error.partial == b"1.2"
    with pytest.raises(LinkTimeout, match=r"meter: no whole reply to 'READ\?', only '1.2'.*sends no terminator"):
        result.get()


def test_timeout_of_a_silent_instrument_says_where_to_look(jumping: JumpingClock) -> None:
    """Row 26: silence may be a refused message, so the text points to the error queue."""
    result = together({"meter": (PlannedLink(jumping, text=None), read())}, jumping, START + 9.0)["meter"]
    assert "error queue" in str(result.error)


def test_a_reply_at_the_very_deadline_counts(jumping: JumpingClock) -> None:
    """Bytes that are there when the deadline comes are a reply, not a timeout."""
    result = together({"a": (PlannedLink(jumping, 0.5), read(1, Ask(b"R?", within_s=0.5)))}, jumping, START + 9.0)
    assert result["a"].error is None


def test_overall_deadline(jumping: JumpingClock) -> None:
    """No exchange, and no pause, lasts beyond the deadline of the whole; a pause leaves its link clean."""
    silent, pausing = PlannedLink(jumping, text=None), PlannedLink(jumping, 0.1)
    steps = {
        "silent": (silent, read(1, Ask(b"R?", within_s=50.0))),
        "pausing": (pausing, read(9, Ask(b"F?", after_s=2.0))),
    }
    result = together(steps, jumping, START + 1.5)
    assert jumping.t == START + 1.5
    assert {name: type(each.error) for name, each in result.items()} == {"silent": LinkTimeout, "pausing": LinkTimeout}
    assert "was not sent" in str(result["pausing"].error)
    assert (bool(silent.dirty), pausing.dirty) == (True, "")


def test_deadline_already_past(jumping: JumpingClock) -> None:
    """With no time left nothing is sent."""
    link = PlannedLink(jumping)
    assert isinstance(together({"a": (link, read())}, jumping, START)["a"].error, LinkTimeout)
    assert link.sent == []


def test_a_stuck_write_cannot_blind_the_look(jumping: JumpingClock) -> None:
    """A write is bounded by the look interval, or by the exchange's deadline if that is earlier."""
    link = PlannedLink(jumping)
    together({"a": (link, read(1, Ask(b"R?", within_s=5.0)))}, jumping, START + 9.0)
    together({"a": (link, read(1, Ask(b"R?", within_s=0.02)))}, jumping, START + 9.0)
    assert [deadline - at for at, _, deadline, _ in link.sent] == pytest.approx([0.05, 0.02])


@pytest.mark.parametrize("error_at", ["send", "take"])
@pytest.mark.parametrize(
    ("error", "expected"),
    [(LinkLost("gone", partial=b"1."), LinkLost), (LinkGarbled("noise"), LinkGarbled), (OSError("unmapped"), LinkLost)],
)
def test_one_failing_link_stops_nobody_else(
    jumping: JumpingClock, error: Exception, expected: type[LinkError], error_at: str
) -> None:
    """A link that fails ends its own steps, with its error, at once; the others finish their work."""
    broken, doing, ended = PlannedLink(jumping, error=error), Closing(), []
    broken.error_at = error_at
    steps: dict[str, tuple[Link, Steps[Any]]] = {
        "broken": (broken, doing.steps(Ask(b"READ?"), 5)),
        "sound": (PlannedLink(jumping, 0.1), read(5)),
    }
    result = together(steps, jumping, START + 9.0, on_result=lambda name, _: ended.append((name, jumping.t - START)))
    assert type(result["broken"].error) is expected
    assert doing.saw is result["broken"].error
    assert len(result["sound"].get()) == 5
    assert [name for name, _ in ended] == ["broken", "sound"]
    assert ended[0][1] == pytest.approx(0.01 if error_at == "take" else 0.0)


@pytest.mark.parametrize("error", [InstrumentRefused("read-back differs"), ValueError("could not convert '****'")])
def test_failing_steps_stop_nobody_else(jumping: JumpingClock, error: Exception) -> None:
    """What the steps raise, our own or a fault of the adapter, is in their Result; their link stays clean."""

    def refuse() -> Steps[None]:
        yield Ask(b"READ?")
        raise error

    link = PlannedLink(jumping)
    steps: dict[str, tuple[Link, Steps[Any]]] = {"a": (link, refuse()), "b": (PlannedLink(jumping, 0.5), read())}
    result = together(steps, jumping, START + 9.0)
    assert result["a"].error is error
    assert result["b"].error is None
    assert link.dirty == ""


def test_row_6_a_reply_of_the_wrong_shape_dirties_the_link(jumping: JumpingClock) -> None:
    """Row 6: when the steps find a reply garbled, the next one may belong to this ask: the link is dirty."""

    def choke() -> Steps[None]:
        yield Ask(b"READ?")
        raise LinkGarbled("two values instead of one")

    link = PlannedLink(jumping)
    assert isinstance(together({"a": (link, choke())}, jumping, START + 9.0)["a"].error, LinkGarbled)
    assert link.dirty == "two values instead of one"


@pytest.mark.parametrize("manner", ["returns", "asks again", "raises another"])
def test_steps_cannot_talk_a_link_error_away(jumping: JumpingClock, manner: str) -> None:
    """Steps that swallow a link's error, ask again or raise something else still end with that error."""

    def stubborn() -> Steps[bytes]:
        try:
            answer = yield Ask(b"READ?")
        except LinkError:
            if manner == "raises another":
                raise KeyError(manner) from None
            if manner == "returns":
                return b"made up"
            answer = yield Ask(b"AGAIN?")
        return answer.raw

    link = PlannedLink(jumping, error=LinkLost("gone"))
    result = together({"a": (link, stubborn())}, jumping, START + 9.0)["a"]
    assert (result.value, result.error) == (None, link.error)
    assert [message for _, message, _, _ in link.sent] == [b"READ?"]


def test_same_link_twice(jumping: JumpingClock) -> None:
    """Row 13: two names on one link are misuse, found before anything is sent."""
    link = PlannedLink(jumping)
    with pytest.raises(LinkMisuse, match="two of a, b share one link"):
        together({"a": (link, read()), "b": (link, read())}, jumping, START + 9.0)
    assert link.sent == []


def test_on_result_at_the_moment_each_ends(jumping: JumpingClock) -> None:
    """`on_result` hears of each instrument when it ends, not when all have."""
    ended: list[tuple[str, float]] = []
    steps = {name: (PlannedLink(jumping, delay), read()) for name, delay in (("slow", 0.9), ("quick", 0.2))}
    together(steps, jumping, START + 9.0, on_result=lambda name, _: ended.append((name, round(jumping.t - START, 9))))
    assert ended == [("quick", 0.2), ("slow", 0.9)]


def test_traffic(jumping: JumpingClock) -> None:
    """The record gets every message and reply with its time, and the partial bytes of one that failed."""
    record: list[tuple[str, str, bytes, float]] = []

    def keep(*row: Any) -> None:
        record.append((row[0], row[1], row[2], round(row[3] - START, 9)))

    silent = PlannedLink(jumping, text=None)
    silent.partial = b"9."
    steps = {"a": (PlannedLink(jumping, 0.2), read()), "b": (silent, read(1, Ask(b"R?", within_s=0.5)))}
    together(steps, jumping, START + 9.0, traffic=keep)
    assert record == [
        ("a", ">", b"READ?", 0.0),
        ("b", ">", b"R?", 0.0),
        ("a", "<", b"1.5", 0.2),
        ("b", "<", b"9.", 0.5),
    ]


def test_many_commands_in_a_row(jumping: JumpingClock) -> None:
    """Ten thousand messages without a reply do not exhaust the stack."""
    link = PlannedLink(jumping)
    assert (
        len(together({"a": (link, read(10_000, Ask(b"X", Reply.NOTHING)))}, jumping, START + 9.0)["a"].get()) == 10_000
    )


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
