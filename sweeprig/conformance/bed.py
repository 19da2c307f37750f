"""What the conformance suite stands on: driving an adapter's steps, and what can stand between it and its instrument.

No check here; they are in `suite`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, TypeVar

from sweeprig.clock import Clock
from sweeprig.link.link import Link
from sweeprig.link.together import together
from sweeprig.roles import Adapter, Answer, Ask, Drive, Reply, Steps, Supply, Window

T = TypeVar("T")
Exchange = Callable[[Ask], Answer]
"""One message to an instrument and what it answers; raises a LinkError where no reply comes."""

MOST_ASKS = 2_000
REFUSED = b'-222,"Data out of range"'


class Failed(Exception):
    """A check found the contract broken."""


class NotApplicable(Exception):
    """This adapter has nothing the check could look at."""


def perform(steps: Steps[T], exchange: Exchange, most: int = MOST_ASKS) -> T:
    """Drive `steps` by `exchange` to their result; what either raises comes out. More than `most` asks: Failed."""
    try:
        ask = next(steps)
        for _ in range(most):
            ask = steps.send(exchange(ask))
    except StopIteration as stop:
        result: T = stop.value
        return result
    finally:
        steps.close()
    raise Failed(f"more than {most} asks")


def over_link(link: Link, clock: Clock) -> Exchange:
    """Exchanges over a real (or simulated) link; the pace that an ask wants is kept by the clock."""
    last = clock.now()

    def exchange(ask: Ask) -> Answer:
        nonlocal last
        if ask.after_s > 0.0:
            clock.wait(last + ask.after_s)
        one: dict[str, tuple[Link, Steps[Answer]]] = {"instrument": (link, _one(ask))}
        answer: Answer = together(one, clock, clock.now() + ask.within_s)["instrument"].get()
        if ask.early and ask.reply in (Reply.LINE, Reply.STREAM):
            link.identified = True
        last = answer.at
        return answer

    return exchange


def _one(ask: Ask) -> Steps[Answer]:
    return (yield ask)


@dataclass(frozen=True, slots=True)
class Bed:
    """What the suite stands on. `settings`: two that differ in every part, for an actuator."""

    adapter: Callable[[], Adapter]
    exchange: Callable[[], Exchange]
    settings: tuple[Any, Any] | None
    window: Window

    def fresh(self) -> tuple[Adapter, Exchange]:
        """A new adapter on an instrument that has been identified and configured."""
        adapter, exchange = self.adapter(), self.exchange()
        perform(adapter.identify(), exchange)
        perform(adapter.configure(), exchange)
        return adapter, exchange

    def ready(self) -> tuple[Adapter, Exchange]:
        """As `fresh`; an actuator also has its first setting and is on."""
        adapter, exchange = self.fresh()
        if self.settings is not None:
            perform(actuator(adapter).apply(self.settings[0]), exchange)
            perform(actuator(adapter).switch_on(), exchange)
        return adapter, exchange

    def methods(self, adapter: Adapter) -> dict[str, Callable[[], Steps[Any]]]:
        """Every method of the contract, in the order of a run."""
        found: dict[str, Callable[[], Steps[Any]]] = {
            "identify": adapter.identify, "configure": adapter.configure, "settings": adapter.settings,
        }  # fmt: skip
        if self.settings is not None:
            acts, setting = actuator(adapter), self.settings[0]
            found["apply"] = lambda: acts.apply(setting)
            found["switch_on"] = acts.switch_on
        found["measure"] = lambda: adapter.measure(self.window)
        found["switch_off"] = adapter.switch_off
        return found


class Watch:
    """Keeps the asks and answers that pass. `change` may alter an answer: (index of the ask, ask, answer)."""

    def __init__(self, exchange: Exchange, change: Callable[[int, Ask, Answer], Answer] | None = None) -> None:
        self._exchange, self._change = exchange, change
        self.asks: list[Ask] = []
        self.answers: list[Answer] = []

    def __call__(self, ask: Ask) -> Answer:
        self.asks.append(ask)
        answer = self._exchange(ask)
        if self._change is not None and ask.reply is not Reply.NOTHING:
            answer = self._change(len(self.asks) - 1, ask, answer)
        self.answers.append(answer)
        return answer


class Refusing:
    """Keeps the set number `which` (from 0) from the instrument, and reports it once in the error queue, as an
    instrument does that refuses. Common commands (`*CLS`) are no sets."""

    def __init__(self, exchange: Exchange, which: int) -> None:
        self._exchange, self._left = exchange, which
        self._queued = False
        self._at = 0.0
        self.refused = b""

    def __call__(self, ask: Ask) -> Answer:
        if ask.reply is Reply.NOTHING and not ask.message.startswith(b"*"):
            self._left -= 1
            if self._left == -1:
                self.refused, self._queued = ask.message, True
                return Answer(b"", self._at)
        if self._queued and b"ERR" in ask.message.upper():
            self._queued = False
            return Answer(REFUSED, self._at)
        answer = self._exchange(ask)
        self._at = answer.at
        return answer


def actuator(adapter: Adapter) -> Drive | Supply:
    if not isinstance(adapter, Drive | Supply):
        raise Failed("settings were given for an adapter that has no apply and switch_on")
    return adapter


def need(met: bool, seen: str) -> None:
    if not met:
        raise Failed(seen)
