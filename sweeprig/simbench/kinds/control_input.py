"""A fan with a control input, after the published 4-wire specification (checks 10.1 to 10.6, verified).

Only what the specification and common practice say of such a fan: no winding, no bearing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from sweeprig.simbench.friction import WanderingFriction, normal_source
from sweeprig.simbench.heat import TwoBodies
from sweeprig.simbench.kinds.period import PeriodWave, Signal, period_wave
from sweeprig.simbench.kinds.stepped import AT_REST, CELL_S, RPM, Flow, Stepped, coasting, towards
from sweeprig.simbench.kinds.warmth import Warming, Warmth

INPUT_HZ = (21e3, 28e3)
"""Acceptable at the input (checks 10.3). Outside, this fan takes it for no signal: own choice, the text is silent."""
RETRY_S = 2.0
"""Type C, stopped, tries again so often (own choice: nothing was found about it)."""


@dataclass(frozen=True, slots=True)
class ControlInputTruth:
    """The fields are the `[simulated]` table of kind `control_input`; meanings stand at `job.SimulatedControlInput`."""

    maximum_rpm: float
    nominal_volts: float
    lowest_volts: float
    minimum_duty_percent: float
    minimum_rpm_percent: float
    below_minimum: str
    bend_percent: float
    time_constant_s: float
    coast_time_constant_s: float
    coast_rpm_per_s: float
    own_amps: float
    full_amps: float
    spike_amps: float
    spike_s: float
    start_rpm_percent: float
    start_pulse_s: float
    fail_percent: float
    spread_percent: float
    correlation_s: float
    speed_spread_percent: float
    heat: TwoBodies | None = None
    loss_percent: float = 0.0

    def rpm_percent(self, duty_percent: float) -> float:
        """Settled speed at nominal voltage, percent of the maximum; of type C as long as it turns.

        From the minimum upwards a straight line to full speed, bent: with y = (D − Dmin)/(100 − Dmin),
        n = nmin + (100 − nmin)·y + 4·bend·y·(1 − y).
        """
        low, slowest = self.minimum_duty_percent, self.minimum_rpm_percent
        if duty_percent >= low:
            y = 1.0 if low >= 100.0 else (duty_percent - low) / (100.0 - low)
            return slowest + (100.0 - slowest) * y + 4.0 * self.bend_percent * y * (1.0 - y)
        if self.below_minimum == "A":
            return slowest
        if self.below_minimum == "B":
            return slowest if duty_percent > 0.0 else 0.0
        return slowest * duty_percent / low


class ControlInputFan(Warming, Stepped):
    """A `Machine`: the drive is the signal at the control input, and drive off means the input open.

    The fan's supply is the rig's; across the motor is the supply's voltage. Without it no tachometer either.
    """

    def __init__(
        self, truth: ControlInputTruth, pulses_per_revolution: float, rng: np.random.Generator, now: float = 0.0
    ) -> None:
        super().__init__(pulses_per_revolution, now)
        self.truth = truth
        draw = normal_source(rng)
        self._wander = WanderingFriction(1.0, truth.speed_spread_percent, truth.correlation_s, CELL_S, draw)
        share = 100.0 * truth.spread_percent / truth.fail_percent if truth.fail_percent else 0.0
        self._fails_at = WanderingFriction(truth.fail_percent, share, truth.correlation_s, CELL_S, draw)
        self._started_at = self._tried_at = -math.inf
        self._warmth = Warmth(truth.heat, now)
        self._driven = False  # the electronics drive the rotor; else it coasts or stands

    @property
    def powered(self) -> bool:
        return self.volts >= self.truth.lowest_volts

    @property
    def input_percent(self) -> float:
        """The duty that the fan makes out; an open input, or a frequency it does not know, means full speed."""
        if not self.drive_on:
            return 100.0
        steady = self.duty_percent in (0.0, 100.0)
        return self.duty_percent if steady or INPUT_HZ[0] <= self.pwm_hz <= INPUT_HZ[1] else 100.0

    @property
    def _may_turn(self) -> bool:
        duty = self.input_percent
        if not self.powered or self.truth.rpm_percent(duty) <= 0.0:
            return False
        below = self.truth.below_minimum == "C" and duty < self.truth.minimum_duty_percent
        return not below or duty > self._fails_at.torque

    @property
    def _idle(self) -> bool:
        return not self.turning and not self.powered

    @property
    def _tach_works(self) -> bool:
        return self.powered

    def _skip(self, cells: int) -> None:
        self._wander.skip(cells)
        self._fails_at.skip(cells)

    def _decide(self, new_cell: bool) -> None:
        if new_cell:
            self._wander.next_cell()
            self._fails_at.next_cell()
        if self.turning and not self._driven and self.speed <= 0.0:
            self._stand()
        if self.turning and self._driven and not self._may_turn:
            self._driven, self._tried_at = False, self._at
        elif not self._driven and self._may_turn and (not new_cell or self._at - self._tried_at >= RETRY_S):
            self._driven, self.turning, self._started_at = True, True, self._at
        if not new_cell or self._at - self._tried_at >= RETRY_S:
            self._tried_at = self._at
        if self._warmth.counts:
            self._warm()

    def _warm(self) -> None:
        """Losses as they are now: what it draws at rest warms the case, a part of what drives it the winding."""
        flow = self._flow()
        own = min(self.truth.own_amps, flow.supply_amps)
        driving = (flow.supply_amps - own) * flow.supply_volts
        self._warmth.renew(self._at, self.truth.loss_percent / 100.0 * driving, own * flow.supply_volts)

    def _flow(self) -> Flow:
        t, volts, limit = self.truth, self.volts, self.supply_current_limit_amps
        if not self._driven:
            how = coasting(self.speed, t.coast_time_constant_s, t.coast_rpm_per_s / RPM) if self.turning else AT_REST
            amps = min(t.own_amps, limit) if self.powered else 0.0
            return Flow(how._replace(amps=amps), volts, 0.0, amps, 0.0, volts)
        full = t.maximum_rpm / RPM
        since = self._at - self._started_at
        power = max(0.0, t.full_amps - t.own_amps) * (self.speed / full) ** 3
        amps = t.own_amps + power + (t.spike_amps - t.own_amps if since < t.spike_s else 0.0)
        limited = amps > limit
        if limited:
            volts, amps = volts * limit / amps, limit
        percent = t.rpm_percent(self.input_percent)
        if since < t.start_pulse_s:
            percent = max(percent, t.start_rpm_percent)
        target = full * percent / 100.0 * volts / t.nominal_volts * self._wander.torque
        how = towards(self.speed, target, t.time_constant_s)
        slope = 0.0 if limited or self.speed <= 0.0 else 3.0 * power / self.speed
        return Flow(how._replace(amps=amps, amps_slope=slope), volts, 0.0, amps, slope, volts, limited)

    def wave(self) -> PeriodWave:
        """Nothing is switched in its leads: the supply's voltage and an even current. The PWM is on the control line,
        which is the drive signal."""
        flow, (motor, supply) = self._now_flow, self._drawn_now()
        even = (1.0 / self.pwm_hz, Signal(flow.motor_volts), motor, Signal(supply))
        return period_wave(0.0, [even], flow.supply_volts)
