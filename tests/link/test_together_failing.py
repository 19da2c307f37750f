"""`together` when something fails: late replies, lost links, faulty steps, and callbacks that raise."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import pytest

from sweeprig.errors import InstrumentRefused, LinkError, LinkGarbled, LinkLost, LinkMisuse, LinkTimeout
from sweeprig.link.link import Link
from sweeprig.link.together import together
from sweeprig.roles import Answer, Ask, Steps

if TYPE_CHECKING:
    from tests.link.conftest import JumpingClock, Planned

START = 100.0


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


def test_look_raises(jumping: JumpingClock, planned: Planned) -> None:
    """What `look` raises comes out; links with a reply outstanding are dirty, all steps are closed."""
    awaiting, pausing = planned(jumping, 1.0), planned(jumping, 0.01)
    doings = [Closing(), Closing(), Closing()]
    results: list[str] = []

    def look() -> None:
        if jumping.t > START + 0.3:
            raise LinkLost("tripped")

    steps: dict[str, tuple[Link, Steps[Any]]] = {
        "awaiting": (awaiting, doings[0].steps(Ask(b"READ?"))),
        "pausing": (pausing, doings[1].steps(Ask(b"FETC?", after_s=0.8), 9)),
        "done": (planned(jumping), doings[2].steps(Ask(b"READ?"))),
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
def test_what_a_callback_raises_ends_the_loop_cleanly(
    jumping: JumpingClock, planned: Planned, error: BaseException
) -> None:
    """Ctrl-C, or a fault in `on_result`, leaves the others dirty and closed too, never half-way."""
    slow, doing = planned(jumping, 1.0), Closing()

    def on_result(*_: object) -> None:
        raise error

    steps: dict[str, tuple[Link, Steps[Any]]] = {
        "quick": (planned(jumping), read()),
        "slow": (slow, doing.steps(Ask(b"READ?"))),
    }
    with pytest.raises(type(error)):
        together(steps, jumping, START + 9.0, on_result=on_result)
    assert slow.dirty
    assert doing.ended


def test_row_8_timeout(jumping: JumpingClock, planned: Planned) -> None:
    """Rows A7 and A8: a late reply dirties its link, reaches its steps, and its Result carries the partial bytes."""
    silent, doing = planned(jumping, text=None), Closing()
    silent.partial = b"1.2"
    result = together({"meter": (silent, doing.steps(Ask(b"READ?", within_s=0.5)))}, jumping, START + 9.0)["meter"]
    assert jumping.t == START + 0.5
    assert silent.dirty == "no whole reply by the deadline"
    assert isinstance(result.error, LinkTimeout)
    assert doing.saw is result.error
    assert result.error.partial == b"1.2"
    with pytest.raises(LinkTimeout, match=r"meter: no whole reply to 'READ\?', only '1.2'.*sends no terminator"):
        result.get()


def test_timeout_of_a_silent_instrument_says_where_to_look(jumping: JumpingClock, planned: Planned) -> None:
    """Row B2: silence may be a refused message, so the text points to the error queue."""
    result = together({"meter": (planned(jumping, text=None), read())}, jumping, START + 9.0)["meter"]
    assert "error queue" in str(result.error)


def test_overall_deadline(jumping: JumpingClock, planned: Planned) -> None:
    """No exchange, and no pause, lasts beyond the deadline of the whole; a pause leaves its link clean."""
    silent, pausing = planned(jumping, text=None), planned(jumping, 0.1)
    steps = {
        "silent": (silent, read(1, Ask(b"R?", within_s=50.0))),
        "pausing": (pausing, read(9, Ask(b"F?", after_s=2.0))),
    }
    result = together(steps, jumping, START + 1.5)
    assert jumping.t == START + 1.5
    assert {name: type(each.error) for name, each in result.items()} == {"silent": LinkTimeout, "pausing": LinkTimeout}
    assert "was not sent" in str(result["pausing"].error)
    assert (bool(silent.dirty), pausing.dirty) == (True, "")


def test_deadline_already_past(jumping: JumpingClock, planned: Planned) -> None:
    """With no time left nothing is sent."""
    link = planned(jumping)
    assert isinstance(together({"a": (link, read())}, jumping, START)["a"].error, LinkTimeout)
    assert link.sent == []


@pytest.mark.parametrize("error_at", ["send", "take"])
@pytest.mark.parametrize(
    ("error", "expected"),
    [(LinkLost("gone", partial=b"1."), LinkLost), (LinkGarbled("noise"), LinkGarbled), (OSError("unmapped"), LinkLost)],
)
def test_one_failing_link_stops_nobody_else(
    jumping: JumpingClock, planned: Planned, error: Exception, expected: type[LinkError], error_at: str
) -> None:
    """A link that fails ends its own steps, with its error, at once; the others finish their work."""
    broken, doing, ended = planned(jumping, error=error), Closing(), []
    broken.error_at = error_at
    steps: dict[str, tuple[Link, Steps[Any]]] = {
        "broken": (broken, doing.steps(Ask(b"READ?"), 5)),
        "sound": (planned(jumping, 0.1), read(5)),
    }
    result = together(steps, jumping, START + 9.0, on_result=lambda name, _: ended.append((name, jumping.t - START)))
    assert type(result["broken"].error) is expected
    assert doing.saw is result["broken"].error
    assert len(result["sound"].get()) == 5
    assert [name for name, _ in ended] == ["broken", "sound"]
    assert ended[0][1] == pytest.approx(0.01 if error_at == "take" else 0.0)


@pytest.mark.parametrize("error", [InstrumentRefused("read-back differs"), ValueError("could not convert '****'")])
def test_failing_steps_stop_nobody_else(jumping: JumpingClock, planned: Planned, error: Exception) -> None:
    """What the steps raise, our own or a fault of the adapter, is in their Result; their link stays clean."""

    def refuse() -> Steps[None]:
        yield Ask(b"READ?")
        raise error

    link = planned(jumping)
    steps: dict[str, tuple[Link, Steps[Any]]] = {"a": (link, refuse()), "b": (planned(jumping, 0.5), read())}
    result = together(steps, jumping, START + 9.0)
    assert result["a"].error is error
    assert result["b"].error is None
    assert link.dirty == ""


def test_row_6_a_reply_of_the_wrong_shape_dirties_the_link(jumping: JumpingClock, planned: Planned) -> None:
    """Row A6: when the steps find a reply garbled, the next one may belong to this ask: the link is dirty."""

    def choke() -> Steps[None]:
        yield Ask(b"READ?")
        raise LinkGarbled("two values instead of one")

    link = planned(jumping)
    assert isinstance(together({"a": (link, choke())}, jumping, START + 9.0)["a"].error, LinkGarbled)
    assert link.dirty == "two values instead of one"


@pytest.mark.parametrize("manner", ["returns", "asks again", "raises another"])
def test_steps_cannot_talk_a_link_error_away(jumping: JumpingClock, planned: Planned, manner: str) -> None:
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

    link = planned(jumping, error=LinkLost("gone"))
    result = together({"a": (link, stubborn())}, jumping, START + 9.0)["a"]
    assert (result.value, result.error) == (None, link.error)
    assert [message for _, message, _, _ in link.sent] == [b"READ?"]


def test_same_link_twice(jumping: JumpingClock, planned: Planned) -> None:
    """Row A13: two names on one link are misuse, found before anything is sent."""
    link = planned(jumping)
    with pytest.raises(LinkMisuse, match="two of a, b share one link"):
        together({"a": (link, read()), "b": (link, read())}, jumping, START + 9.0)
    assert link.sent == []
