"""What all these motors share: settings, a grid of cells, and integrals that are closed forms between two commits.

As in `plant`, looking changes nothing: the state is committed at cell edges and changed settings only. What a motor
does within a cell, and what it decides at a cell's edge, is its kind's.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Callable
from typing import NamedTuple

from sweeprig.errors import SweeprigError
from sweeprig.simbench.rotor import Motion, after, time_to_stop, time_to_turn
from sweeprig.simbench.waveform import Waveform

CELL_S = 0.02
"""Grid of random processes and decisions: a timer of the electronics is late by at most so much."""
AT_REST = Motion(0.0, 0.0, 0.0, 0.0, 0.0)
RPM = 30.0 / math.pi
"""rpm per rad/s."""


class Flow(NamedTuple):
    """How things go from a commit to the next, in closed form: values at `motion.speed`, and slopes by the speed.

    motion         the speed's magnitude; its amps are the motor's mean current
    stands_after_s the rotor stands still from then on, whatever the motion says (s after the commit)
    """

    motion: Motion
    motor_volts: float = 0.0
    motor_volts_slope: float = 0.0
    supply_amps: float = 0.0
    supply_amps_slope: float = 0.0
    supply_volts: float = 0.0
    limited: bool = False
    stands_after_s: float = math.inf


class Sums(NamedTuple):
    """Running integrals up to a moment: angle turned either way (rad), V·s and A·s."""

    angle: float = 0.0
    motor_vs: float = 0.0
    motor_as: float = 0.0
    supply_as: float = 0.0
    supply_vs: float = 0.0


class Stepped(ABC):
    """Settings, time and read-outs; the rest is the kind's.

    speed      magnitude as of the last commit, rad/s; direction +1 or −1
    turning    False while the rotor stands; stops: how often it came to stand, and stopped_at when last
    """

    def __init__(self, pulses_per_revolution: float, now: float) -> None:
        self.now = now
        self.pwm_hz, self.duty_percent, self.drive_on = 1000.0, 0.0, False
        self.supply_volts, self.supply_current_limit_amps, self.supply_on = 0.0, 0.0, False
        self.speed, self.direction, self.turning = 0.0, 1, False
        self.stops, self.stopped_at = 0, -math.inf
        self._origin = self._at = self._pwm_since = now
        self._cell = 0
        self._sums = Sums()
        self._pulses_per_rad = pulses_per_revolution / (2.0 * math.pi)
        self._counted = 0
        self._last_edge: Callable[[], float] = lambda: -math.inf
        self._now_flow = Flow(AT_REST)
        self._peek: tuple[Sums, float] | None = None

    # ---- the kind's ----------------------------------------------------------------------------------------------

    @abstractmethod
    def _flow(self) -> Flow:
        """How things go on from the commit at `_at`; changes nothing."""

    @abstractmethod
    def _decide(self, new_cell: bool) -> None:
        """At a cell's edge (`new_cell`) or after changed settings: starts, stops, timers, the next random values."""

    @property
    @abstractmethod
    def _idle(self) -> bool:
        """Nothing can happen before a setting changes."""

    def _next_decision(self) -> float:
        """Run clock of the next `_decide`: the next cell's edge, or a kind's own moment before it."""
        return self._origin + (self._cell + 1) * CELL_S

    def _skip(self, cells: int) -> None:
        """So many cells passed while idle: random processes move on. Without any, nothing."""
        del cells

    @property
    def _tach_works(self) -> bool:
        return True

    # ---- what the bench sets -------------------------------------------------------------------------------------

    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None:
        """The drive signal from `now` on. A changed frequency, or switching on, begins a new PWM period."""
        if (pwm_hz, duty_percent, on) == (self.pwm_hz, self.duty_percent, self.drive_on):
            return
        if not (pwm_hz > 0.0 and 0.0 <= duty_percent <= 100.0):
            raise SweeprigError(
                "the simulated drive cannot do this",
                value=f"{pwm_hz:g} Hz, {duty_percent:g} %",
                allowed="more than 0 Hz, 0 to 100 %",
            )
        self._commit()
        if pwm_hz != self.pwm_hz or (on and not self.drive_on):
            self._pwm_since = self.now
        self.pwm_hz, self.duty_percent, self.drive_on = pwm_hz, duty_percent, on
        self._changed()

    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None:
        """The supply from `now` on; its limit acts on the mean current, by lowering the voltage."""
        if (volts, current_limit_amps, on) == (self.supply_volts, self.supply_current_limit_amps, self.supply_on):
            return
        if not (volts >= 0.0 and current_limit_amps >= 0.0):
            raise SweeprigError(
                "the simulated supply cannot do this",
                value=f"{volts:g} V, {current_limit_amps:g} A",
                allowed="zero or more",
            )
        self._commit()
        self.supply_volts, self.supply_current_limit_amps, self.supply_on = volts, current_limit_amps, on
        self._changed()

    def advance(self, to: float) -> None:
        """Let the physics run until `to` (run clock, s)."""
        if to < self.now:
            raise SweeprigError("time cannot run backwards", value=f"{to!r} s", allowed=f"from {self.now!r} s")
        self.now = to
        self._peek = None
        while not self._idle:
            edge = self._next_decision()
            if edge > to:
                return
            self._flow_to(edge)
            new_cell = edge >= self._origin + (self._cell + 1) * CELL_S
            self._cell += new_cell
            self._decide(new_cell)
            self._now_flow = self._flow()

    # ---- what the bench sees -------------------------------------------------------------------------------------

    @property
    def volts(self) -> float:
        """What the supply is set to give now, V; zero while it is off."""
        return self.supply_volts if self.supply_on else 0.0

    @property
    def omega(self) -> float:
        """Speed, rad/s; below zero backwards."""
        return self._look()[1] * self.direction

    @property
    def angle(self) -> float:
        """Angle turned so far, either way, rad."""
        return self._look()[0].angle

    @property
    def edges(self) -> int:
        """Tachometer edges so far."""
        return self._counted + self._edges_within(self.now - self._at)[0]

    @property
    def last_edge_at(self) -> float:
        """When the last edge came (run clock, s); −inf before the first."""
        count, last = self._edges_within(self.now - self._at)
        return last() if count else self._last_edge()

    @property
    def motor_volt_seconds(self) -> float:
        return self._look()[0].motor_vs

    @property
    def motor_amp_seconds(self) -> float:
        return self._look()[0].motor_as

    @property
    def supply_amp_seconds(self) -> float:
        return self._look()[0].supply_as

    @property
    def switch_amp_seconds(self) -> float:
        return self._look()[0].supply_as

    @property
    def supply_volt_seconds(self) -> float:
        return self._look()[0].supply_vs

    @property
    def node_volt_seconds(self) -> float:
        sums = self._look()[0]
        return sums.supply_vs - sums.motor_vs

    @property
    def supply_limited(self) -> bool:
        """The supply's current limit acts (as of the last cell edge)."""
        return self._now_flow.limited

    def wave(self) -> Waveform | None:
        """The present PWM period; None where a kind knows only its means."""
        return None

    def _drawn_now(self) -> tuple[float, float]:
        """(motor A, supply A) at the present speed, as the flow since the commit has them."""
        flow, more = self._now_flow, self._look()[1] - self._now_flow.motion.speed
        how = flow.motion
        return how.amps + how.amps_slope * more, flow.supply_amps + flow.supply_amps_slope * more

    def pwm_phase_s(self) -> float:
        """Seconds since the drive signal last went on, 0 up to one period."""
        return (self.now - self._pwm_since) % (1.0 / self.pwm_hz)

    # ---- time ----------------------------------------------------------------------------------------------------

    def _edges_within(self, seconds: float) -> tuple[int, Callable[[], float]]:
        """(edges within `seconds` after the commit, what tells when the last of them came: it is rarely asked)."""
        if not (self.turning and self._tach_works):
            return 0, self._last_edge
        start = self._sums.angle * self._pulses_per_rad
        whole = int(self._pass(seconds)[0].angle * self._pulses_per_rad)
        count = whole - int(start)
        return (count, self._when(whole, seconds)) if count > 0 else (0, self._last_edge)

    def _when(self, pulse: float, seconds: float) -> Callable[[], float]:
        """Tells when (run clock) within `seconds` after the commit the shaft stands at `pulse`, counted in pulses."""
        how, began = self._now_flow.motion, self._at
        ends, angle = self._now_flow.stands_after_s, pulse / self._pulses_per_rad - self._sums.angle
        return lambda: began + time_to_turn(how, max(0.0, angle), min(seconds, time_to_stop(how), ends))

    def _flow_to(self, until: float) -> None:
        """Commit the state at `until`, within the present cell."""
        seconds = until - self._at
        count, last = self._edges_within(seconds)
        if count:
            self._counted += count
            self._last_edge = last
        self._sums, self.speed = self._pass(seconds)
        self._at = until

    def _pass(self, seconds: float) -> tuple[Sums, float]:
        """(integrals, speed) `seconds` after the commit; changes nothing."""
        flow, s = self._now_flow, self._sums
        how = flow.motion
        moving = min(seconds, flow.stands_after_s)
        speed, turned = after(how, moving) if self.turning else (0.0, 0.0)
        if speed <= 0.0:
            moving = min(moving, time_to_stop(how)) if self.turning else 0.0
            speed, turned = 0.0, (after(how, moving)[1] if self.turning else 0.0)
        elif moving < seconds:
            speed = 0.0
        lag = turned - how.speed * moving
        still = seconds - moving

        def grown(value: float, slope: float) -> float:
            """∫ (value + slope·(ω − speed)) dt, the part at rest in it."""
            return value * seconds + slope * (lag - how.speed * still)

        return Sums(
            s.angle + turned,
            s.motor_vs + grown(flow.motor_volts, flow.motor_volts_slope),
            s.motor_as + grown(how.amps, how.amps_slope),
            s.supply_as + grown(flow.supply_amps, flow.supply_amps_slope),
            s.supply_vs + flow.supply_volts * seconds,
        ), speed

    def _look(self) -> tuple[Sums, float]:
        if self._peek is None:
            self._peek = self._pass(self.now - self._at)
        return self._peek

    def _changed(self) -> None:
        self._decide(False)
        self._now_flow = self._flow()

    def _commit(self) -> None:
        """Bring the committed state to `now`: the rest of a step, or one jump over an idle gap of any length."""
        self._peek = None
        self._flow_to(self.now)
        if self._idle:
            cell = int((self.now - self._origin) / CELL_S)
            while self._origin + (cell + 1) * CELL_S <= self.now:
                cell += 1
            while cell > 0 and self._origin + cell * CELL_S > self.now:
                cell -= 1
            self._skip(cell - self._cell)
            self._cell = cell

    def _stand(self, since: float | None = None) -> None:
        """The rotor stands, since just now or the given time."""
        self.turning, self.speed, self.direction = False, 0.0, 1
        self.stops += 1
        self.stopped_at = self._at if since is None else since


def towards(speed: float, target: float, time_constant_s: float) -> Motion:
    """A speed (rad/s) that relaxes to its target by the first-order law."""
    return Motion(speed, (target - speed) / time_constant_s, -1.0 / time_constant_s, 0.0, 0.0)


def coasting(speed: float, time_constant_s: float, loss: float) -> Motion:
    """A speed that dies down by the first-order law and a steady loss (rad/s²), so that it ends."""
    return Motion(speed, -speed / time_constant_s - loss, -1.0 / time_constant_s, 0.0, 0.0)
