"""The plant on a supply that is not ideal: capacitor, current limit with a response time, no sink, clamp.

The mechanics and the stage are `plant`'s; what the supply's voltage does is `source`'s. Here the two are run together.
"""

from __future__ import annotations

import math
import random

import numpy as np

from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.plant import CELL_S, Plant
from sweeprig.simbench.source import Bus, Source
from sweeprig.simbench.stage import Setting, Stage


class FedPlant(Plant):
    """A plant that commits its state also at the ticks of its supply, while that one's voltage moves.

    Constructed like `Plant`, with the supply as `source`. Further property: `bus_volts`.
    """

    _limits_at_once = False

    def __init__(
        self,
        truth: MotorTruth,
        pulses_per_revolution: float,
        rng: np.random.Generator | random.Random,
        source: Source,
        now: float = 0.0,
        ripple: bool = True,
        stage: Stage | None = None,
    ) -> None:
        self._bus = Bus(source)
        self._tick_until = math.inf
        super().__init__(truth, pulses_per_revolution, rng, now, ripple, stage)

    @property
    def bus_volts(self) -> float:
        """The voltage of the capacitor that feeds the stage, V."""
        drawn = super().supply_amp_seconds - self._sums.supply_as
        return self._bus.volts_after(self.now - self._at, drawn)

    @property
    def supply_limited(self) -> bool:
        return self._bus.limiting

    @property
    def supply_amp_seconds(self) -> float:
        drawn = super().supply_amp_seconds
        return self._bus.supply_amp_seconds(drawn, self.now - self._at, drawn - self._sums.supply_as)

    @property
    def supply_volt_seconds(self) -> float:
        return self._bus.supply_volt_seconds(super().supply_volt_seconds, self.now - self._at)

    def advance(self, to: float) -> None:
        while not self._idle:
            until = min(self._origin + (self._cell + 1) * CELL_S, self._tick_until)
            if until > to:
                break
            super().advance(until)
            if self._tick_until == until:
                self._flow_to(until)
                self._renew()
        super().advance(to)

    @property
    def _rail_volts(self) -> float:
        return self._bus.volts

    def _setting_now(self) -> Setting:
        setting = super()._setting_now()
        emf = self.truth.torque_constant_nm_per_a * self._omega_committed
        edge = self._origin + (self._cell_of(self._at) + 1) * CELL_S
        seconds, volts = self._bus.plan(lambda at: setting.at_volts(at).mean_supply_current(emf), edge - self._at)
        self._tick_until = self._at + seconds
        return setting if volts == setting.supply_volts else setting.at_volts(volts)

    def _settings_changed(self) -> None:
        self._bus.set(self.supply_volts, self.supply_current_limit_amps, self.supply_on)
        super()._settings_changed()

    def _renew_electric(self, omega: float) -> None:
        super()._renew_electric(omega)
        self._idle = self._idle and self._tick_until == math.inf

    def _flow_to(self, until: float) -> None:
        seconds, before = until - self._at, self._sums.supply_as
        super()._flow_to(until)
        self._bus.run(seconds, self._sums.supply_as - before)

    def _enter_next_cell(self) -> None:
        super()._enter_next_cell()
        emf = self.truth.torque_constant_nm_per_a * self._omega_committed
        if not self._bus.holds(self._electric.mean_supply_current(emf)):
            self._renew()

    def _renew(self) -> None:
        self._heat()
        self._renew_electric(self._omega_committed)
