"""A cheap motor that stops and starts by a prescribed law: for statistics, where the truth must be a formula.

Its speed only follows the duty. No mechanics: `plant` and `electronic` have those.
"""

from __future__ import annotations

import math
import random
from dataclasses import dataclass

import numpy as np

from sweeprig.simbench.friction import normal_source
from sweeprig.simbench.kinds.period import PeriodWave, Signal, period_wave
from sweeprig.simbench.kinds.stepped import AT_REST, RPM, Flow, Stepped, coasting, towards
from sweeprig.simbench.rotor import time_to_stop

GUMBEL_SPREAD = 1.283
"""Standard deviation of a Gumbel law of unit scale, π/√6 = 1.2825: the exponential law's spread is this over b."""
COAST_S, COAST_LOSS = 0.3, 60.0
"""Coasting down: time constant (s), and rad/s² lost besides. Of no consequence: it only must end."""

RENEWAL_S = 1.0
"""A drifting threshold is taken as constant for so long."""

AT_REST_TIMES = 2.0
"""A rotor that stands takes so many times the current, as one without back-EMF does: else no reading but the
tachometer's would tell that it stopped. Of no consequence for what is found."""


@dataclass(frozen=True, slots=True)
class PrescribedTruth:
    """The fields are the `[simulated]` table of kind `prescribed`; meanings stand at `job.SimulatedPrescribed`.

    exponential   hazard h(D) = ln 2 / T · exp(−b·(D − D50)) per second, b = 1.283 / spread
    gaussian      hazard −ln Φ((D − D50)/spread) / T: a hold of just T seconds is survived with probability Φ
    Start: with probability 1 − 2^(−exp(b·(D − D50))), or Φ((D − D50)/spread), at the moment a setting is applied.
    Kick, where kick_s is above 0: a rotor that started holds out a step down to less duty only after a time that is
    drawn for each start; by t seconds it has passed with probability 1 − 2^(−exp(b·ln(t/t50))), or Φ(ln(t/t50)/spread),
    t50 = kick_s·(100/D)^kick_power, spread = kick_spread. Before that it is at rest again, and starts as from rest.
    """

    law: str
    stall_duty_percent: float
    stall_spread_percent: float
    hold_time_s: float
    start_duty_percent: float
    start_spread_percent: float
    floor_per_hour: float
    scatter_percent: float
    drift_percent_per_hour: float
    top_rpm: float
    dead_percent: float
    time_constant_s: float
    full_amps: float
    kick_s: float = 0.0
    kick_spread: float = 0.3
    kick_power: float = 1.0

    def hazard(self, duty_percent: float, shift_percent: float = 0.0) -> float:
        """Stops per second of turning at a duty; `shift_percent`: scatter and drift of the threshold."""
        above = duty_percent - self.stall_duty_percent - shift_percent
        floor = self.floor_per_hour / 3600.0
        if self.law == "gaussian":
            return floor - log_phi(above / self.stall_spread_percent) / self.hold_time_s
        return floor + math.log(2.0) / self.hold_time_s * _exp(-GUMBEL_SPREAD / self.stall_spread_percent * above)

    def survival(self, duty_percent: float, seconds: float, shift_percent: float = 0.0) -> float:
        """The chance of turning for `seconds` at a duty."""
        return math.exp(-seconds * self.hazard(duty_percent, shift_percent))

    def start_chance(self, duty_percent: float, shift_percent: float = 0.0) -> float:
        """The chance that a step from rest to a duty starts it."""
        above = duty_percent - self.start_duty_percent - shift_percent
        if self.law == "gaussian":
            return math.exp(log_phi(above / self.start_spread_percent))
        return -math.expm1(-math.log(2.0) * _exp(GUMBEL_SPREAD / self.start_spread_percent * above))

    def kick_half_s(self, duty_percent: float) -> float:
        """The time at a kick duty after which half of the starts hold out the step down, s."""
        return self.kick_s * float((100.0 / duty_percent) ** self.kick_power)

    def kick_chance(self, duty_percent: float, seconds: float) -> float:
        """The chance that a rotor which started at a kick duty holds out a step down after `seconds` there."""
        if self.kick_s <= 0.0:
            return 1.0
        z = math.log(seconds / self.kick_half_s(duty_percent)) / self.kick_spread
        if self.law == "gaussian":
            return math.exp(log_phi(z))
        return -math.expm1(-math.log(2.0) * _exp(GUMBEL_SPREAD * z))

    def rpm(self, duty_percent: float) -> float:
        """The settled speed while it turns: straight above the dead band, never below 2 % of the top."""
        straight = (duty_percent - self.dead_percent) / (100.0 - self.dead_percent)
        return self.top_rpm * max(0.02, straight)


def log_phi(z: float) -> float:
    """ln Φ(z) of the normal law; far below zero by its asymptote, where Φ itself underflows."""
    if z > 0.0:  # from the upper tail, so that a small hazard keeps its digits
        return math.log1p(-0.5 * math.erfc(z / math.sqrt(2.0)))
    if z > -30.0:
        return math.log(0.5 * math.erfc(-z / math.sqrt(2.0)))
    y = 1.0 / (z * z)
    return (
        -0.5 * z * z - math.log(-z) - 0.5 * math.log(2.0 * math.pi) + math.log1p(-y * (1.0 - 3.0 * y * (1.0 - 5.0 * y)))
    )


