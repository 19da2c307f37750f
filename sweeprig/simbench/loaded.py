"""What pushes and holds the rotor of the closer mechanics, and how its steps are to be taken: torques, ripple, numbers.

How it then moves is `closer`'s; the laws of load and cogging are their own files', the step itself is `resolved`'s.
"""

from __future__ import annotations

import math
import random

import numpy as np

from sweeprig.simbench.aging_plant import AgingPlant
from sweeprig.simbench.friction import WanderingFriction
from sweeprig.simbench.load import RPM, Load
from sweeprig.simbench.motor_truth import DetailedTruth
from sweeprig.simbench.plant import CELL_S
from sweeprig.simbench.resolved import Shaft, longest_steps
from sweeprig.simbench.stage import Setting, Stage
from sweeprig.simbench.winding import Numbers, Winding, averaged, can_be_stepped, chopped, numbers

SLOW_PWM = 0.1
"""A PWM period longer than this part of the mechanical time constant J·R/K² is resolved at any speed."""
RIPPLE = 0.1
"""While resolving, the current is averaged if its ripple is below this part of what holds the rotor …"""
SHORT = 3e-4
"""… or if the strongest push moves a standing rotor within one PWM period by less than this part of a detent's pitch.

Dropping it moves the duties of starting and stalling by less than 1 % of themselves (tested at the bound). At lower
frequencies the pulses carry a standing rotor over the crest by a little each, which the mean torque does not."""


