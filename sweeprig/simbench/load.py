"""What stands against the shaft from outside: constant, viscous, quadratic, a curve, a draught; and growing stiction.

Signed torques of signed speeds, pure. Friction that wanders is `friction`'s, cogging is `cogging`'s.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from dataclasses import dataclass

from sweeprig.errors import ConfigError

RPM = 30.0 / math.pi
"""rpm per rad/s."""
FIRST_REST_S = 86_400.0
"""How long a motor has stood before its first start of the night, s (own choice: a day)."""


@dataclass(frozen=True, slots=True)
class Load:
    """Load beside the friction. A torque counts above zero where it hinders forward rotation.

    constant_nm        acts at rest too, and may turn a weakly held rotor backwards (a column of water, a weight)
    draught_rpm        the air in the duct alone would turn a free wheel backwards so fast
    draught_spread_percent   how that wanders, percent of the mean
    draught_correlation_s    time constant of the gusts
    curve_rpm, curve_nm      corners of a further load over speed, straight in between, level beyond: back pressure
    stiction_percent_per_decade   breakaway friction grows so much per decade of rest beyond stiction_from_s (the
                             law of Dieterich 1972, from memory: b·log10(1 + t/t0))
    """

    constant_nm: float = 0.0
    draught_rpm: float = 0.0
    draught_spread_percent: float = 0.0
    draught_correlation_s: float = 5.0
    curve_rpm: tuple[float, ...] = ()
    curve_nm: tuple[float, ...] = ()
    stiction_percent_per_decade: float = 0.0
    stiction_from_s: float = 1.0

    def __post_init__(self) -> None:
        """ConfigError for a curve whose corners do not pair up or do not rise in speed."""
        rising = all(a < b for a, b in zip(self.curve_rpm, self.curve_rpm[1:], strict=False))
        if len(self.curve_rpm) != len(self.curve_nm) or len(self.curve_rpm) == 1 or not rising:
            raise ConfigError(
                "the load curve of the simulated motor is none",
                value=f"{list(self.curve_rpm)} rpm, {list(self.curve_nm)} Nm",
                allowed="two corners or more, as many torques as speeds, speeds rising",
                remedy="Correct curve_rpm and curve_nm in the [simulated.load] table of the motor file",
            )

    @property
    def pushes_at_rest(self) -> bool:
        """It may move a rotor that stands without drive."""
        return self.constant_nm > 0.0 or self.draught_rpm > 0.0 or any(nm > 0.0 for nm in self.curve_nm)

    def against(self, speed: float, viscous: float, quadratic: float, draught: float = 0.0) -> tuple[float, float]:
        """(torque in Nm, its slope by speed) at a speed in rad/s: c·ω + q·(ω + d)·|ω + d| + constant + curve.

        draught   the free wheel's speed in the draught, rad/s backwards, as it blows now
        """
        air = speed + draught
        drag = quadratic * abs(air)
        torque, slope = viscous * speed + drag * air + self.constant_nm, viscous + 2.0 * drag
        if self.curve_rpm:
            more, rise = self._curve(speed)
            return torque + more, slope + rise
        return torque, slope

    def corners(self) -> list[tuple[float, float]]:
        """The curve's corners as (rad/s, Nm)."""
        return [(rpm / RPM, nm) for rpm, nm in zip(self.curve_rpm, self.curve_nm, strict=True)]

    def _curve(self, speed: float) -> tuple[float, float]:
        rpm, x, y = speed * RPM, self.curve_rpm, self.curve_nm
        place = bisect_right(x, rpm)
        if place in (0, len(x)):
            return y[0 if place == 0 else -1], 0.0
        rise = (y[place] - y[place - 1]) / (x[place] - x[place - 1])
        return y[place - 1] + rise * (rpm - x[place - 1]), rise * RPM

    def stiction(self, rested_s: float) -> float:
        """Factor on the breakaway friction after a rest (s)."""
        if self.stiction_percent_per_decade == 0.0:
            return 1.0
        rested = min(rested_s, FIRST_REST_S)
        return 1.0 + self.stiction_percent_per_decade / 100.0 * math.log10(1.0 + rested / self.stiction_from_s)
