"""All adapters in one loop, without threads: their steps ask, the links carry, the clock waits.

Nothing here repeats an ask, heals a link or knows what a message means.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from contextlib import suppress
from dataclasses import dataclass
from typing import Any, TypeAlias

from sweeprig.clock import Clock
from sweeprig.errors import LinkError, LinkGarbled, LinkMisuse, LinkTimeout
from sweeprig.link.base import as_link_error
from sweeprig.link.framing import show
from sweeprig.link.link import Link
from sweeprig.roles import Answer, Ask, Reply, Steps

LOOK_S = 0.05
"""`look` is called at least this often; a write that the machine does not take within it is a stuck link."""

_NOTHING = Reply.NOTHING

Traffic: TypeAlias = Callable[[str, str, bytes, float], None]


@dataclass(slots=True)
class Result:
    """What the steps of one instrument came to: `value`, or the `error` that ended them."""

    value: Any = None
    error: Exception | None = None

    def get(self) -> Any:
        """The value; raises the error where there is one."""
        if self.error is not None:
            raise self.error
        return self.value


class _Talk:
    """The steps of one instrument. `until`: the deadline of the awaited reply, or when to go on without one."""

    __slots__ = ("ask", "awaiting", "link", "name", "ready_at", "result", "send", "steps", "take", "until", "written")

    def __init__(self, name: str, link: Link, steps: Steps[Any]) -> None:
        self.name = name
        self.link = link
        self.steps = steps
        self.send = link.send
        self.take = link.take
        self.ready_at: Callable[[], float] = link.ready_at if getattr(link, "knows_when_ready", False) else _any_moment
        self.ask = Ask(b"")
        self.awaiting = False
        self.written = False
        self.until = math.inf
        self.result: Result | None = None


def together(
    steps: Mapping[str, tuple[Link, Steps[Any]]],
    clock: Clock,
    deadline: float,
    look: Callable[[], None] | None = None,
    on_result: Callable[[str, Result], None] | None = None,
    traffic: Traffic | None = None,
) -> dict[str, Result]:
    """Drive the steps of all instruments to their ends, side by side, and return instrument name → Result.

    deadline    absolute, in the clock's seconds; each exchange also ends `within_s` after it was sent
    look        called at the start and then at least every 50 ms of the clock; what it raises ends the loop, with
                every link that has a reply outstanding dirty and all steps closed
    on_result   called with (name, result) the moment the steps of that name end
    traffic     called with (name, ">" sent or "<" received, bytes without terminator, clock time); of a reply that
                did not come whole the partial bytes

    One that fails does not stop the others: its Result carries the error, a late reply as LinkTimeout with the partial
    bytes. Any exception that the steps raise goes there too, so that a faulty adapter cannot keep another instrument
    from being switched off. LinkMisuse if two names share a link, before anything is sent.
    """
    links = {id(link) for link, _ in steps.values()}
    if len(links) != len(steps):
        raise LinkMisuse(f"two of {', '.join(sorted(steps))} share one link", remedy="Give each its own address")
    loop = _Loop(clock, deadline, on_result, traffic)
    talks = [_Talk(name, link, its) for name, (link, its) in steps.items()]
    try:
        loop.run(talks, look)
    except BaseException:
        for talk in talks:
            _abandon(talk)
        raise
    return {talk.name: talk.result for talk in talks if talk.result is not None}


class _Loop:
    """What stays the same during one call of `together`."""

    __slots__ = ("awaited", "clock", "deadline", "ended", "on_result", "traffic")

    def __init__(
        self,
        clock: Clock,
        deadline: float,
        on_result: Callable[[str, Result], None] | None,
        traffic: Traffic | None,
    ) -> None:
        self.clock = clock
        self.deadline = deadline
        self.on_result = on_result
        self.traffic = traffic
        self.awaited: list[Link] = []
        self.ended = False

    def run(self, talks: list[_Talk], look: Callable[[], None] | None) -> None:
        now_of, wait, serve = self.clock.now, self.clock.wait, self.serve
        now = now_of()
        if look is not None:
            look()
        for talk in talks:
            self.advance(talk, None, now)
        next_look = math.inf if look is None else now + LOOK_S
        running, on, looked = _running(talks), self.awaited, False
        nearest = now
        while running:
            until = nearest if nearest < next_look else next_look
            if until > now:
                wait(until, on)
            now = now_of()
            if now >= next_look and look is not None and not looked:
                # what came meanwhile is taken in the next turn, which follows at once and does not look
                look()
                next_look, looked = now + LOOK_S, True
                continue
            looked = False
            nearest = math.inf
            for talk in running:
                until = talk.until
                if until <= now or (talk.awaiting and (talk.ready_at() <= now or talk.link.dirty)):
                    serve(talk, now)
                    until = talk.until
                if until < nearest:
                    nearest = until
            if self.ended:
                self.ended = False
                running = _running(running)

    def serve(self, talk: _Talk, now: float) -> None:
        """Take what came, or go on where that is due, or give up what is late."""
        if not talk.awaiting:
            if talk.result is None and now >= talk.until:
                self.go_on(talk, now)
            return
        try:
            raw = talk.take()
        except Exception as error:  # noqa: BLE001 - a faulty link must not keep the others from switching off
            self.fail(talk, error, now)
            return
        if raw is None:
            if now >= talk.until:
                self.give_up(talk, now)
            return
        if self.traffic is not None:
            self.traffic(talk.name, "<", raw, now)
        self.advance(talk, Answer(raw, now), now)

    def go_on(self, talk: _Talk, now: float) -> None:
        if talk.written:
            talk.written = False
            self.advance(talk, Answer(b"", now), now)
        else:
            self.put(talk, now)

    def advance(self, talk: _Talk, answer: Answer | None, now: float) -> None:
        """Hand over the answer (None starts the steps); send the next ask, keep it until it is due, or end."""
        try:
            ask = next(talk.steps) if answer is None else talk.steps.send(answer)
        except StopIteration as stop:
            self.end(talk, Result(stop.value))
            return
        except Exception as error:  # noqa: BLE001 - a faulty adapter must not keep the others from switching off
            if isinstance(error, LinkGarbled):
                # the reply had not the asked shape: it may have belonged to another ask, and so may the next one
                talk.link.dirty = talk.link.dirty or error.what
            self.end(talk, Result(error=error))
            return
        talk.ask = ask
        if ask.after_s > 0.0 and answer is not None:
            self.pause(talk, min(now + ask.after_s, self.deadline))
        else:
            self.put(talk, now)

    def put(self, talk: _Talk, now: float) -> None:
        """Send the ask. NOTHING is answered at the next turn of the loop: what others have to send goes first."""
        ask = talk.ask
        if now >= self.deadline:
            self.fail(talk, LinkTimeout(f"{talk.name}: {show(ask.message)} was not sent, the time was up"), now)
            return
        until = now + ask.within_s
        if until > self.deadline:
            until = self.deadline
        if self.traffic is not None:
            self.traffic(talk.name, ">", ask.message, now)
        write_limit = now + LOOK_S
        # Before the bytes go out: an interrupt on the next line must find the link with a reply outstanding.
        was_awaiting, talk.awaiting = talk.awaiting, True
        try:
            talk.send(ask.message, ask.reply, until if until < write_limit else write_limit, ask.early)
        except Exception as error:  # noqa: BLE001 - a faulty link must not keep the others from switching off
            self.fail(talk, error, now)
            return
        if ask.reply is _NOTHING:
            talk.written = True
            self.pause(talk, now)
            return
        talk.until = until
        if not was_awaiting:
            self.awaited.append(talk.link)

    def pause(self, talk: _Talk, until: float) -> None:
        """No reply is outstanding; go on at `until`."""
        talk.until = until
        self.rest(talk)

    def rest(self, talk: _Talk) -> None:
        """Nothing is awaited of it any more."""
        talk.awaiting = False
        if talk.link in self.awaited:
            self.awaited.remove(talk.link)

    def give_up(self, talk: _Talk, now: float) -> None:
        partial = talk.link.declare_timeout()
        text = f"{talk.name}: no whole reply to {show(talk.ask.message)}"
        if partial:
            text += f", only {show(partial)}"
        self.fail(talk, LinkTimeout(text, partial=partial, remedy=_late_remedy(partial)), now)

    def fail(self, talk: _Talk, error: Exception, now: float) -> None:
        """The steps learn of it, so that they can close; whatever they do then, the link's error stands."""
        if not isinstance(error, LinkError):
            error = as_link_error(error, talk.name)
        if error.partial and self.traffic is not None:
            self.traffic(talk.name, "<", error.partial, now)
        with suppress(Exception):
            talk.steps.throw(error)
        with suppress(Exception):
            talk.steps.close()
        self.end(talk, Result(error=error))

    def end(self, talk: _Talk, result: Result) -> None:
        talk.result = result
        talk.until = math.inf
        self.rest(talk)
        self.ended = True
        if self.on_result is not None:
            self.on_result(talk.name, result)


def _any_moment() -> float:
    """When bytes may be there, of a link that does not know."""
    return -math.inf


def _running(talks: list[_Talk]) -> list[_Talk]:
    return [talk for talk in talks if talk.result is None]


def _abandon(talk: _Talk) -> None:
    if talk.result is not None:
        return
    if talk.awaiting:
        talk.link.declare_timeout()
        talk.link.dirty = "given up while a reply was outstanding"
    with suppress(Exception):
        talk.steps.close()


def _late_remedy(partial: bytes) -> str:
    if partial:
        return "If the reply is complete as shown, the instrument sends no terminator: set it to end replies with LF"
    return "The instrument may have refused the message: its error queue says so after the link was resynchronised"
