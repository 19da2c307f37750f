"""What changes over a night of running: grease that loosens up, friction that ages, a magnet that fades.

A state that time carries on, and the factors that follow from it; what they multiply is the plant's business.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple


@dataclass(frozen=True, slots=True)
class Drift:
    """Percent and hours of turning; rest does not age.

    cold_grease_percent       how much more running and viscous friction cold grease asks for
    grease_time_constant_s    it loosens up while turning, and sets again at rest, with this time constant
    friction_percent_per_hour running and breakaway friction, compound; magnet_percent_per_hour likewise
    """

    cold_grease_percent: float = 0.0
    grease_time_constant_s: float = 600.0
    friction_percent_per_hour: float = 0.0
    magnet_percent_per_hour: float = 0.0

    def grease(self, age: Age) -> float:
        """Factor on running and viscous friction."""
        return 1.0 + self.cold_grease_percent / 100.0 * age.cold

    def friction(self, age: Age) -> float:
        """Factor on running and breakaway friction."""
        return math.exp(math.log1p(self.friction_percent_per_hour / 100.0) * age.hours)

    def magnet(self, age: Age) -> float:
        """Factor on the torque constant."""
        return math.exp(math.log1p(self.magnet_percent_per_hour / 100.0) * age.hours)

    def later(self, age: Age, seconds: float, turning: bool) -> Age:
        """The age after `seconds` of turning or rest, exact for any step."""
        fade = math.exp(-seconds / self.grease_time_constant_s)
        if turning:
            return Age(age.cold * fade, age.hours + seconds / 3600.0)
        return Age(1.0 - (1.0 - age.cold) * fade, age.hours)


class Age(NamedTuple):
    """cold: 1 for grease as it stood overnight, 0 for grease run loose; hours turned since the begin."""

    cold: float = 1.0
    hours: float = 0.0
