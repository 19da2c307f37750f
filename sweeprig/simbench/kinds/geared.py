"""A brushed motor on a gear with backlash: whether motor and load go together, and the blow when they meet.

The winding on its stage is `stage`'s, the motor's equations are `rotor`'s. All at the motor's shaft; the tachometer
sits on the output shaft. The winding's heat is left out.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from sweeprig.simbench.friction import WanderingFriction, normal_source
from sweeprig.simbench.kinds.stepped import AT_REST, CELL_S, Flow, Stepped
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.rotor import Motion, after, caught, motion, starts, time_to_stop, time_to_turn
from sweeprig.simbench.stage import PlainLowSide, Setting
from sweeprig.simbench.waveform import Waveform

TOUCHING_RAD = 1e-8
"""Motor and load are at a flank when so near to it, at the motor's shaft."""
LOOKS = 16
"""Looks within a cell for the first meeting; then halved."""


class GearedMotor(Stepped):
    """A `Machine`. `truth` is motor and load together; `backlash_rad` at the output shaft.

    While the gear's torque goes forward the motor pushes at its driving flank (`flank` +1). Where the load would run
    slower alone than the motor does it stays there. Where the motor would run slower (the torque in the gear changes
    its sign: less duty, or the gate off, and much friction at the motor) it falls back through the play (`flank` 0),
    each side with its own inertia and friction, until the load meets it at the other flank (−1) and drives it; and
    forward again as soon as the motor would outrun the load. Each meeting is a blow (inelastic, own simplification) at
    which both take the speed that keeps the momentum, and after which a rough spot may hold both; `blows` counts them.
    At standstill, when the torque goes, the load springs back by a random part of the play.
    The torque is its mean over a PWM period: the flanks do not chatter with the PWM. The speed is the motor's, the
    tachometer's edges are the load's. `open_rad`: how far the motor is behind its driving flank.
    """

    def __init__(
        self,
        truth: MotorTruth,
        gear_ratio: float,
        backlash_rad: float,
        own_inertia_percent: float,
        own_friction_percent: float,
        pulses_per_revolution: float,
        rng: np.random.Generator,
        now: float = 0.0,
    ) -> None:
        super().__init__(pulses_per_revolution / gear_ratio, now)
        self.truth = truth
        own, share = own_friction_percent / 100.0, own_inertia_percent / 100.0
        self._alone = replace(truth, inertia_kg_m2=truth.inertia_kg_m2 * share, quadratic_load_nm_s2=0.0)
        self._load = replace(truth, inertia_kg_m2=truth.inertia_kg_m2 * (1.0 - share))
        self._own, self._share = own, share
        self._play = backlash_rad * gear_ratio
        self.open_rad = 0.0
        self.blows = 0
        self.flank = 1
        self._sprung = True
        self._motor_moves = False
        self._load_speed = self._load_angle = 0.0
        self._load_how = AT_REST
        self._meets_at = math.inf
        self._stage = PlainLowSide()
        self._uniform = random.Random(int(rng.integers(2**63)))
        draw, correlation = normal_source(rng), truth.friction_correlation_s
        self._running = WanderingFriction(
            truth.running_friction_nm, truth.running_friction_spread_percent, correlation, CELL_S, draw
        )
        self._breakaway = WanderingFriction(
            truth.breakaway_friction_nm, truth.breakaway_friction_spread_percent, correlation, CELL_S, draw
        )

    @property
    def powered(self) -> bool:
        return self._stage.conducts(self.volts, self.duty_percent, self.drive_on)

    @property
    def load_omega(self) -> float:
        """Speed of the load at the motor's shaft, rad/s."""
        return self._load_pass(self.now - self._at)[0]

    @property
    def _idle(self) -> bool:
        return not self.turning and not self.powered

    def _skip(self, cells: int) -> None:
        self._running.skip(cells)
        self._breakaway.skip(cells)

    def _next_decision(self) -> float:
        return min(super()._next_decision(), self._meets_at)

    def _setting(self, emf: float) -> Setting:
        """The stage at this back-EMF; on a lower voltage where the supply's current limit acts."""
        t = self.truth
        found = self._stage.setting(
            self.volts, t.resistance_ohm, t.inductance_henry, self.pwm_hz, self.duty_percent, self.powered
        )
        limit = self.supply_current_limit_amps
        return found.limited(emf, limit) if found.mean_supply_current(emf) > limit else found

    # ---- play ----------------------------------------------------------------------------------------------------

    def _load_alone(self) -> Motion:
        """J_load·dω/dt = −T_load − q·ω², linearised at the load's speed."""
        t, speed, friction = self._load, self._load_speed, self._running.torque * (1.0 - self._own)
        if speed <= 0.0:
            return AT_REST
        drag = t.quadratic_load_nm_s2 * speed
        return Motion(speed, -(friction + drag * speed) / t.inertia_kg_m2, -2.0 * drag / t.inertia_kg_m2, 0.0, 0.0)

    def _meet(self) -> None:
        """The blow where motor and load have just met, at either flank."""
        if self.flank != 0 or self.speed == self._load_speed:
            return
        ahead = self.speed > self._load_speed
        if (self.open_rad > TOUCHING_RAD) if ahead else (self.open_rad < self._play - TOUCHING_RAD):
            return
        self.flank, self.open_rad = (1, 0.0) if ahead else (-1, self._play)
        self.speed = self._share * self.speed + (1.0 - self._share) * self._load_speed
        self._load_speed = self.speed
        self.blows += 1

    def _part(self) -> None:
        """Leave the flank where the torque in the gear has changed its sign."""
        if self.flank == 0 or self._play == 0.0 or self._load.inertia_kg_m2 <= 0.0:
            return
        self._load_speed = self.speed
        emf = self.truth.torque_constant_nm_per_a * self.speed
        motor = motion(self._alone, self._setting(emf), self.speed, self._running.torque * self._own).acceleration
        if (motor - self._load_alone().acceleration) * self.flank < 0.0:
            self.flank = 0

    def _seconds_to_meeting(self, how: Motion) -> float:
        """When within the present cell the play is used up, s; infinity: not in it."""
        if self.flank != 0:
            return math.inf
        left = super()._next_decision() - self._at

        def outside(seconds: float) -> bool:
            gap = self.open_rad + _path(self._load_how, seconds)[1] - _path(how, seconds)[1]
            return not -0.5 * TOUCHING_RAD <= gap <= self._play + 0.5 * TOUCHING_RAD

        later = next((n for n in range(1, LOOKS + 1) if outside(left * n / LOOKS)), None)
        if later is None:
            return math.inf
        low, high = left * (later - 1) / LOOKS, left * later / LOOKS
        while high - low > 1e-12 * (1.0 + left):
            middle = 0.5 * (low + high)
            low, high = (low, middle) if outside(middle) else (middle, high)
        return high

    # ---- motion --------------------------------------------------------------------------------------------------

    def _decide(self, new_cell: bool) -> None:
        if new_cell:
            self._running.next_cell()
            self._breakaway.next_cell()
        self._meet()
        standing = self._setting(0.0).wave(0.0)
        k = self.truth.torque_constant_nm_per_a
        peak, mean = k * standing.peak_amps, k * standing.mean_motor_amps
        was = self.turning
        if was and self.flank != 0:
            self._part()
        if self.flank != 0:
            self._together(peak, mean)
        else:
            self._apart(peak, mean)
        if was and not self.turning:
            self._stand()
        if not self.turning:
            self._rest()

    def _together(self, peak: float, mean: float) -> None:
        rough, running = self._breakaway.torque, self._running.torque
        if self.turning:
            self.turning = self.speed > 0.0 and not caught(self.truth, self.speed, rough, peak)
        elif starts(rough, peak, mean, running):
            self.turning, self._sprung = True, False
        self._motor_moves = self.turning

    def _apart(self, peak: float, mean: float) -> None:
        """Each side for itself: what holds it, and whether the motor sets out."""
        rough, running, own = self._breakaway.torque, self._running.torque, self._own
        if self._load_speed <= 0.0 or caught(self._load, self._load_speed, rough * (1.0 - own), 0.0):
            self._load_speed = 0.0
        if self.speed > 0.0 and caught(self._alone, self.speed, rough * own, peak):
            self.speed = 0.0
        setting_out = self.speed == 0.0 and starts(rough * own, peak, mean, running * own)
        self._motor_moves = self.speed > 0.0 or setting_out
        self._sprung = self._sprung and not setting_out
        self.turning = self._motor_moves or self._load_speed > 0.0

    def _rest(self) -> None:
        """Both stand. Without torque the load springs back; at the other flank the motor has the whole play ahead."""
        self._load_speed, self._motor_moves = 0.0, False
        if self.flank > 0 and not self.powered and not self._sprung and self._play > 0.0:
            self.open_rad, self._sprung, self.flank = self._play * self._uniform.random(), True, 0
        elif self.flank < 0:
            self.flank = 0

    def _flow(self) -> Flow:
        emf = self.truth.torque_constant_nm_per_a * self.speed
        electric = self._setting(emf)
        shape = electric.wave(emf)
        limited = electric.supply_volts < self.volts
        how, slope, drawn = AT_REST, 0.0, electric.mean_supply_current(emf)
        steeper = (electric.mean_supply_current(emf + 1e-3) - drawn) / 1e-3 * self.truth.torque_constant_nm_per_a
        if self.turning and self._motor_moves:
            apart = self.flank == 0
            friction = self._running.torque * (self._own if apart else 1.0)
            how = motion(self._alone if apart else self.truth, electric, self.speed, friction)
            slope = self.truth.resistance_ohm * how.amps_slope + self.truth.torque_constant_nm_per_a
        else:
            how = how._replace(amps=shape.mean_motor_amps)
        self._load_how = self._load_alone() if self.flank == 0 else how
        self._meets_at = self._at + self._seconds_to_meeting(how) if self.turning else math.inf
        return Flow(
            how, shape.mean_motor_volts, slope, drawn, 0.0 if limited else steeper, electric.supply_volts, limited
        )  # fmt: skip

    def _load_pass(self, seconds: float) -> tuple[float, float]:
        """(speed, angle turned) of the load, at the motor's shaft, `seconds` after the commit; changes nothing."""
        return _path(self._load_how, seconds) if self.turning else (0.0, 0.0)

    def _flow_to(self, until: float) -> None:
        speed, turned = self._load_pass(until - self._at)
        before = self._sums.angle
        super()._flow_to(until)
        self._load_angle += turned
        self._load_speed = speed if self.flank == 0 else self.speed
        if self.flank == 0:
            self.open_rad = min(self._play, max(0.0, self.open_rad + turned - (self._sums.angle - before)))

    # ---- tachometer ----------------------------------------------------------------------------------------------

    def _edges_within(self, seconds: float) -> tuple[int, Callable[[], float]]:
        """Edges of the output shaft, by the load's own way."""
        start = self._load_angle
        whole = int((start + self._load_pass(seconds)[1]) * self._pulses_per_rad)
        count = whole - int(start * self._pulses_per_rad)
        if count <= 0:
            return 0, self._last_edge
        began, how, angle = self._at, self._load_how, whole / self._pulses_per_rad - start
        return count, lambda: began + time_to_turn(how, max(0.0, angle), min(seconds, time_to_stop(how)))

    def wave(self) -> Waveform:
        """The present waveform of motor voltage and current."""
        emf = self.truth.torque_constant_nm_per_a * self._look()[1]
        return self._setting(emf).wave(emf)


def _path(how: Motion, seconds: float) -> tuple[float, float]:
    """(speed, angle turned) of a motion that ends where it stands."""
    speed, turned = after(how, seconds)
    if speed > 0.0:
        return speed, turned
    return 0.0, after(how, min(seconds, time_to_stop(how)))[1]
