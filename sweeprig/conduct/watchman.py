"""What is looked at at least every 50 ms while anything is waited for: protection, orders, and a machine that slept.

Raising is how a look ends the waiting; the loop in `run` turns each cause into an outcome.
"""

from __future__ import annotations

from collections.abc import Callable

from sweeprig.clock import Clock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.protection import Guard, Trip
from sweeprig.conduct.states import Orders


class TripSeen(Exception):
    def __init__(self, trip: Trip) -> None:
        super().__init__(trip.evidence)
        self.trip = trip


class OffOrdered(Exception):
    """The text says why."""


class MachineSlept(Exception):
    pass


class Watchman:
    """`look` is the callable that `together` calls; it is cheap while all is well."""

    __slots__ = ("_apart", "_pulse", "clock", "guard", "orders")

    def __init__(self, clock: Clock, guard: Guard, orders: Orders, pulse: Callable[[], None]) -> None:
        self._pulse = pulse
        self.clock = clock
        self.guard = guard
        self.orders = orders
        self._apart = clock.utc() - clock.now()

    def look(self) -> None:
        now = self.clock.now()
        guard = self.guard
        if guard.trip is not None or now >= guard.due:
            trip = guard.check(now)
            if trip is not None:
                raise TripSeen(trip)
        why = self.orders.off_because()
        if why:
            raise OffOrdered(why)
        self._pulse()
        apart = self.clock.utc() - now
        if apart - self._apart > BOUNDS["slept_s"] or self._apart - apart > BOUNDS["slept_s"]:
            self._apart = apart
            raise MachineSlept
