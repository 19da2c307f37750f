"""Cogging: a torque that depends on the shaft's angle alone, its energy, and what it does to a mean speed.

Pure functions of plain floats; who resolves it and who averages over it is `detailed`'s business.
"""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Cogging:
    """Torque against forward rotation T(θ) = amplitude·sin(n·θ); detents at whole multiples of 2π/n.

    amplitude_nm        peak torque; steps_per_revolution: detents in one turn
    """

    amplitude_nm: float
    steps_per_revolution: int

    @property
    def half_depth_joule(self) -> float:
        """From the mean of the energy to its crest: amplitude / n."""
        return self.amplitude_nm / self.steps_per_revolution

    def torque(self, angle: float) -> float:
        """Nm against forward rotation at a shaft angle, rad."""
        return self.amplitude_nm * math.sin(self.steps_per_revolution * angle)

    def energy(self, angle: float) -> float:
        """J, zero in the mean over a turn."""
        return -self.half_depth_joule * math.cos(self.steps_per_revolution * angle)

    def depth(self, level: float, inertia: float) -> float:
        """Half depth over the energy ½·J·level²: 1 where a rotor only just passes the crest, more where it is held."""
        energy = 0.5 * inertia * level * level
        return self.half_depth_joule / energy if energy > 0.0 else math.inf

    def level(self, angle: float, speed: float, inertia: float) -> float:
        """The speed (rad/s, magnitude) that the rotor's whole energy would be without cogging; zero if it is held."""
        return math.sqrt(max(0.0, speed * speed + 2.0 * self.energy(angle) / inertia))

    def speed_at(self, angle: float, level: float, inertia: float) -> float:
        """Speed magnitude (rad/s) at an angle; zero where the energy does not reach."""
        return math.sqrt(max(0.0, level * level - 2.0 * self.energy(angle) / inertia))


def means(depth: float) -> tuple[float, float]:
    """(mean over angle, mean over time) of the speed of a rotor that coasts over cogging, each over its level.

    ω(φ) = level·√(1 + depth·cos φ). Over angle: series of the complete elliptic integral of the second kind,
    1 − d²/16 − 15·d⁴/1024 (next term below 2e-6 for d ≤ 0.25). Over time, 1/⟨1/ω⟩: the arithmetic-geometric mean of
    √(1 + d) and √(1 − d) (Gauss). For depth below 1. Torques linear in speed act by the first, edges count the second.
    """
    square = depth * depth
    over_angle = 1.0 - square * (0.0625 + square * 15.0 / 1024.0)
    high, low = math.sqrt(1.0 + depth), math.sqrt(1.0 - depth)
    for _ in range(4):
        high, low = 0.5 * (high + low), math.sqrt(high * low)
    return over_angle, high
