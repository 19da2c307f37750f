"""A brushed motor on a gear with backlash: whether motor and load go together, and the blow when they meet.

The winding on its stage is `stage`'s, the motor's equations are `rotor`'s. All at the motor's shaft; the tachometer
sits on the output shaft. The winding's heat is left out.
"""

from __future__ import annotations

import random
from dataclasses import replace

import numpy as np

from sweeprig.simbench.friction import WanderingFriction, normal_source
from sweeprig.simbench.kinds.stepped import AT_REST, CELL_S, Flow, Stepped
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.rotor import caught, motion, starts
from sweeprig.simbench.stage import PlainLowSide, Setting
from sweeprig.simbench.waveform import Waveform


class GearedMotor(Stepped):
    """A `Machine`. `truth` is motor and load together; `backlash_rad` at the output shaft.

    When the torque on a standing motor goes, the load springs back by a random part of the play. The next start takes
    that up with the motor's own inertia and friction only; then the motor meets the load: speed falls by the ratio of
    the inertias, at a blow (inelastic, own simplification), and the load's breakaway friction may hold both. `blows`
    counts these.
    While it runs, friction keeps the load against the flank: the play does not open.
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
        self._own, self._share = own, share
        self._play = backlash_rad * gear_ratio
        self.open_rad = 0.0
        self.blows = 0
        self._sprung = True
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
    def _idle(self) -> bool:
        return not self.turning and not self.powered

    def _skip(self, cells: int) -> None:
        self._running.skip(cells)
        self._breakaway.skip(cells)

    @property
    def alone(self) -> bool:
        """The motor turns within the play, the load stands."""
        return self.open_rad > 0.0

    def _setting(self, emf: float) -> Setting:
        """The stage at this back-EMF; on a lower voltage where the supply's current limit acts."""
        t = self.truth
        found = self._stage.setting(
            self.volts, t.resistance_ohm, t.inductance_henry, self.pwm_hz, self.duty_percent, self.powered
        )
        limit = self.supply_current_limit_amps
        return found.limited(emf, limit) if found.mean_supply_current(emf) > limit else found

    def _pass_play(self) -> None:
        """The play taken up since the last commit; when none is left, the blow."""
        turned = self._sums.angle - self._angle_at_start
        if self.alone and turned >= self.open_rad:
            self.open_rad = 0.0
            self.blows += 1
            self.speed *= self._share
            self._slip += turned

    _angle_at_start = 0.0

    @property
    def _tach_works(self) -> bool:
        return not self.alone

    def _decide(self, new_cell: bool) -> None:
        if new_cell:
            self._running.next_cell()
            self._breakaway.next_cell()
        self._pass_play()
        standing = self._setting(0.0).wave(0.0)
        k = self.truth.torque_constant_nm_per_a
        peak, mean = k * standing.peak_amps, k * standing.mean_motor_amps
        part = self._own if self.alone else 1.0
        rough, running = self._breakaway.torque * part, self._running.torque * part
        body = self._alone if self.alone else self.truth
        if self.turning and (self.speed <= 0.0 or caught(body, self.speed, rough, peak)):
            turned = self._sums.angle - self._angle_at_start
            self._stand()
            if self.alone:
                self.open_rad, self._slip = self.open_rad - turned, self._slip + turned
            self._angle_at_start = self._sums.angle
        if not self.turning and not self.powered and not (self.alone or self._sprung):
            self.open_rad, self._sprung = self._play * self._uniform.random(), True
        elif not self.turning and starts(rough, peak, mean, running):
            self.turning, self._sprung = True, False
            self._angle_at_start = self._sums.angle

    def _flow(self) -> Flow:
        emf = self.truth.torque_constant_nm_per_a * self.speed
        electric = self._setting(emf)
        shape = electric.wave(emf)
        limited = electric.supply_volts < self.volts
        how, slope, drawn = AT_REST, 0.0, electric.mean_supply_current(emf)
        steeper = (electric.mean_supply_current(emf + 1e-3) - drawn) / 1e-3 * self.truth.torque_constant_nm_per_a
        if self.turning:
            friction = self._running.torque * (self._own if self.alone else 1.0)
            how = motion(self._alone if self.alone else self.truth, electric, self.speed, friction)
            slope = self.truth.resistance_ohm * how.amps_slope + self.truth.torque_constant_nm_per_a
        else:
            how = how._replace(amps=shape.mean_motor_amps)
        return Flow(
            how, shape.mean_motor_volts, slope, drawn, 0.0 if limited else steeper, electric.supply_volts, limited
        )  # fmt: skip

    def wave(self) -> Waveform:
        """The present waveform of motor voltage and current."""
        emf = self.truth.torque_constant_nm_per_a * self._look()[1]
        return self._setting(emf).wave(emf)
