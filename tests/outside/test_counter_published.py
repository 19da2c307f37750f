"""The simulated board's counter against what books say of counters (checks 11.1 to 11.3)."""

from __future__ import annotations

import math
import random

import pytest

from sweeprig.simbench.bench import Bench
from sweeprig.simbench.board import Board
from sweeprig.simbench.chopper import Wave
from sweeprig.simbench.instrument import Setup


class Turning:
    """A rotor whose tachometer gives edges at exactly `pulse_hz`, starting a little after 0."""

    supply_limited = False
    motor_volt_seconds = supply_volt_seconds = supply_amp_seconds = 0.0
    motor_amp_seconds = switch_amp_seconds = node_volt_seconds = 0.0

    def __init__(self, pulse_hz: float, first_at: float) -> None:
        self.now = 0.0
        self._pulse_hz = pulse_hz
        self._first_at = first_at

    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None: ...

    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None: ...

    def advance(self, to: float) -> None:
        self.now = to

    @property
    def edges(self) -> int:
        return max(0, math.floor((self.now - self._first_at) * self._pulse_hz) + 1)

    @property
    def last_edge_at(self) -> float:
        return self._first_at + (self.edges - 1) / self._pulse_hz if self.edges else -math.inf

    def wave(self) -> Wave | None:
        return None

    def pwm_phase_s(self) -> float:
        return 0.0


def gates(pulse_hz: float, first_at: float, pwm_hz: float, gate_s: float, count: int) -> list[tuple[int, int, int]]:
    """(edges, ticks, clock_hz) of `count` gates that follow the first two."""
    rng = random.Random(1)
    bench = Bench(Turning(pulse_hz, first_at))
    board = Board(Setup("board", "SIM1", rng, rng), bench)
    board.port.open()
    for line in (f"SYST:COMM:TIM 0;:SOUR:FREQ {pwm_hz}", f"SENS:FREQ:APER {gate_s}", "OUTP ON"):
        board.port.write(line.encode("ascii") + b"\n")
    bench.advance(0.1)
    bench.advance(bench.now + 2.0 * gate_s)
    seen = []
    for _ in range(count):
        bench.advance(bench.now + gate_s)
        board.port.read()
        board.port.write(b"FETC:COUN?\n")
        bench.advance(bench.now + 0.02)
        _, edges, ticks, clock_hz, _ = (int(field) for field in board.port.read().split(b","))
        bench.advance(bench.now - 0.02)
        seen.append((edges, ticks, clock_hz))
    return seen


@pytest.mark.parametrize("pulse_hz", [21.0, 100.0, 1234.567, 25_000.0])
@pytest.mark.parametrize("first_at", [0.0, 0.00137])
def test_reciprocal_counting_is_good_to_one_clock_tick_whatever_the_frequency(pulse_hz: float, first_at: float) -> None:
    """With a 1 s gate the relative error is at most one tick over the counted time, about 1e-7 at a 10 MHz clock.

    checks 11.1, verified: Instrumentation Reference Book, 3rd ed., p. 482 (±1e-7 for 10 MHz and 1 s, at any
    frequency). The board's clock is 16 MHz; its counted time is one second less at most one pulse interval.
    """
    for edges, ticks, clock_hz in gates(pulse_hz, first_at, 1000.0, 1.0, 3):
        assert clock_hz == 16_000_000
        relative = abs(edges / ticks * clock_hz / pulse_hz - 1.0)
        assert relative <= 1.0 / (clock_hz * (1.0 - 1.0 / pulse_hz)) * 1.01
        assert relative <= 1e-7


@pytest.mark.parametrize(("pulse_hz", "percent"), [(21.0, 100 / 21), (100.0, 1.0), (25_000.0, 0.004)])
def test_counting_edges_alone_is_off_by_up_to_one_count(pulse_hz: float, percent: float) -> None:
    """Edges in 1 s alone resolve 1/n: 4.76 % at 21 Hz, 1 % at 100 Hz, 4e-5 at 25 kHz (checks 11.3, arithmetic).

    The count of each gate lies within one of the true number, so that this bound is reached and never passed.
    """
    for edges, _, _ in gates(pulse_hz + 0.4, 0.0, 1000.0, 1.0, 4):
        assert abs(edges / (pulse_hz + 0.4) - 1.0) <= percent / 100.0


def test_one_count_of_a_two_pulse_tachometer_in_a_second_is_30_rpm() -> None:
    """Why edges alone are no speed: one count is 30 rpm; the reciprocal reading is within 0.001 rpm (checks 11.3)."""
    pulse_hz = 33.3
    for edges, ticks, clock_hz in gates(pulse_hz, 0.0, 1000.0, 1.0, 3):
        true_rpm = pulse_hz / 2.0 * 60.0
        assert abs(edges / 2.0 * 60.0 - true_rpm) <= 30.0
        assert abs(edges / ticks * clock_hz / 2.0 * 60.0 - true_rpm) <= 1e-3
    assert 1 / 2 * 60 == 30


def test_a_period_of_one_second_is_measured_to_a_millionth() -> None:
    """At 1 Hz direct counting may be off by 100 %; the period by a 1 µs clock is 1 000 000 ± 1, 0.0001 %.

    checks 11.2, verified: US Army course MM0462. The board at a PWM of 100 Hz counts 0.5 µs ticks: 2 000 000 ± 1 for
    each interval, so within 0.00005 %.
    """
    for edges, ticks, clock_hz in gates(1.0, 0.3, 100.0, 4.0, 3):
        assert clock_hz == 2_000_000
        assert edges == 4
        assert abs(ticks - edges * 2_000_000) <= 1
