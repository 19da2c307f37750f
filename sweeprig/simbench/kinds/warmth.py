"""Temperatures of fans with electronics: winding and case as two bodies, fed by losses that change in steps.

The law is `heat`'s; what the losses are is each kind's. No speed, no current here.
"""

from __future__ import annotations

from dataclasses import replace

from sweeprig.simbench.heat import REFERENCE_DEGC, TwoBodies, copper_factor, magnet_factor


class Warmth:
    """Winding and case in time. Without bodies both stay at 20 degC and change nothing."""

    def __init__(self, bodies: TwoBodies | None, now: float) -> None:
        self._bodies = self._warmed = bodies
        self.ambient_degc = REFERENCE_DEGC if bodies is None else bodies.ambient_degc
        self._degc = (self.ambient_degc, self.ambient_degc)
        self._since, self._watts = now, 0.0

    @property
    def counts(self) -> bool:
        """There are bodies to warm."""
        return self._bodies is not None

    def at(self, when: float) -> tuple[float, float]:
        """(winding, case) in degC at a run clock not before the last `renew`; exact for the losses since."""
        if self._warmed is None:
            return self._degc
        return self._warmed.after(*self._degc, self._watts, when - self._since)

    def renew(self, when: float, winding_watts: float, case_watts: float) -> None:
        """From `when` on these losses, W. What warms the case itself acts like warmer air: by its resistance to it."""
        if self._bodies is None:
            return
        self._degc, self._since, self._watts = self.at(when), when, winding_watts
        more = case_watts * self._bodies.case_ambient_k_per_w
        self._warmed = replace(self._bodies, ambient_degc=self.ambient_degc + more)

    @property
    def copper(self) -> float:
        """Winding resistance over that at 20 degC, as of the last `renew`."""
        return 1.0 if self._bodies is None else copper_factor(self._degc[0])

    @property
    def magnet(self) -> float:
        """Torque constant over that at 20 degC, as of the last `renew`."""
        bodies = self._bodies
        return 1.0 if bodies is None else magnet_factor(self._degc[1], bodies.magnet_percent_per_k)


class Warming:
    """What a machine with a `Warmth` tells a thermometer."""

    now: float
    _warmth: Warmth

    @property
    def winding_degc(self) -> float:
        """Winding temperature, degC; 20 without a heat table, as the case."""
        return self._warmth.at(self.now)[0]

    @property
    def case_degc(self) -> float:
        """Case temperature, degC."""
        return self._warmth.at(self.now)[1]

    @property
    def ambient_degc(self) -> float:
        return self._warmth.ambient_degc
