"""The only place that waits. Durations and deadlines are monotonic; stamps are UTC.

Three clocks keep the contract: the system's, a scaled one (only against a served simulated bench), and the simulated
bench's own, which jumps to the next event (`simbench.clock`).
"""

from __future__ import annotations

import select
import time
from collections.abc import Sequence
from typing import Protocol

POLL_S = 0.002
"""Links without a selectable handle (serial on Windows, VISA) are polled this often."""


class Waitable(Protocol):
    """What a clock can wait on. `fileno` is None where there is nothing to select; `ready_at` is used by the bench."""

    def fileno(self) -> int | None: ...
    def ready_at(self) -> float: ...


class Clock(Protocol):
    def now(self) -> float:
        """Seconds, monotonic."""
        ...

    def utc(self) -> float:
        """Seconds since 1970, UTC."""
        ...

    def wait(self, until: float, on: Sequence[Waitable] = ()) -> None:
        """Return when one of `on` has bytes, or at `until`, whichever is first."""
        ...


class SystemClock:
    """The machine's clocks; with `rate` N an accelerated one: N bench seconds pass in one real second.

    `now`, `utc`: what it shows at this moment, where it goes on for another one that has ended; else the machine's.
    """

    def __init__(self, rate: float = 1.0, now: float | None = None, utc: float | None = None) -> None:
        self.rate = rate
        self._mono0, self._wall0 = time.monotonic(), time.time()
        self._now0 = self._mono0 if now is None else now
        self._utc0 = self._wall0 if utc is None else utc

    def now(self) -> float:
        return self._now0 + (time.monotonic() - self._mono0) * self.rate

    def utc(self) -> float:
        return self._utc0 + (time.time() - self._wall0) * self.rate

    def wait(self, until: float, on: Sequence[Waitable] = ()) -> None:
        left = (until - self.now()) / self.rate
        if left <= 0:
            return
        handles = [handle for link in on if (handle := link.fileno()) is not None]
        if len(handles) < len(on):
            left = min(left, POLL_S)
        if handles:
            select.select(handles, [], [], left)
        else:
            time.sleep(left)
