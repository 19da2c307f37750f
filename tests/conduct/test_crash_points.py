"""A run broken off at any moment: at an exchange, at a commit, at a line. The drive goes off, the logbook stays whole,
and the resumed run loses and doubles nothing."""

from __future__ import annotations

import os
import random
import sys
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType
from typing import TYPE_CHECKING, Any

import pytest

from sweeprig.conduct.off import off
from sweeprig.conduct.rig import RigUse
from sweeprig.conduct.states import Event, State
from sweeprig.errors import LinkError, MissingPackage, OffNotProved, WrongInstrument
from sweeprig.holds import Purpose, Status
from sweeprig.job import load
from sweeprig.link import registry
from sweeprig.link.base import BaseLink
from sweeprig.logbook.traffic import TrafficLog
from sweeprig.opened import open_run

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench, Happened
    from tests.conduct.conftest import Bed, Exchange

MakeBed = Callable[[], "Bed"]
SEED = 20261201
TIMES = 12 if os.environ.get("FULL") else 1
"""FULL=1 takes more places; the everyday selection has every kind of moment."""
MOMENTS = (
    "opening", "proving off", "lead", "exposure", "rest", "settling", "switching off", "healing", "closing", "other",
)  # fmt: skip
A_LOST_REPLY = {("meter", 60): "no_reply"}
"""Makes the undisturbed run heal once, so that there are moments of healing to be broken off in."""
HEARTBEAT_S = 2.0
"""Of the board in shelter-bench.toml."""


class Killed(BaseException):
    """Stands for the end of the process: nothing in the program may catch it."""


Logs = dict[str, "list[Exchange]"]


def draw(make_bed: MakeBed, logs: Logs, moment: str, count: int) -> list[Exchange]:
    """Exchanges of one moment of a run that is not broken off, drawn with the seed."""
    if "healed once" not in logs:
        bed = make_bed()
        bed.faults = dict(A_LOST_REPLY)
        bed.start()
        logs["healed once"] = bed.log
    there = [exchange for exchange in logs["healed once"] if exchange.moment == moment]
    assert there, f"nothing is said to an instrument while {moment}"
    return random.Random(f"{SEED} {moment}").sample(there, min(count, len(there)))


def break_off(bed: Bed, error: type[BaseException]) -> None:
    with pytest.raises(error):
        bed.start()


def off_at_once(bed: Bed) -> None:
    """As the bench itself has it, without any time passing."""
    assert not bed.drive_is_on()
    assert not bed.supply_is_on()


def goes_on_whole(bed: Bed) -> None:
    """What was concluded is still so; every hold begun gets its one outcome; the sweep is done; off at the end."""
    known = open_run(bed.path).outcomes
    bed.calm()
    assert bed.resume().ending.state is State.FINISHED
    run = open_run(bed.path)
    assert run.unfinished == []
    assert [outcome.number for outcome in run.outcomes] == list(range(1, len(run.outcomes) + 1))
    assert run.outcomes[: len(known)] == known
    done = Counter(outcome.hold.purpose for outcome in run.outcomes if outcome.status is Status.DONE)
    assert (done[Purpose.CURVE], done[Purpose.STALL], done[Purpose.START]) == (6, 4, 4)
    off_at_once(bed)


@pytest.mark.parametrize("moment", MOMENTS)
def test_an_interrupt_at_an_exchange(make_bed: MakeBed, logs: Logs, moment: str) -> None:
    """Row D2: Interrupted just before or just after a message reaches an instrument: drive and supply are off when the
    error comes out, and the run goes on whole."""
    for index, exchange in enumerate(draw(make_bed, logs, moment, 2 * TIMES)):
        bed = make_bed()
        bed.faults = dict(A_LOST_REPLY)

        def strike(now: Exchange, place: int = exchange.place) -> None:
            if now.place == place:
                raise Killed

        bed.before, bed.after = (strike, bed.after) if index % 2 == 0 else (bed.before, strike)
        break_off(bed, Killed)
        off_at_once(bed)
        goes_on_whole(bed)


@pytest.mark.parametrize("moment", MOMENTS)
def test_the_process_is_gone_at_an_exchange(make_bed: MakeBed, logs: Logs, moment: str) -> None:
    """Nothing reaches an instrument or the disk any more, as after a kill: the drive goes off by its own heartbeat, and
    the run goes on whole."""
    for exchange in draw(make_bed, logs, moment, TIMES):
        bed = make_bed()
        bed.faults = dict(A_LOST_REPLY)
        gone_from(bed, exchange.place)
        break_off(bed, Killed)
        assert bed.off_within(HEARTBEAT_S + 0.1) <= HEARTBEAT_S + 0.01
        goes_on_whole(bed)


