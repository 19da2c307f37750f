"""The simulated fan with a control input against the published specification of 4-wire fans.

Source of every figure: "4-Wire Pulse Width Modulation (PWM) Controlled Fans Specification" (Intel), pages read;
checks 10.1 to 10.6, sureness V (certified: published and read). The fan is the shipped one, as types A, B and C.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from sweeprig.job import load, shipped
from sweeprig.job.simulated_models import SimulatedControlInput
from sweeprig.simbench.kinds.choose import other_kind
from sweeprig.simbench.kinds.control_input import INPUT_HZ, ControlInputFan

STEADY_AMPS, SPIKE_AMPS, SPIKE_S = 1.5, 2.2, 1.0  # 2.1.1, 2.1.2: at 12.6 V
PULSES_PER_REVOLUTION = 2  # 2.1.3
TARGET_HZ, LOWEST_HZ, HIGHEST_HZ = 25e3, 21e3, 28e3  # 2.3.1
MINIMUM_RPM_PERCENT, START_RPM_PERCENT, START_S = 30.0, 30.0, 2.0  # 3.2
SPEED_TOLERANCE_PERCENT = 10.0  # 3.3
DUTIES = (100.0, 90.0, 75.0, 60.0, 45.0, 30.0, 25.0, 20.0)


def fan(kind: str = "A", volts: float = 12.0, duty: float = 0.0, hz: float = TARGET_HZ) -> ControlInputFan:
    """The shipped fan as of a type, its input at a duty before the supply comes."""
    motor = load(shipped("four-wire")).motor
    true = motor.simulated
    assert isinstance(true, SimulatedControlInput)
    values = true.model_copy(update={"below_minimum": kind, "fail_percent": 9.0, "spread_percent": 0.5})
    made = other_kind(motor.model_copy(update={"simulated": values}), np.random.default_rng(8), 0.0)
    assert isinstance(made, ControlInputFan)
    made.set_drive(hz, duty, True)
    made.set_supply(volts, 3.0, True)
    return made


def rpm_at(machine: ControlInputFan, duty: float, hz: float = TARGET_HZ, on: bool = True) -> float:
    """Mean speed over 5 s, after 15 s at a duty."""
    machine.set_drive(hz, duty, on)
    machine.advance(machine.now + 15.0)
    angle = machine.angle
    machine.advance(machine.now + 5.0)
    return (machine.angle - angle) / 5.0 * 30.0 / np.pi


def full_rpm() -> float:
    return rpm_at(fan(), 100.0)


def test_current_stays_within_the_supply_section() -> None:
    """10.1: steady at most 1.5 A at 12.6 V; the start-up spike at most 2.2 A and over within 1.0 s."""
    machine = fan(volts=12.6, duty=100.0)
    drawn = []
    for step in range(1, 101):
        before = machine.supply_amp_seconds
        machine.advance(step * 0.05)
        drawn.append((machine.supply_amp_seconds - before) / 0.05)
    assert max(drawn) <= SPIKE_AMPS
    assert max(drawn) > 2.0 * drawn[-1]
    assert all(amps <= STEADY_AMPS for amps in drawn[int(SPIKE_S / 0.05) :])


def test_two_pulses_a_revolution() -> None:
    """10.2: the tachometer gives two pulses per revolution; without supply its open collector gives none."""
    machine = fan(duty=100.0)
    machine.advance(10.0)
    edges, angle = machine.edges, machine.angle
    machine.advance(20.0)
    assert machine.edges - edges == pytest.approx(
        (machine.angle - angle) / (2.0 * np.pi) * PULSES_PER_REVOLUTION, abs=1
    )
    machine.set_supply(12.0, 3.0, False)
    edges = machine.edges
    machine.advance(20.5)
    assert machine.omega > 50.0
    assert machine.edges == edges


def test_frequencies_at_the_input() -> None:
    """10.3: 25 kHz is the target, 21 to 28 kHz are accepted, and the logic is not inverted."""
    assert (LOWEST_HZ, HIGHEST_HZ) == INPUT_HZ
    half = rpm_at(fan(), 50.0)
    for hz in (LOWEST_HZ, HIGHEST_HZ):
        assert rpm_at(fan(), 50.0, hz) == pytest.approx(half, rel=0.01)
    assert rpm_at(fan(), 80.0) > half > rpm_at(fan(), 30.0)


@pytest.mark.parametrize("kind", ["A", "B", "C"])
def test_starts_and_runs_at_minimum_speed(kind: str) -> None:
    """10.4: minimum speed is at most 30 % of full speed, and it starts there from rest, by a pulse of ≤ 30 % in 2 s."""
    machine, full = fan(kind, duty=20.0), full_rpm()
    fastest = [0.0, 0.0]  # while starting, and from two and a half seconds (five time constants) after the pulse on
    while machine.now < 10.0:
        machine.advance(machine.now + 0.02)
        late = int(machine.now > START_S + 2.5)
        fastest[late] = max(fastest[late], machine.omega * 30.0 / np.pi)
    assert machine.turning
    assert fastest[0] <= 1.02 * START_RPM_PERCENT / 100.0 * full
    assert fastest[1] <= 1.02 * MINIMUM_RPM_PERCENT / 100.0 * full


def test_speed_follows_duty() -> None:
    """10.5: from the minimum up speed rises with duty, and its percentage lies within ±10 % of the duty's."""
    machine = fan(duty=100.0)
    speeds = [rpm_at(machine, duty) for duty in DUTIES]
    assert all(slower < faster for faster, slower in itertools.pairwise(speeds))
    for duty, speed in zip(DUTIES, speeds, strict=True):
        assert abs(100.0 * speed / speeds[0] - duty) <= SPEED_TOLERANCE_PERCENT


@pytest.mark.parametrize("kind", ["A", "B", "C"])
def test_no_signal_is_full_speed(kind: str) -> None:
    """10.5: with the input open it runs at full speed; only the supply stops it."""
    machine = fan(kind)
    assert rpm_at(machine, 0.0, on=False) == pytest.approx(full_rpm(), rel=0.01)
    machine.set_supply(12.0, 3.0, False)
    machine.advance(machine.now + 30.0)
    assert machine.omega == 0.0


def test_below_the_minimum() -> None:
    """10.6: A stays at minimum speed; B too, and is off at 0 %; C stops; none is ever above minimum speed there."""
    slowest = rpm_at(fan("A", duty=20.0), 20.0)
    found = {}
    for kind in ("A", "B", "C"):
        machine = fan(kind, duty=20.0)
        machine.advance(10.0)
        found[kind] = [rpm_at(machine, duty) for duty in (15.0, 10.0, 5.0, 0.0)]
    assert max(max(speeds) for speeds in found.values()) < 1.02 * slowest
    assert found["A"] == pytest.approx([slowest] * 4, rel=0.02)
    assert found["B"][:3] == pytest.approx([slowest] * 3, rel=0.02)
    assert found["B"][3] == 0.0
    assert found["C"][2:] == [0.0, 0.0]
    assert 0.0 < found["C"][1] < found["C"][0]
