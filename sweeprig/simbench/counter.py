"""The board's timer: how frequency and duty become whole ticks, and reciprocal counting of the tachometer.

After drivers/firmware/README.md. No messages here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

CRYSTAL_HZ = 16_000_000
PWM_HZ = (4.0, 100_000.0)
GATE_S = (0.01, 10.0)
WATCH_S = 0.005
"""How often the first edge after switching on is looked for; a later edge of the same look is as good a start."""
LOOKS_AT_REST = 4
"""… and a rotor at rest only every so many looks: it must start before it can make an edge."""


@dataclass(frozen=True, slots=True)
class TimerSetting:
    """What the timer really does: whole ticks of the crystal over the prescaler."""

    prescaler: int
    period_ticks: int
    on_ticks: int

    @property
    def clock_hz(self) -> int:
        return CRYSTAL_HZ // self.prescaler

    @property
    def pwm_hz(self) -> float:
        return CRYSTAL_HZ / self.prescaler / self.period_ticks

    @property
    def duty_percent(self) -> float:
        return 100.0 * self.on_ticks / self.period_ticks


def quantise(pwm_hz: float, duty_percent: float) -> TimerSetting:
    """The nearest setting: prescaler 1 above 244.2 Hz, 8 above 30.52 Hz, 64 below."""
    prescaler = 1 if pwm_hz > 244.2 else 8 if pwm_hz > 30.52 else 64
    period = round(CRYSTAL_HZ / prescaler / pwm_hz)
    return TimerSetting(prescaler, period, round(period * duty_percent / 100.0))


class GateCounter:
    """Gates back to back. In each: whole intervals between edges, and the ticks they took.

    gain  the crystal's own error: true ticks a second over nominal ones
    """

    def __init__(self, bench: Bench, gain: float) -> None:
        self._bench = bench
        self._gain = gain
        self._powered_at = bench.now
        self._generation = 0
        self._reference: tuple[float, int] | None = None
        self._edges_at_start = 0
        self.number = 0
        self.edges = 0
        self.ticks = 0
        self.clock_hz = CRYSTAL_HZ
        self.gate_s = 0.25
        self.running = False

    def tick(self, time: float) -> int:
        """The free-running counter's value at a bench time, s."""
        return math.floor((time - self._powered_at) * self.clock_hz * self._gain)

    def start(self, forget: bool, watch: bool) -> None:
        """A gate begins now; a running one is dropped. `forget`: edges before now are no start of an interval."""
        plant = self._bench.plant_now()
        self._generation += 1
        self.running = True
        if forget:
            self._reference = None
            self._edges_at_start = plant.edges
        self._bench.at(self._gate_ends(self._bench.now), self._gate_end, self._generation)
        if watch and self._reference is None:
            self._bench.at(self._bench.now + WATCH_S, self._look_for_first_edge, self._generation)

    def stop(self) -> None:
        self._generation += 1
        self.running = False

    def set_clock(self, clock_hz: int) -> bool:
        """Another prescaler; True when that changed the clock and the intervals must begin anew."""
        changed, self.clock_hz = clock_hz != self.clock_hz, clock_hz
        return changed

    def power_on(self) -> None:
        self.stop()
        self._powered_at = self._bench.now
        self._reference = None
        self.number = self.edges = self.ticks = 0

    def ticks_since_last_edge(self) -> int:
        """As of now; since power-on while no edge came."""
        last = max(self._bench.plant_now().last_edge_at, self._powered_at)
        return self.tick(self._bench.now) - self.tick(last)

    def _gate_ends(self, begin: float) -> float:
        return begin + round(self.gate_s * self.clock_hz) / (self.clock_hz * self._gain)

    def _look_for_first_edge(self, generation: object) -> None:
        if generation != self._generation or self._reference is not None:
            return
        plant = self._bench.plant_now()
        if plant.edges != self._edges_at_start:
            self._reference = (plant.last_edge_at, plant.edges)
            return
        due = self._bench.now + WATCH_S
        if not getattr(plant, "turning", True):
            for _ in range(LOOKS_AT_REST - 1):  # step by step: the looks stay where they would be
                due += WATCH_S
        self._bench.at(due, self._look_for_first_edge, generation)

    def _gate_end(self, generation: object) -> None:
        if generation != self._generation:
            return
        plant = self._bench.plant_now()
        self.number += 1
        self.edges = self.ticks = 0
        if self._reference is None:
            if plant.edges != self._edges_at_start:
                self._reference = (plant.last_edge_at, plant.edges)
        elif plant.edges != self._reference[1]:
            begin, before = self._reference
            self.edges = plant.edges - before
            self.ticks = self.tick(plant.last_edge_at) - self.tick(begin)
            self._reference = (plant.last_edge_at, plant.edges)
        self._bench.at(self._gate_ends(self._bench.now), self._gate_end, generation)
