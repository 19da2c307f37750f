"""A tachometer that may come loose from its shaft: it coasts to a stop, or stands still at once, and catches again.

Edges only; whose shaft it is and why it came loose is not known here.
"""

from __future__ import annotations

import math
from typing import Any


class LooseTach:
    """What the counter sees. `machine` has `now`, `edges`, `last_edge_at`, and `omega` (rad/s) if it coasts."""

    def __init__(self, machine: Any, pulses_per_revolution: float) -> None:
        self._machine = machine
        self._pulses_per_rad = pulses_per_revolution / (2.0 * math.pi)
        self._missed = 0
        self._loose_at: float | None = None
        self._kept = (0, -math.inf)
        self._caught_at = 0
        self._pulse_hz = self._tau_s = 0.0

    def let_go(self, coast_tau_s: float) -> None:
        """Loose from now on: its speed falls as e^(−t/τ), τ in s; 0: no edge any more."""
        self._kept = (self.edges, self.last_edge_at)
        self._loose_at = float(self._machine.now)
        self._tau_s = coast_tau_s
        self._pulse_hz = float(getattr(self._machine, "omega", 0.0)) * self._pulses_per_rad

    def follow(self) -> None:
        """On the shaft again from now on."""
        self._kept = (self.edges, self.last_edge_at)
        self._loose_at = None
        self._caught_at = int(self._machine.edges)
        self._missed = self._caught_at - self._kept[0]

    @property
    def edges(self) -> int:
        """So far."""
        if self._loose_at is None:
            return int(self._machine.edges) - self._missed
        return self._kept[0] + self._coasted()

    @property
    def last_edge_at(self) -> float:
        """When the last one came (bench time, s)."""
        if self._loose_at is None:
            return float(self._machine.last_edge_at) if self._machine.edges > self._caught_at else self._kept[1]
        whole = self._coasted()
        if whole == 0:
            return self._kept[1]
        return self._loose_at - self._tau_s * math.log1p(-whole / (self._pulse_hz * self._tau_s))

    def _coasted(self) -> int:
        """Whole pulse intervals since it came loose: ∫ f·e^(−t/τ) dt = f·τ·(1 − e^(−t/τ))."""
        if self._tau_s <= 0.0 or self._loose_at is None:
            return 0
        seconds = self._machine.now - self._loose_at
        return int(self._pulse_hz * self._tau_s * -math.expm1(-seconds / self._tau_s))
