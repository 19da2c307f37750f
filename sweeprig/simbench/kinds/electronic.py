"""A fan with its own commutation, made for steady supply, on a chopped one: when it wakes, starts, gives up, resets.

What its electronics draw is `feed`'s; its tachometer, chopped with the supply, is `chopped_tach`'s.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from sweeprig.simbench.friction import WanderingFriction, normal_source
from sweeprig.simbench.heat import TwoBodies
from sweeprig.simbench.kinds.chopped_tach import falls
from sweeprig.simbench.kinds.feed import Bus, Drawn, Shape, bus, gated, shape_gated, shape_through_bus, through_bus
from sweeprig.simbench.kinds.period import PeriodWave, Signal, period_wave
from sweeprig.simbench.kinds.stepped import AT_REST, CELL_S, RPM, Flow, Stepped
from sweeprig.simbench.kinds.warmth import Warming, Warmth
from sweeprig.simbench.rotor import Motion

DRAUGHT_CORRELATION_S = 5.0
"""How quickly gusts come and go (own choice)."""


@dataclass(frozen=True, slots=True)
class ElectronicTruth:
    """The fields are the `[simulated]` table of kind `electronic`; meanings stand at `job.SimulatedElectronic`."""

    resistance_ohm: float
    torque_constant_nm_per_a: float
    inertia_kg_m2: float
    quadratic_load_nm_s2: float
    viscous_friction_nm_s: float
    running_friction_nm: float
    running_friction_spread_percent: float
    breakaway_friction_nm: float
    breakaway_friction_spread_percent: float
    friction_correlation_s: float
    barrier_angle_rad: float
    own_amps: float
    lowest_volts: float
    wake_s: float
    holdup_farad: float
    charge_ohm: float
    soft_start_s: float
    lock_detect_s: float
    lock_rest_s: float
    backward_limit_rpm: float
    draught_rpm: float
    draught_spread_percent: float
    tach_chopped: bool
    heat: TwoBodies | None = None


class ElectronicFan(Warming, Stepped):
    """A `Machine`. `resets` counts undervoltage resets of electronics with a capacitor, `lockouts` the times that lock
    protection gave up pushing."""

    def __init__(
        self, truth: ElectronicTruth, pulses_per_revolution: float, rng: np.random.Generator, now: float = 0.0
    ) -> None:
        super().__init__(pulses_per_revolution, now)
        self.truth = t = truth
        draw, correlation = normal_source(rng), truth.friction_correlation_s
        self._running = WanderingFriction(
            t.running_friction_nm, t.running_friction_spread_percent, correlation, CELL_S, draw
        )
        self._breakaway = WanderingFriction(
            t.breakaway_friction_nm, t.breakaway_friction_spread_percent, correlation, CELL_S, draw
        )
        self._draught = WanderingFriction(
            t.draught_rpm / RPM, t.draught_spread_percent, DRAUGHT_CORRELATION_S, CELL_S, draw
        )
        self.resets = self.lockouts = 0
        self._bus: Bus | None = None
        self._alive_from = math.inf
        self._pushing_since: float | None = None
        self._collapsed = False
        self._warmth = Warmth(t.heat, now)
        self._ohms, self._k = t.resistance_ohm, t.torque_constant_nm_per_a
        self._warm()

    # ---- electronics ---------------------------------------------------------------------------------------------

    @property
    def powered(self) -> bool:
        """Some part of each period has supply enough to work with."""
        return self.drive_on and self.duty_percent > 0.0 and self.volts >= self.truth.lowest_volts

    @property
    def peak_supply_amps(self) -> float:
        """The charging spike at the begin of each on-time, A; the mean current where no capacitor is charged.

        A capacitor whose electronics reset has stopped falling there.
        """
        flow, feed = self._now_flow, self._bus
        if feed is None or self.truth.holdup_farad == 0.0:
            return flow.supply_amps
        lacks = feed.low_ohms * flow.supply_amps
        return min(lacks, feed.volts - self.truth.lowest_volts) / feed.charge_ohm

    @property
    def level(self) -> float:
        """How much of its voltage the electronics put on the winding now, 0 to 1; gated ones say 1."""
        if self._bus is None:
            return 1.0
        ready = self._at - self._alive_from
        if ready < 0.0:
            return 0.0
        return 1.0 if self.truth.soft_start_s <= 0.0 else min(1.0, ready / self.truth.soft_start_s)

    @property
    def _refuses(self) -> bool:
        return self.direction < 0 and self.speed * RPM > self.truth.backward_limit_rpm

    def _drawn(self, speed: float) -> Drawn:
        """What flows at a speed (rad/s, signed), with the electronics as they are."""
        t, period = self.truth, 1.0 / self.pwm_hz
        emf, limit = self._k * speed, self.supply_current_limit_amps
        if not self.powered:
            share = self.duty_percent / 100.0 if self.drive_on else 0.0
            return Drawn(self.volts, 0.0, 0.0, 0.0, 0.0, share * self.volts, 0.0, 0.0, 0.0, False)
        if self._bus is not None and not self._collapsed:
            level = 0.0 if self._refuses else self.level
            return through_bus(self._bus, self._ohms, t.own_amps, level, emf, limit)
        wake = math.inf if self._refuses else t.wake_s
        floor = t.lowest_volts if t.holdup_farad > 0.0 else 0.0
        return gated(
            self.volts, floor, period * self.duty_percent / 100.0, period, wake, t.soft_start_s,
            self._ohms, t.own_amps, emf, limit,
        )  # fmt: skip

    def _feed(self) -> Bus | None:
        """The bus, where there is one that holds; None: awakened anew in every on-time, or without power."""
        t = self.truth
        if not self.powered:
            return None
        if self.duty_percent >= 100.0 and t.holdup_farad == 0.0:
            return Bus(self.volts, 0.0, 0.0, math.inf)
        if t.holdup_farad == 0.0:
            return None
        found = bus(self.volts, t.charge_ohm, t.holdup_farad, self.pwm_hz, self.duty_percent)
        return found if found.volts - found.low_ohms * t.own_amps >= t.lowest_volts else None

    def _renew_feed(self) -> None:
        """After changed settings: power that comes begins with the time to wake, one that stays goes on."""
        was, self._bus = self._bus, self._feed()
        if self._bus is None:
            self._alive_from, self._pushing_since = math.inf, None
        elif was is None:
            self._alive_from, self._pushing_since = self._at + self.truth.wake_s, None

    def _timers(self) -> None:
        """Undervoltage reset, lock protection and its rest, refusal while turning backwards; all start softly anew."""
        t, feed = self.truth, self._bus
        if feed is None:
            self._collapsed = False
            return
        if self._refuses:
            self._alive_from = max(self._alive_from, self._at)
            return
        self._undervoltage(feed)
        if self.turning or self.level == 0.0 or self._collapsed:
            self._pushing_since = None
        elif self._pushing_since is None:
            self._pushing_since = self._at
        elif self._at - self._pushing_since >= t.lock_detect_s:
            self.lockouts += 1
            self._alive_from, self._pushing_since = self._at + t.lock_rest_s, None

    def _undervoltage(self, feed: Bus) -> None:
        """The bus falls too low in the off-time. With a soft start it begins anew; without one the same happens in
        every period as long as it would: awakened in each on-time."""
        t, was = self.truth, self._collapsed
        self._collapsed = False
        drawn = self._drawn(self.speed * self.direction)
        low = drawn.volts - feed.low_ohms * drawn.supply_amps < t.lowest_volts and self.level > 0.0
        if not low:
            return
        self.resets += not was
        self._pushing_since = None
        if t.soft_start_s > 0.0:
            self._alive_from = self._at + t.wake_s
        else:
            self._collapsed = True

    # ---- rotor ---------------------------------------------------------------------------------------------------

    @property
    def _idle(self) -> bool:
        return not self.turning and not self.powered and self.truth.draught_rpm == 0.0

    def _skip(self, cells: int) -> None:
        self._running.skip(cells)
        self._breakaway.skip(cells)
        self._draught.skip(cells)

    def _decide(self, new_cell: bool) -> None:
        if new_cell:
            self._running.next_cell()
            self._breakaway.next_cell()
            self._draught.next_cell()
        else:
            self._renew_feed()
        self._timers()
        if self._warmth.counts:
            self._warm()
        drawn = self._drawn(self.speed * self.direction)
        k = self._k
        push, mean = k * drawn.standing_amps * (drawn.driven > 0.0), k * drawn.standing_amps * drawn.driven
        against = self.truth.quadratic_load_nm_s2 * self._draught.torque**2
        if self.turning:
            ahead = (push - against) * self.direction
            energy = 0.5 * self.truth.inertia_kg_m2 * self.speed**2
            if self.speed <= 0.0 or energy < (self._breakaway.torque - ahead) * self.truth.barrier_angle_rad:
                self._stand()
        if not self.turning:
            self._try_start(push - against, mean - against)

    def _try_start(self, peak_nm: float, mean_nm: float) -> None:
        """The peak torque overcomes the rough spot and the mean one the running friction; or the draught does both."""
        rough, running = self._breakaway.torque, self._running.torque
        if peak_nm > rough and mean_nm > running:
            self.turning, self.direction = True, 1
        elif peak_nm < -rough:
            self.turning, self.direction = True, -1

    def _flow(self) -> Flow:
        """J·dω/dt = K·Ī − T_run·sgn ω − c·ω − q·(ω + ω_d)·|ω + ω_d|, linearised; ω_d: the draught's speed."""
        t, way = self.truth, self.direction
        speed = self.speed * way
        d = self._drawn(speed)
        k, j = self._k, t.inertia_kg_m2
        how, slope = AT_REST, k * way
        if self.turning:
            air = speed + self._draught.torque
            torque = k * d.winding_amps - self._running.torque * way - t.viscous_friction_nm_s * speed
            torque -= t.quadratic_load_nm_s2 * air * abs(air)
            rate = (k * k * d.winding_slope - t.viscous_friction_nm_s - 2.0 * t.quadratic_load_nm_s2 * abs(air)) / j
            how = Motion(self.speed, torque * way / j, rate, 0.0, 0.0)
        how = how._replace(amps=d.winding_amps, amps_slope=d.winding_slope * slope)
        return Flow(
            how, d.fan_volts, d.fan_volts_slope * slope, d.supply_amps, d.supply_slope * slope, d.volts, d.limited
        )

    # ---- within a period -----------------------------------------------------------------------------------------

    def wave(self) -> PeriodWave:
        """The present period: a block of current in each on-time, or the charging of the capacitor that holds it up."""
        speed = self._look()[1] * self.direction
        drawn = self._drawn(speed)
        return period_wave(self._k * speed, self._shape(drawn), drawn.volts)

    def _shape(self, drawn: Drawn) -> Shape:
        t, period = self.truth, 1.0 / self.pwm_hz
        on = period * self.duty_percent / 100.0 if self.drive_on else 0.0
        if not self.powered:
            return [(on, Signal(drawn.volts), 0.0, Signal(0.0)), (period - on, Signal(0.0), 0.0, Signal(0.0))]
        if self._bus is not None and not self._collapsed:
            return shape_through_bus(self._bus, drawn, t.holdup_farad, period, on)
        wake = math.inf if self._refuses else t.wake_s
        floor = t.lowest_volts if t.holdup_farad > 0.0 else 0.0
        return shape_gated(drawn, floor, t.own_amps, period, on, wake)

    # ---- heat ----------------------------------------------------------------------------------------------------

    def _warm(self) -> None:
        """Losses as they are now: copper's in the winding, what the electronics draw for themselves in the case.

        Left out: the loss in what charges the capacitor, which sits outside for the most part, and the friction's.
        """
        drawn, period = self._drawn(self.speed * self.direction), 1.0 / self.pwm_hz
        square = sum(seconds * amps * amps for seconds, _, amps, _ in self._shape(drawn)) / period
        awake = 1.0 if self._bus is not None and not self._collapsed else self.duty_percent / 100.0
        own = min(self.truth.own_amps * awake, drawn.supply_amps)
        self._warmth.renew(self._at, self._ohms * square, own * drawn.volts)
        self._ohms = self.truth.resistance_ohm * self._warmth.copper
        self._k = self.truth.torque_constant_nm_per_a * self._warmth.magnet

    # ---- tachometer ----------------------------------------------------------------------------------------------

    @property
    def _tach_works(self) -> bool:
        return not self.truth.tach_chopped or self.powered

    def _edges_within(self, seconds: float) -> tuple[int, Callable[[], float]]:
        if not self.truth.tach_chopped or not self.powered or self.duty_percent >= 100.0:
            return super()._edges_within(seconds)
        start = self._sums.angle * self._pulses_per_rad
        end = self._pass(seconds)[0].angle * self._pulses_per_rad
        began, period = self._at, 1.0 / self.pwm_hz
        count, last = falls(
            start, end, seconds, lambda pulse: self._when(pulse, seconds)() - began,
            began - self._pwm_since, period, period * self.duty_percent / 100.0,
        )  # fmt: skip
        return count, lambda: began + last
