"""The plant whose temperatures are those of two bodies, and whose frictions and magnet change with warmth and wear.

How the rotor moves is `plant`'s or `detailed`'s; the laws are those of `heat` and `drift`.
"""

from __future__ import annotations

import random
from dataclasses import replace

import numpy as np

from sweeprig.simbench import heat
from sweeprig.simbench.drift import Age, Drift
from sweeprig.simbench.motor_truth import DetailedTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.stage import Stage


class AgingPlant(Plant):
    """Constructed like `Plant`, with a `DetailedTruth`; `truth` is the motor as it is by now.

    Further properties, for thermometers: `case_degc`, `ambient_degc`.
    """

    def __init__(
        self,
        truth: DetailedTruth,
        pulses_per_revolution: float,
        rng: np.random.Generator | random.Random,
        now: float = 0.0,
        ripple: bool = True,
        stage: Stage | None = None,
    ) -> None:
        self._new = truth
        self._drift = truth.drift or Drift()
        self._ages = truth.drift is not None or truth.heat is not None
        self._age = Age()
        self._case_degc = heat.REFERENCE_DEGC
        super().__init__(truth, pulses_per_revolution, rng, now, ripple, stage)
        if truth.heat is not None:
            self._winding_degc = self._case_degc = truth.heat.ambient_degc
        self._grow_older(0.0)
        self._renew_electric(0.0)

    @property
    def case_degc(self) -> float:
        """Case temperature, degC; without a heat table the case stays at 20 degC."""
        return self._bodies_at(self.now)[1]

    @property
    def ambient_degc(self) -> float:
        return heat.REFERENCE_DEGC if self._new.heat is None else self._new.heat.ambient_degc

    # ---- heat and age --------------------------------------------------------------------------------------------

    def _bodies_at(self, when: float) -> tuple[float, float]:
        """(winding, case) in degC with the loss of the last renewal."""
        if self._new.heat is None:
            return super()._winding_at(when), heat.REFERENCE_DEGC
        return self._new.heat.after(self._winding_degc, self._case_degc, self._heat_watts, when - self._heated_at)

    def _winding_at(self, when: float) -> float:
        return self._bodies_at(when)[0]

    def _heat(self) -> None:
        seconds = self._at - self._heated_at
        self._winding_degc, self._case_degc = self._bodies_at(self._at)
        self._heated_at = self._at
        self._grow_older(seconds)

    def _grow_older(self, seconds: float) -> None:
        """What warmth and wear have made of magnet and frictions by now."""
        if not self._ages:
            return
        self._age = age = self._drift.later(self._age, seconds, self.turning)
        new, grease, friction = self._new, self._drift.grease(age), self._drift.friction(age)
        k = new.torque_constant_nm_per_a * self._drift.magnet(age)
        if new.heat is not None:
            k *= heat.magnet_factor(self._case_degc, new.heat.magnet_percent_per_k)
        self.truth = replace(new, torque_constant_nm_per_a=k, viscous_friction_nm_s=new.viscous_friction_nm_s * grease)
        self._running.rescale(grease * friction)
        self._breakaway.rescale(friction)
