"""What supervisor and runner say to each other: every value survives its line, and no line does harm."""

from __future__ import annotations

import inspect
import json
import random

import pytest

from sweeprig import errors
from sweeprig.conduct.messages import MOST_LINE, Failed, Hello, failed, line_of, understood
from sweeprig.conduct.states import EVENTS, Ending, Event, State
from sweeprig.errors import LinkError, RigError, SweeprigError, Where

SEED = 20261201
CLASSES = [
    kind for _, kind in inspect.getmembers(errors, inspect.isclass) if issubclass(kind, SweeprigError)
]  # fmt: skip


@pytest.mark.parametrize("kind", EVENTS)
def test_events_survive(kind: str) -> None:
    """Kind, time and data of an event of every kind."""
    event = Event(kind, 12.5, {"number": 3, "why": "µ, ±, \n and \x00", "deep": {"a": [1, None, 2.5]}})
    assert understood(line_of(event)) == event


@pytest.mark.parametrize("state", State)
def test_endings_survive(state: State) -> None:
    """State, reason and whether another session may begin; Hello too."""
    for again in (True, False):
        ending = Ending(state, "because of\nthis", again)
        assert understood(line_of(ending)) == ending
    assert understood(line_of(Hello(4711))) == Hello(4711)


@pytest.mark.parametrize("kind", CLASSES, ids=lambda kind: kind.__name__)
def test_errors_survive(kind: type[SweeprigError]) -> None:
    """Every error class of ours: same text and exit code on the other side; the same class, but a rig error for those
    of links."""
    if issubclass(kind, LinkError):
        error: SweeprigError = kind("board: no answer", remedy="Look at the cable")
    else:
        error = kind(
            "no", value="7 V", allowed="8 V", where=Where("/rig.toml", 3, "supply"), remedy="Mend it", topic="rig"
        )
    said = understood(line_of(failed(error)))
    assert isinstance(said, Failed)
    raised = said.raised()
    assert str(raised) == str(error)
    assert raised.exit_code == error.exit_code
    assert type(raised) is (RigError if issubclass(kind, LinkError) else kind)


@pytest.mark.parametrize("name", ["ValueError", "SystemExit", "Where", "annotations", "", "__doc__"])
def test_a_class_that_is_none_of_ours(name: str) -> None:
    """Whatever name a line carries, what is raised is an error of ours."""
    assert type(Failed(name, {"what": "odd"}, 70).raised()) is RigError


def test_a_line_has_a_longest_length() -> None:
    """Texts without end are cut, the message still arrives and says how it begins; the line keeps its bound."""
    long = "\x80" * 100_000
    nested = {f"{key}{long[:3000]}": {str(deep): [long[:50]] * 40 for deep in range(40)} for key in range(40)}
    for data in ({"text": long}, nested, {"many": [long[:500]] * 1000}, {"number": 10**3000, "text": long}):
        line = line_of(Event("notice", 1.0, data))
        assert len(line) <= MOST_LINE
        assert line.endswith(b"\n")
        assert isinstance(understood(line), Event)
    said = understood(line_of(Failed("RigError", {"what": f"the supply said {long}"}, 3)))
    assert isinstance(said, Failed)
    assert str(said.raised()).startswith("the supply said \x80\x80")


def test_no_line_does_harm() -> None:
    """10,000 lines bent at random (seeded, so no false alarm) are understood or say nothing; none raises."""
    dice = random.Random(SEED)
    good = [
        line_of(Event("trip", 1.0, {"evidence": "2 A"})),
        line_of(Ending(State.PARKED, "off")),
        line_of(Hello(7)),
        line_of(failed(RigError("no", value="7 V"))),
    ]
    odd = [b"1e999", b"null", b"[]", b"{}", b"-1", b'"x"', b"NaN", b"9" * 400]
    kept = 0
    for _ in range(10_000):
        line = bytearray(dice.choice(good))
        if dice.random() < 0.5:
            at = dice.randrange(len(line))
            line[at : at + dice.randrange(1, 8)] = dice.randbytes(dice.randrange(0, 4))
        else:
            data = json.loads(bytes(line))
            line = bytearray(
                json.dumps(data)
                .encode()
                .replace(json.dumps(dice.choice(list(data.values()))).encode(), dice.choice(odd))
            )
        kept += understood(bytes(line)) is not None
    assert 0 < kept < 10_000