def _exp(x: float) -> float:
    return math.exp(min(x, 600.0))


class PrescribedMotor(Stepped):
    """A `Machine` that keeps PrescribedTruth: the life left, −ln of a uniform number, is used up by the hazard.

    A rotor that stops does so at once, at the very moment that was drawn, and starts again only by another setting.
    """

    def __init__(
        self, truth: PrescribedTruth, pulses_per_revolution: float, rng: np.random.Generator, now: float = 0.0
    ) -> None:
        super().__init__(pulses_per_revolution, now)
        self.truth = truth
        self._rng = random.Random(int(rng.integers(2**63)))
        self._normal = normal_source(self._rng)
        self._scatter = 0.0
        self._life = self._left_at = 0.0
        self._hazard = 0.0
        self._ends_at = math.inf
        self._setting: tuple[float, float, float] | None = None
        self._started_at_percent = 0.0
        self._holds_out_from = now

    @property
    def powered(self) -> bool:
        return self.drive_on and self.duty_percent > 0.0 and self.volts > 0.0

    @property
    def _idle(self) -> bool:
        return not self.turning

    def _next_decision(self) -> float:
        """No cells: the moment it stops, or the next renewal of a drifting hazard."""
        renewal = RENEWAL_S if self.powered and self.truth.drift_percent_per_hour else math.inf
        return min(self._at + renewal, self._ends_at)

    def _shift(self) -> float:
        return self._scatter + self.truth.drift_percent_per_hour * (self._at - self._origin) / 3600.0

    def _use_up(self) -> None:
        """The time since the last decision, at the hazard that held then."""
        self._life -= self._hazard * (self._at - self._left_at)
        self._left_at = self._at

    def _decide(self, new_cell: bool) -> None:
        del new_cell
        self._use_up()
        if self.turning and self._at >= self._ends_at:
            self._stand()
        setting = (self.pwm_hz, self.duty_percent, self.volts) if self.powered else None
        if setting != self._setting:
            self._setting = setting
            self._new_setting()
        self._hazard = 0.0
        if self.turning and self.powered:
            self._hazard = self.truth.hazard(self.duty_percent, self._shift())
        self._ends_at = self._at + self._lasts()

    def _lasts(self) -> float:
        """How long the rotor will turn on from now, s."""
        if not self.powered:
            return time_to_stop(coasting(self.speed, COAST_S, COAST_LOSS))
        return max(0.0, self._life / self._hazard) if self._hazard > 0.0 else math.inf

    def _new_setting(self) -> None:
        if not self.powered:
            return
        self._scatter = self.truth.scatter_percent * self._normal() if self.truth.scatter_percent else 0.0
        self._life = self._rng.expovariate(1.0)
        if self.turning and self._at < self._holds_out_from and self.duty_percent < self._started_at_percent:
            self._stand()
        if not self.turning:
            self.turning = self._rng.random() < self.truth.start_chance(self.duty_percent, self._shift())
            if self.truth.kick_s > 0.0:
                self._started_at_percent = self.duty_percent
                self._holds_out_from = self._at + self._kick_needed_s()

    def _kick_needed_s(self) -> float:
        """Drawn by the law of `PrescribedTruth.kick_chance`: how long at this duty until a step down is held out."""
        t = self.truth
        if t.law == "gaussian":
            z = self._normal()
        else:
            z = math.log(-math.log2(1.0 - self._rng.random() * (1.0 - 1e-12)) + 1e-300) / GUMBEL_SPREAD
        return t.kick_half_s(self.duty_percent) * math.exp(t.kick_spread * z)

    def _flow(self) -> Flow:
        t = self.truth
        if not self.powered:
            how = coasting(self.speed, COAST_S, COAST_LOSS) if self.turning else AT_REST
            return Flow(how, supply_volts=self.volts)
        share = self.duty_percent / 100.0
        how = towards(self.speed, t.rpm(self.duty_percent) / RPM, t.time_constant_s) if self.turning else AT_REST
        amps = t.full_amps * share * (1.0 if self.turning else AT_REST_TIMES)
        return Flow(
            how._replace(amps=amps), share * self.volts, 0.0, share * amps, 0.0, self.volts,
            stands_after_s=self._ends_at - self._at,
        )  # fmt: skip

    def wave(self) -> PeriodWave:
        """A plain square wave of the supply's voltage, through an even current that the supply gives in the on-time."""
        period = 1.0 / self.pwm_hz
        on = period * self.duty_percent / 100.0 if self.powered else 0.0
        volts, amps = self._now_flow.supply_volts, self._now_flow.motion.amps
        parts = [(on, Signal(volts), amps, Signal(amps)), (period - on, Signal(0.0), amps, Signal(0.0))]
        return period_wave(0.0, parts, volts)
