"""The simulated bench's clock: waiting jumps to the next event and lets the bench do what happens until then."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Protocol

from sweeprig.clock import Waitable

START_UTC = 1_772_474_400.0
"""2026-03-02 18:00:00 UTC: when a simulated night begins unless another start is given."""


class Passing(Protocol):
    """What the clock needs of the bench."""

    now: float
    unread: int
    queue: list[Any]

    def pass_until(self, to: float) -> bool:
        """Do the events due by `to`; True as soon as one may have made something readable. Else go to `to`: False."""
        ...


class BenchClock:
    """Keeps the Clock contract. `utc()` is the start's UTC plus the bench time that has passed since `began`."""

    def __init__(self, bench: Passing, began_utc: float) -> None:
        self._bench = bench
        self._utc_at_zero = began_utc - bench.now

    def now(self) -> float:
        return self._bench.now

    def utc(self) -> float:
        return self._utc_at_zero + self._bench.now

    def wait(self, until: float, on: Sequence[Waitable] = ()) -> None:
        bench = self._bench
        if not bench.unread and bench.queue and until < bench.queue[0][0]:
            # most waits are for the next look alone: nothing can become readable and nothing happens before
            if until > bench.now:
                bench.now = until
            return
        while True:
            ready = until
            if bench.unread:  # else no link has anything to wait for
                for link in on:
                    at = link.ready_at()
                    if at < ready:
                        ready = at
            if ready <= bench.now or not bench.pass_until(ready):
                return