def gone_from(bed: Bed, place: int) -> None:
    """From the exchange at `place` on the process has no more effect."""

    def strike(now: Exchange) -> None:
        if now.place >= place:
            raise Killed

    def no_commit(_: int, when: str) -> None:
        if len(bed.log) >= place and when == "before":
            raise Killed

    bed.before, bed.commit = strike, no_commit


@pytest.mark.parametrize("when", ["before", "after"])
def test_the_process_is_gone_at_a_commit(make_bed: MakeBed, when: str) -> None:
    """Killed just before or just after a transaction reaches the disk, the first and the last one included."""
    bed = make_bed()
    bed.start()
    counts = [
        1,
        bed.commits,
        *random.Random(f"{SEED} {when}").sample(range(2, bed.commits), min(2 * TIMES, bed.commits - 2)),
    ]
    for count in counts:
        bed = make_bed()

        def strike(now: int, which: str, bed: Bed = bed, count: int = count) -> None:
            if now >= count and which == when:
                bed.before = never
                raise Killed

        bed.commit = strike
        break_off(bed, Killed)
        assert bed.off_within(HEARTBEAT_S + 0.1) <= HEARTBEAT_S + 0.01
        goes_on_whole(bed)


def never(_: Exchange) -> None:
    raise Killed


@contextmanager
def at_line(strike: Callable[[], None]) -> Iterator[None]:
    """Call `strike` before every line of conduct, the links and launch."""

    def local(frame: FrameType, kind: str, argument: Any) -> Any:
        del frame, argument
        if kind == "line":
            strike()
        return local

    def trace(frame: FrameType, kind: str, argument: Any) -> Any:
        del kind, argument
        name = frame.f_code.co_filename
        ours = "/sweeprig/conduct/" in name or "/sweeprig/link/" in name or name.endswith("/sweeprig/launch.py")
        return local if ours else None

    before = sys.gettrace()
    sys.settrace(trace)
    try:
        yield
    finally:
        sys.settrace(before)


def test_an_interrupt_at_any_line(make_bed: MakeBed) -> None:
    """Ctrl-C without a handler, at seeded lines of conduct and the links: off when it comes out, also in the middle of
    sending, of taking a reply, and of switching off."""
    lines = [0]

    def count() -> None:
        lines[0] += 1

    bed = make_bed()
    bed.faults = dict(A_LOST_REPLY)
    with at_line(count):
        bed.start()
    for line in random.Random(SEED).sample(range(1, lines[0]), 4 * TIMES):
        bed = make_bed()
        bed.faults = dict(A_LOST_REPLY)
        left = [line]

        def strike(left: list[int] = left) -> None:
            left[0] -= 1
            if left[0] == 0:
                raise KeyboardInterrupt

        with at_line(strike), pytest.raises(KeyboardInterrupt):
            bed.start()
        off_at_once(bed)
        goes_on_whole(bed)


@pytest.mark.parametrize("message", [b"FETC:COUN?", b"OUTP ON", b"SOUR:PULS:DCYC?"])
def test_an_interrupt_right_after_sending(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch, message: bytes) -> None:
    """Interrupted between the sending of a message and the waiting for its reply: the drive can still be told."""
    send, sent = BaseLink.send, [0]

    def and_then(self: BaseLink, data: bytes, *rest: Any, **more: Any) -> None:
        send(self, data, *rest, **more)
        sent[0] += data == message and (bed.drive_is_on() or message == b"OUTP ON")
        if sent[0] == 1:
            sent[0] += 1
            raise KeyboardInterrupt

    monkeypatch.setattr(BaseLink, "send", and_then)
    bed = make_bed()
    break_off(bed, KeyboardInterrupt)
    assert sent[0] >= 2
    off_at_once(bed)


def test_a_listener_that_fails(make_bed: MakeBed) -> None:
    """Whoever listens to the events fails, and goes on failing: its first error comes out, the drive is off, and the
    logbook has the proof of it."""
    bed = make_bed()
    listen, told = bed.listen, [0]

    def fail(event: Event) -> None:
        listen(event)
        told[0] += 1
        if told[0] >= 60:
            raise ZeroDivisionError(f"event {told[0]}")

    bed.listen = fail  # type: ignore[method-assign]  # what the run tells
    with pytest.raises(ZeroDivisionError, match="event 60"):
        bed.start()
    off_at_once(bed)
    assert [event.data["proved"] for event in open_run(bed.path).contents.events() if event.kind == "off"][-1] is True


