"""The simulated tachometer that sends a line by itself after each gate: counted or reciprocal, with the faults of its
sensor: edges missed, edges doubled, or the PWM taken for the rotor.

The board's tachometer is counter.py.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from sweeprig.errors import ConfigError
from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

BITS_A_BYTE = 10
BAUD = 115_200
GATE_S = 0.25
KEPT_S = 2.0
"""So much of its stream is kept for a client that does not read; later lines are lost, as on a full buffer."""
CLOCK_HZ = 1e6


class LineTachometer(Instrument):
    """Sends `n 1234.5 1/min` after each gate, and `n 0.0 1/min` for a gate without a pulse; answers `*IDN?` besides.

    Error keys, of its `[simulated.NAME]` table:
    gate_s                  the gate, s
    pulses_per_revolution   what it has been told; the shaft's speed is pulses over this
    counted                 1: it counts pulses in the gate (±1 count); 0: it times whole intervals (reciprocal)
    missed_percent          share of the pulses that the sensor does not see
    doubled_percent         share of the pulses that it sees twice
    locks_below_hz          where the PWM is slower than this and on, it counts the PWM in place of the rotor
    """

    model = "tachometer"
    quantities = ("speed",)
    error_keys = (
        "gate_s", "pulses_per_revolution", "counted", "missed_percent", "doubled_percent", "locks_below_hz",
    )  # fmt: skip
    byte_s = BITS_A_BYTE / BAUD
    has_panel = False

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        self._scale = draw_scale_error(setup, "speed")
        self._gate_s = setup.error("gate_s", GATE_S)
        self._rpm_per_hz = 60.0 / setup.error("pulses_per_revolution", 2.0)
        self._counted = setup.error("counted", 0.0) > 0.0
        self._missed = setup.error("missed_percent", 0.0) / 100.0
        self._doubled = setup.error("doubled_percent", 0.0) / 100.0
        self._locks_below_hz = setup.error("locks_below_hz", 0.0)
        self._check()
        plant = bench.plant_now()
        self._edges, self._last_edge_at = plant.edges, -math.inf
        self._generation = 0
        self._next_gate()

    def _check(self) -> None:
        sane = self._gate_s >= 0.01 and self._rpm_per_hz > 0.0
        if not (sane and 0.0 <= self._missed <= 1.0 and 0.0 <= self._doubled <= 1.0):
            raise ConfigError(
                f"the simulated tachometer {self.name} cannot be so",
                value=", ".join(f"{key} {value:g}" for key, value in self.setup.errors.items()),
                allowed="gate_s from 0.01, pulses_per_revolution above 0, shares 0 to 100 percent",
                remedy=f"Correct the table [simulated.{self.name}] of the rig file",
                topic="simbench",
            )

    def power_on(self) -> None:
        super().power_on()
        self._generation += 1
        self._next_gate()

    def _next_gate(self) -> None:
        self._began = self.bench.now
        self.bench.at(self.bench.now + self._gate_s, self._gate_end, self._generation)

    def _gate_end(self, generation: object) -> None:
        if generation != self._generation:
            return
        speed = self._pulse_hz() * self._rpm_per_hz * self._scale.gain
        if speed > 0.0:
            speed += self._scale.offset
        if self.port.next_ready() > self.bench.now - KEPT_S:
            self.port.send(f"n {speed:.1f} 1/min")
        self._next_gate()

    def _pulse_hz(self) -> float:
        """The pulse rate that this gate shows."""
        bench = self.bench
        plant = bench.plant_now()
        edges, last = plant.edges, plant.last_edge_at
        new, before = edges - self._edges, self._last_edge_at
        self._edges = edges
        self._last_edge_at = last if new else before
        signal = bench.signal
        if signal.has_edges and signal.pwm_hz < self._locks_below_hz:
            first = math.ceil(self._began * signal.pwm_hz)
            return (math.ceil(bench.now * signal.pwm_hz) - first) / self._gate_s
        seen = self._seen(new)
        if self._counted:
            return seen / self._gate_s
        if not seen or before == -math.inf:
            return 0.0
        ticks = max(1, round((last - before) * CLOCK_HZ))
        return seen / ticks * CLOCK_HZ

    def _seen(self, edges: int) -> int:
        """How many pulses the sensor makes of so many edges."""
        if self._missed == 0.0 and self._doubled == 0.0:
            return edges
        chance = self.setup.noise.random
        seen = 0
        for _ in range(edges):
            if chance() >= self._missed:
                seen += 2 if chance() < self._doubled else 1
        return seen
