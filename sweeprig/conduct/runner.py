"""The process that performs holds: `python -m sweeprig.conduct.runner`, started and watched by `supervise`.

It says what happens on its standard output and hears beats and orders on its standard input; that is read by one small
thread, which only sets flags. When the input ends, or no beat comes for too long, the supervisor is gone or stopped:
the drive goes off and the process ends.
"""

from __future__ import annotations

import argparse
import os
import signal
import sys
import threading
import traceback
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import BinaryIO

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.messages import ORDERS, Failed, Hello, Said, failed, line_of
from sweeprig.conduct.states import Ending, Event, OnEvent, Orders
from sweeprig.errors import SweeprigError


class HeardOrders(Orders):
    """Orders as they come from the supervisor, and its silence."""

    def __init__(self, now: Callable[[], float]) -> None:
        super().__init__()
        self._now = now
        self.heard_at = now()
        self.gone = False

    def hear(self, source: BinaryIO) -> None:
        """Read until the input ends. The only thing that the thread does."""
        for line in iter(lambda: source.readline(64), b""):
            word = line.strip().decode("ascii", "replace")
            self.heard_at = self._now()
            if word in ORDERS:
                setattr(self, word, True)
        self.gone = True

    def off_because(self) -> str:
        if self.off:
            return "switched off by order"
        if self.gone:
            return "the supervisor is gone"
        silent = self._now() - self.heard_at
        return f"no sign of the supervisor for {silent:.1f} s" if silent > BOUNDS["silent_s"] else ""

    @property
    def again(self) -> bool:
        return not (self.off or self.finish)


class Voice:
    """Standard output, one line each thing said. A reader that has gone is an order to switch off, not an error."""

    def __init__(self, sink: BinaryIO, orders: HeardOrders, now: Callable[[], float]) -> None:
        self._sink, self._orders, self._now = sink, orders, now
        self._said_at = now()

    def say(self, said: Said) -> None:
        self._said_at = self._now()
        try:
            self._sink.write(line_of(said))
            self._sink.flush()
        except (OSError, ValueError):
            self._orders.gone = True

    def event(self, event: Event) -> None:
        self.say(event)

    def pulse(self) -> None:
        if self._now() - self._said_at >= 0.8 * BOUNDS["beat_s"]:
            self.say(PULSE)


PULSE = Event("beat", 0.0, {"number": 0})
"""The runner lives, and nothing else: of no hold, at no time of the run."""


def main(given: list[str] | None = None) -> int:
    """Work on the run in the folder that is given; the exit code says how it ended to who has no ears."""
    parser = argparse.ArgumentParser(prog="sweeprig.conduct.runner")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--attended", action="store_true")
    parser.add_argument("--because", default="")
    asked = parser.parse_args(given)
    from sweeprig.conduct import opening, sessions  # noqa: F401 - loaded before hello: a slow disk is no hang

    now = SystemClock().now
    orders = HeardOrders(now)
    sink = os.fdopen(os.dup(sys.stdout.fileno()), "wb")
    os.dup2(sys.stderr.fileno(), sys.stdout.fileno())  # a stray print of a library is no message
    voice = Voice(sink, orders, now)
    voice.say(Hello(os.getpid()))
    threading.Thread(target=orders.hear, args=(sys.stdin.buffer,), daemon=True).start()
    for kind in (signal.SIGTERM, signal.SIGINT):
        signal.signal(kind, lambda *_: setattr(orders, "off", True))
    try:
        ending = _work(asked.folder, asked.attended, asked.because, voice, orders)
    except SweeprigError as error:
        traceback.print_exc()
        voice.say(failed(error))
        return error.exit_code
    except Exception as error:  # noqa: BLE001 - our own fault; the supervisor tells it, the traceback is in runner.log
        traceback.print_exc()
        voice.say(Failed(type(error).__name__, {"what": f"{type(error).__name__}: {error}"}, 70))
        return 70
    voice.say(ending)
    return 0


def _work(folder: Path, attended: bool, because: str, voice: Voice, orders: HeardOrders) -> Ending:
    from sweeprig.conduct.opening import open_run_for_work, real_opening
    from sweeprig.conduct.sessions import work

    job, logbook, traffic = open_run_for_work(folder, waits(voice.event, voice.pulse, orders.off_because))
    with logbook, closing(traffic):
        opening = real_opening(job, logbook, attended, because)
        return work(job, folder, logbook, traffic, opening, voice.event, orders, voice.pulse)


def waits(on_event: OnEvent, pulse: Callable[[], None], told: Callable[[], str]) -> Callable[[], bool]:
    """Whether to go on waiting for who has the logbook, after a short wait: a `status` that looks has it for an
    instant, and a runner that lost its supervisor until it has proved off."""
    wall = SystemClock()
    began = wall.now()
    until, said = began + BOUNDS["obey_s"], False

    def wait() -> bool:
        nonlocal said
        pulse()
        if not said and wall.now() - began > BOUNDS["proof_s"]:
            said = True
            text = (
                "another process still has this run's logbook (a runner that lost its supervisor?); waiting for its end"
            )
            on_event(Event("notice", 0.0, {"text": text}))
        wall.wait(wall.now() + BOUNDS["person_s"])
        return wall.now() < until and not told()

    return wait


if __name__ == "__main__":
    sys.exit(main())