class LoadedPlant(AgingPlant):
    """Constructed like `Plant`, with a `DetailedTruth`."""

    def __init__(
        self,
        truth: DetailedTruth,
        pulses_per_revolution: float,
        rng: np.random.Generator | random.Random,
        now: float = 0.0,
        ripple: bool = True,
        stage: Stage | None = None,
    ) -> None:
        self._load = truth.load or Load()
        self._curve = numbers([x for corner in self._load.corners() for x in corner])
        self._cogging = truth.cogging
        pitch = math.inf if self._cogging is None else math.pi / self._cogging.steps_per_revolution
        self._play = 0.0 if self._cogging is None else min(pitch, 0.5 * math.pi / pulses_per_revolution)
        self.resolved, self._blurred, self._position, self._way = False, False, 0.0, 1.0
        self._slow, self._resolvable = False, truth.cogging is not None
        self._mechanical_s = truth.inertia_kg_m2 * truth.resistance_ohm / truth.torque_constant_nm_per_a**2
        self._winding_of: tuple[Setting, bool, float, Winding, Numbers] | None = None
        self._draught = 0.0
        super().__init__(truth, pulses_per_revolution, rng, now, ripple, stage)
        self._gusts: WanderingFriction | None = None
        if self._load.draught_rpm > 0.0:
            mean, spread = self._load.draught_rpm / RPM, self._load.draught_spread_percent
            draw = self._running.normals
            self._gusts = WanderingFriction(mean, spread, self._load.draught_correlation_s, CELL_S, draw)
            self._draught = self._gusts.torque

    # ---- torques -------------------------------------------------------------------------------------------------

    @property
    def _breakaway_nm(self) -> float:
        """What it takes to move the rotor, Nm; more for one that has rested since it stopped."""
        grown = 1.0 if self.turning else self._load.stiction(self._at - self.stopped_at)
        return self._breakaway.torque * grown + self._bound_nm

    def _against(self, speed: float) -> tuple[float, float]:
        t = self.truth
        return self._load.against(speed, t.viscous_friction_nm_s, t.quadratic_load_nm_s2, self._draught)

    def _pushes(self) -> tuple[float, float, float]:
        """(least, mean, greatest) torque on the standing rotor within a PWM period, less load and cogging; Nm."""
        held = self._against(0.0)[0]
        if self._cogging is not None:
            held += self._cogging.torque(self._position)
        mean = self._mean_nm - held
        if not self.ripple:
            return mean, mean, mean
        k = self.truth.torque_constant_nm_per_a
        return k * self._standing.valley_amps - held, mean, k * self._standing.peak_amps - held

    def _leaves(self) -> float:
        """+1 or −1: the way in which the standing rotor sets out now; 0: it stays."""
        least, mean, greatest = self._pushes()
        breakaway = self._breakaway_nm
        if self._resolvable and (self._chops or not self.ripple):
            return 1.0 if greatest > breakaway else -1.0 if least < -breakaway else 0.0
        running = self._running.torque + self._bound_nm
        if greatest > breakaway and mean > running:
            return 1.0
        return -1.0 if least < -breakaway and mean < -running else 0.0

    def _caught(self) -> bool:
        """A rough spot holds the averaged rotor, by its kinetic energy and by what pushes it on (as `rotor.caught`)."""
        least, _, greatest = self._pushes()
        ahead = greatest if self._way > 0.0 else -least
        spot = self._breakaway.torque + self._bound_nm - ahead
        energy = 0.5 * self.truth.inertia_kg_m2 * self._omega_committed**2
        return energy < spot * self.truth.barrier_angle_rad

    # ---- how steps are taken -----------------------------------------------------------------------------------------

    def _is_slow(self) -> bool:
        """The PWM period is not short against the mechanics."""
        return self._driven and self.duty_percent < 100.0 and self.pwm_hz * self._mechanical_s * SLOW_PWM < 1.0

    @property
    def _chops(self) -> bool:
        """While resolving, the current's ripple is resolved too."""
        if not (self.ripple and self._driven and can_be_stepped(self._electric)):
            return False
        if self._slow:
            return True
        k, cogging = self.truth.torque_constant_nm_per_a, self._cogging
        peak, valley = self._standing.peak_amps, self._standing.valley_amps
        if cogging is None or k * (peak - valley) <= RIPPLE * (self.truth.breakaway_friction_nm + cogging.amplitude_nm):
            return False
        kick = 0.5 * (k * max(peak, -valley) + cogging.amplitude_nm) / self.truth.inertia_kg_m2 / self.pwm_hz**2
        return kick > SHORT * 2.0 * math.pi / cogging.steps_per_revolution

    def _shaft_now(self) -> Shaft:
        t, c, load = self.truth, self._cogging, self._load
        nm, steps = (0.0, 1.0) if c is None or self._blurred else (c.amplitude_nm, float(c.steps_per_revolution))
        return Shaft(
            t.inertia_kg_m2, t.torque_constant_nm_per_a, self._running.torque + self._bound_nm, self._breakaway_nm,
            nm, steps, t.viscous_friction_nm_s, t.quadratic_load_nm_s2, self._draught, load.constant_nm, self._play,
            *longest_steps(t.inertia_kg_m2, nm, steps, self._mechanical_s),
        )  # fmt: skip

    def _numbers_of(self, setting: Setting, chops: bool) -> tuple[Winding, Numbers]:
        """The setting in numbers, as it is stepped: kept as long as it covers what the rotor can do within a cell."""
        t, k, w = self.truth, self.truth.torque_constant_nm_per_a, self._standing
        strongest = k * max(w.peak_amps, -w.valley_amps) + abs(self._against(0.0)[0]) + self._breakaway_nm
        swing = 0.0 if self._cogging is None else 4.0 * self._cogging.half_depth_joule / t.inertia_kg_m2
        reach = math.hypot(self._omega_committed, math.sqrt(swing)) + strongest / t.inertia_kg_m2 * CELL_S
        kept = self._winding_of
        if kept is not None and kept[0] is setting and kept[1] is chops and kept[2] >= k * reach:
            return kept[3], kept[4]
        if chops:
            winding, data = chopped(setting, self._resistance, t.inductance_henry)
        else:
            above = k * w.peak_amps - self._mean_nm if self.ripple else 0.0
            below = self._mean_nm - k * w.valley_amps if self.ripple else 0.0
            winding, data = averaged(setting, above, below, 2.0 * k * reach)
        self._winding_of = setting, chops, 2.0 * k * reach, winding, data
        return winding, data
