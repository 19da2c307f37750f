"""The simulated bench: motor, instruments and a queue of what happens when, in one bench time.

Nothing of conduct, schedule, characterise or the dialects may be imported here: truth and analysis share no formula.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable
from itertools import count
from typing import NamedTuple, Protocol

from sweeprig.errors import SweeprigError
from sweeprig.simbench.clock import START_UTC, BenchClock
from sweeprig.simbench.port import Callback, Port
from sweeprig.simbench.waveform import Waveform

_NEVER = float("inf")


class Machine(Protocol):
    """The motor on its stage, as the instruments see it (`plant.Plant`); read-outs are valid at `now`."""

    now: float

    @property
    def edges(self) -> int: ...
    @property
    def last_edge_at(self) -> float: ...
    @property
    def motor_volt_seconds(self) -> float: ...
    @property
    def motor_amp_seconds(self) -> float: ...
    @property
    def supply_amp_seconds(self) -> float: ...
    @property
    def switch_amp_seconds(self) -> float: ...
    @property
    def node_volt_seconds(self) -> float: ...
    @property
    def supply_volt_seconds(self) -> float: ...
    @property
    def supply_limited(self) -> bool: ...
    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None: ...
    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None: ...
    def advance(self, to: float) -> None: ...
    def wave(self) -> Waveform | None: ...
    def pwm_phase_s(self) -> float: ...


class OnBench(Protocol):
    """An instrument, as the bench sees it."""

    name: str
    port: Port
    changes: int
    byte_s: float

    def identity(self) -> str: ...
    def power_on(self) -> None: ...


class Happened(NamedTuple):
    """What the drive or the supply really did: `drive_on`, `drive_off`, `supply_on` or `supply_off`."""

    at: float
    what: str
    why: str


class Struck(NamedTuple):
    """A simulated fault that acted: `instrument` is "" for a fault of the rig, `exchange` then 0."""

    at: float
    kind: str
    instrument: str
    exchange: int


class DriveSignal:
    """The signal at the switch's gate, as the PWM source makes it that is wired to it."""

    def __init__(self) -> None:
        self.pwm_hz = 0.0
        self.duty_percent = 0.0
        self.on = False
        self._high_seconds = 0.0
        self._since = 0.0

    @property
    def has_edges(self) -> bool:
        return self.on and 0.0 < self.duty_percent < 100.0

    def change(self, now: float, pwm_hz: float, duty_percent: float, on: bool) -> None:
        self._high_seconds = self.high_seconds(now)
        self._since = now
        self.pwm_hz, self.duty_percent, self.on = pwm_hz, duty_percent, on

    def high_seconds(self, now: float) -> float:
        """How long the signal has been high so far, s: the mean of whole periods."""
        return self._high_seconds + ((now - self._since) * self.duty_percent / 100.0 if self.on else 0.0)


class Bench:
    """Bench time, the queue of events, the motor and the instruments on it.

    now          bench time, s; only `advance`, `step` and the clock move it
    queue        what happens when: a heap of (time, order, callback, argument)
    touched      counts what may have changed when a port becomes readable: answers, flushes, broken connections
    unread       answers under way or not read yet, and broken connections not yet closed, of all ports together
    clock        keeps the Clock contract on this bench
    ports        instrument name → its byte port
    record       what the drive really did, in order; the truth that tests of safety look at
    on_record    called with each new entry of `record`
    struck       the simulated faults that acted, in order
    gate_from    the instrument whose output is wired to the gate; "": the board, where there is one
    """

    def __init__(self, plant: Machine, began: float = 0.0, began_utc: float | None = None) -> None:
        self.plant = plant
        self.now = began
        self.touched = self.unread = 0
        self.clock = BenchClock(self, START_UTC + began if began_utc is None else began_utc)
        self.signal = DriveSignal()
        self.gate_from = ""
        self.instruments: dict[str, OnBench] = {}
        self.ports: dict[str, Port] = {}
        self.record: list[Happened] = []
        self.on_record: Callable[[Happened], None] | None = None
        self.struck: list[Struck] = []
        self.queue: list[tuple[float, int, Callback, object]] = []
        self._order = count()

    def add(self, instrument: OnBench) -> None:
        self.instruments[instrument.name] = instrument
        self.ports[instrument.name] = instrument.port

    @property
    def state_changes(self) -> dict[str, int]:
        """State-changing message units that each instrument has obeyed; queries do not count."""
        return {name: instrument.changes for name, instrument in self.instruments.items()}

    def at(self, time: float, callback: Callback, argument: object) -> None:
        """Call `callback(argument)` when bench time is `time`; equal times in the order of these calls."""
        heapq.heappush(self.queue, (time, next(self._order), callback, argument))

    def next_event(self) -> float:
        """Bench time of the next event; infinity with none."""
        return self.queue[0][0] if self.queue else float("inf")

    def step(self, to: float) -> bool:
        """Do the next event due by `to` and return True; with none due, go to `to` and return False."""
        queue = self.queue
        if queue and queue[0][0] <= to:
            time, _, callback, argument = heapq.heappop(queue)
            if time > self.now:
                self.now = time
            callback(argument)
            return True
        self._go_to(to)
        return False

    def pass_until(self, to: float) -> bool:
        """Do the events due by `to`, but not past the first that touches a port: True. Else go to `to`: False."""
        queue, touched, pop = self.queue, self.touched, heapq.heappop
        while queue and queue[0][0] <= to:
            time, _, callback, argument = pop(queue)
            if time > self.now:
                self.now = time
            callback(argument)
            if self.touched != touched:
                return True
            if self.now >= to:
                return False
        if self.now < to != _NEVER:
            self.now = to
        else:
            self._go_to(to)
        return False

    def _go_to(self, to: float) -> None:
        if to == _NEVER:
            raise SweeprigError("the simulated bench was told to wait for ever with nothing going to happen")
        if to > self.now:
            self.now = to

    def advance(self, to: float) -> None:
        """Let bench time pass up to `to`, s, doing every event due by then. A time that has passed does nothing."""
        while self.step(to):
            pass

    def plant_now(self) -> Machine:
        """The motor, its physics brought up to now."""
        plant = self.plant
        if plant.now < self.now:
            plant.advance(self.now)
        return plant

    def note(self, what: str, why: str) -> None:
        """Put down what the drive or the supply did just now."""
        happened = Happened(self.now, what, why)
        self.record.append(happened)
        if self.on_record is not None:
            self.on_record(happened)