def test_a_traffic_log_that_fails(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever notes the messages fails at every one from then on: the drive is told to be off without it."""
    bed = make_bed()

    def fail(*_: object) -> None:
        if len(bed.log) > 500:
            raise ZeroDivisionError("no more traffic")

    monkeypatch.setattr(TrafficLog, "__call__", fail)
    with pytest.raises(ZeroDivisionError, match="no more traffic"):
        bed.start()
    off_at_once(bed)


def test_the_first_error_is_the_one_shown(make_bed: MakeBed) -> None:
    """An error, and then another one while switching off: the first comes out, the second is a note on it, and the
    drive was told once more."""
    bed = make_bed()
    seen = [0]

    def strike(exchange: Exchange) -> None:
        seen[0] += exchange.moment == "lead"
        if seen[0] == 40:
            seen[0] += 1
            raise Killed("first")
        if exchange.moment == "closing" and seen[0] == 41:
            seen[0] += 1
            raise KeyboardInterrupt("second")

    bed.before = strike
    with pytest.raises(Killed, match="first") as caught:
        bed.start()
    assert any("second" in note for note in caught.value.__notes__)
    off_at_once(bed)


def test_the_states_say_whether_the_drive_may_be_on(make_bed: MakeBed) -> None:
    """At no moment of a run with a healing in it is the drive on while the state last told says that it may not be."""
    bed = make_bed()
    bed.faults = dict(A_LOST_REPLY)
    contradictions: list[str] = []
    listen, may_be_on = bed.listen, [False]

    def told(event: Event) -> None:
        listen(event)
        if event.kind == "state":
            may_be_on[0] = bool(event.data["drive_may_be_on"])
            if not may_be_on[0] and bed.drive_is_on():
                contradictions.append(f"{event.data['state']} told with the drive on")

    def happened(now: Happened) -> None:
        if now.what == "drive_on" and not may_be_on[0]:
            contradictions.append(f"{now}")

    def left_on(bench: Bench) -> None:
        bench.on_record = happened

    bed.listen, bed.on_built = told, left_on  # type: ignore[method-assign]  # what the run tells
    assert bed.start().ending.state is State.FINISHED
    assert contradictions == []
    assert sum(happened.what == "drive_on" for happened in bed.bench.record) >= 4
    states = [event.data["state"] for event in bed.events if event.kind == "state"]
    assert states.count("proving off") == 3  # opening, healing, closing
    assert states[-1] == "finished"


def driving(bench: Bench) -> None:
    """An earlier process has left the supply and the drive on."""
    for name, messages in (("supply", (b"SOUR:VOLT 12", b"OUTP ON")), ("board", (b"SOUR:PULS:DCYC 50", b"OUTP ON"))):
        for message in messages:
            bench.instruments[name].port._receiver.receive(message)


@pytest.mark.parametrize("name", ["scope", "meter"])
def test_an_opening_that_fails_switches_off(make_bed: MakeBed, name: str) -> None:
    """Another instrument does not answer at the start: a drive that an earlier process left on is switched off."""
    bed = make_bed()
    bed.on_built = driving
    bed.faults = {(name, number): "closed" for number in range(1, 100)}
    with pytest.raises(LinkError, match=name):
        bed.start()
    assert [happened.what for happened in bed.bench.record][:2] == ["supply_on", "drive_on"]
    assert {happened.why for happened in bed.bench.record if happened.what == "drive_off"} == {"OUTP OFF"}
    off_at_once(bed)


def test_another_instrument_at_a_resume_is_left_off(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row B13: A resume that is refused because another meter answers: a drive that was left on is off."""
    bed = make_bed()
    bed.start()

    def swapped(bench: Bench) -> None:
        driving(bench)
        monkeypatch.setattr(bench.instruments["meter"], "identity", lambda: "SIMULATED,multimeter,OTHER,1.0")

    bed.on_built = swapped
    with pytest.raises(WrongInstrument, match="meter"):
        bed.resume()
    off_at_once(bed)


def test_off_reaches_the_drive_although_the_supply_has_no_link(
    make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch
) -> None:
    """`off` on a rig whose supply's kind of link is not installed: the drive is told all the same, and the error says
    that the supply was not."""
    bed = make_bed()
    bed.start()
    driving(bed.bench)
    open_link = registry.open_link

    def no_package(address: str, *rest: Any, **more: Any) -> Any:
        if address == "simbench:supply":
            raise MissingPackage("supply: this kind of link is not installed")
        return open_link(address, *rest, **more)

    monkeypatch.setattr(registry, "open_link", no_package)
    use = RigUse.of_job(load(bed.job))
    with pytest.raises(OffNotProved, match="not installed"):
        off(use, bed.bench.clock, bed.bench.ports)
    assert not bed.drive_is_on()
