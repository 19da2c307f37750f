"""The simulated motor against published motor examples and an independent linear-systems library.

The mechanics alone: friction without spread, full duty or smooth current.
"""

import math
import random

import numpy as np
import pytest
from scipy import signal

from sweeprig.simbench.chopper import chopper, wave
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.rotor import after, motion


def steady_motor(
    resistance: float, inductance: float, constant: float, inertia: float, friction: float, viscous: float = 0.0
) -> MotorTruth:
    """A motor whose friction does not wander and that no rough spot catches; it does not heat."""
    return MotorTruth(
        resistance_ohm=resistance,
        inductance_henry=inductance,
        torque_constant_nm_per_a=constant,
        inertia_kg_m2=inertia,
        quadratic_load_nm_s2=0.0,
        viscous_friction_nm_s=viscous,
        running_friction_nm=friction,
        running_friction_spread_percent=0.0,
        breakaway_friction_nm=friction,
        breakaway_friction_spread_percent=0.0,
        friction_correlation_s=1.0,
        barrier_angle_rad=0.0,
        thermal_resistance_k_per_w=0.0,
        thermal_time_constant_s=1.0,
    )


def settled(motor: MotorTruth, volts: float, seconds: float) -> Plant:
    plant = Plant(motor, 1.0, random.Random(1))
    plant.set_supply(volts, 1e3, True)
    plant.set_drive(1000.0, 100.0, True)
    plant.advance(seconds)
    return plant


def test_ctms_motor_speed() -> None:
    """The Control Tutorials' motor at 1 V settles at the published 0.1 rad/s, 0.0999001 to more digits.

    Univ. of Michigan et al., "DC Motor Speed: System Analysis": published and recomputed with control and scipy.
    """
    plant = settled(steady_motor(1.0, 0.5, 0.01, 0.01, 0.0, viscous=0.1), 1.0, 10.0)
    assert plant.omega == pytest.approx(0.1, abs=5e-4)
    assert plant.omega == pytest.approx(0.0999001, abs=5e-8)


def test_run_up_against_the_full_transfer_function() -> None:
    """A small fan's run-up at full duty follows K/((Js+b)(Ls+R)+K²), which the averaged mechanics only lacks L of.

    Independent method: scipy.signal.step of the CTMS form (checked there against the published settling time 2.07 s).
    Leaving out L delays nothing by more than L/R = 1 ms of a 75 ms rise: 1.5 % of the final speed.
    """
    ctms = ([0.01], [0.005, 0.06, 0.1001])
    times, reply = signal.step(ctms, T=np.linspace(0.0, 5.0, 5001))
    outside = times[np.abs(reply - 0.0999001) > 0.02 * 0.0999001]
    assert float(outside[-1]) == pytest.approx(2.0652, abs=0.002)
    r, inductance, k, j, b = 12.0, 12e-3, 0.03, 6e-6, 5e-6
    full = ([12.0 * k], [j * inductance, j * r + b * inductance, b * r + k * k])
    times, reply = signal.step(full, T=np.linspace(0.0, 0.6, 61))
    motor = steady_motor(r, inductance, k, j, 0.0, viscous=b)
    plant = Plant(motor, 1.0, random.Random(1))
    plant.set_supply(12.0, 10.0, True)
    plant.set_drive(1000.0, 100.0, True)
    speeds = []
    for at in times:
        plant.advance(float(at))
        speeds.append(plant.omega)
    assert np.max(np.abs(np.array(speeds) - reply)) < 0.015 * reply[-1]
    assert speeds[-1] == pytest.approx(reply[-1], rel=1e-3)


def test_maxon_data_sheet() -> None:
    """No-load speed, nominal speed and current, locked-rotor torque and current of a maxon DCX 22 L (9 V) data sheet.

    Published: 12300 rpm; 11400 rpm and 4 A at 27 mN·m; 371 mN·m and 53.4 A (as copied in a public repository), and
    12303, 11403 rpm, 4.003 A recomputed from its constants. The sheet agrees with itself to 0.4 %.
    """
    r, k, i0, j = 0.168, 6.95e-3, 0.118, 9.37e-7
    idle = settled(steady_motor(r, 1e-5, k, j, k * i0), 9.0, 2.0)
    assert idle.omega * 30.0 / math.pi == pytest.approx(12300.0, rel=4e-3)
    assert idle.omega * 30.0 / math.pi == pytest.approx((9.0 - r * i0) / k * 30.0 / math.pi, rel=1e-6)
    loaded = settled(steady_motor(r, 1e-5, k, j, k * i0 + 27e-3), 9.0, 2.0)
    assert loaded.omega * 30.0 / math.pi == pytest.approx(11400.0, rel=4e-3)
    assert loaded.wave().mean_motor_amps == pytest.approx(4.0, rel=4e-3)
    locked = wave(chopper(9.0, r, 1e-5, 1000.0, 100.0), 0.0)
    assert locked.mean_motor_amps == pytest.approx(53.4, rel=4e-3)
    assert locked.peak_amps * k == pytest.approx(0.371, rel=4e-3)


def test_maxon_mechanical_time_constant() -> None:
    """The step of the rotor uses the mechanical time constant J·R/kM² = 3.26 ms of that sheet's motor.

    Computed from the published constants (independent arithmetic); the linear case is exact at any step.
    """
    motor = steady_motor(0.168, 1e-5, 6.95e-3, 9.37e-7, 0.0)
    start = motion(motor, chopper(9.0, 0.168, 1e-5, 1000.0, 100.0), 0.0, 0.0)
    assert -1.0 / start.rate == pytest.approx(3.2590e-3, rel=1e-4)
    speed, _ = after(start, 3.2590e-3)
    assert speed == pytest.approx((1.0 - math.exp(-1.0)) * 9.0 / 6.95e-3, rel=1e-4)


def test_ctms_motor_position() -> None:
    """The Control Tutorials' positioning motor: pole at 59.226 1/s and 35.8268 rad/s per volt.

    Inputs from memory (CTMS "DC Motor Position"), values recomputed from K/(bR + K²) and the exact poles; the averaged
    mechanics leaves L out, which moves this pole by less than 1e-4.
    """
    motor = steady_motor(4.0, 2.75e-6, 0.0274, 3.2284e-6, 0.0, viscous=3.5077e-6)
    start = motion(motor, chopper(1.0, 4.0, 2.75e-6, 1000.0, 100.0), 0.0, 0.0)
    assert -start.rate == pytest.approx(59.2260, rel=1e-4)
    assert settled(motor, 1.0, 2.0).omega == pytest.approx(35.8268, rel=1e-5)


def test_gate_2020_motor() -> None:
    """A motor of gain 2 and time constant 0.5 s reaches 6.32 rad/s at 0.5 s of a 5 V step and settles at 10 rad/s.

    Certified: GATE 2020 EE Q34, published figures, recomputed 10·(1 − 1/e) = 6.3212. K = 0.4, R = 1, b = 0.04, J = 0.1.
    """
    motor = steady_motor(1.0, 1e-6, 0.4, 0.1, 0.0, viscous=0.04)
    assert settled(motor, 5.0, 0.5).omega == pytest.approx(6.32, abs=5e-3)
    assert settled(motor, 5.0, 0.5).omega == pytest.approx(6.3212, abs=1e-4)
    assert settled(motor, 5.0, 10.0).omega == pytest.approx(10.0, rel=1e-6)


@pytest.mark.parametrize(("line_amps", "rpm"), [(100.0, 1173.0), (200.0, 1144.0), (300.0, 1115.0)])
def test_chapman_shunt_motor(line_amps: float, rpm: float) -> None:
    """Chapman's 250 V, 1200 rpm shunt motor turns at 1173, 1144 and 1115 rpm for 100, 200 and 300 A from the line.

    From memory (Electric Machinery Fundamentals, Ex. 9-1), recomputed; 5 A of the line current go to the field.
    """
    k = 250.0 / (1200.0 / 30.0 * math.pi)
    loaded = settled(steady_motor(0.06, 1e-4, k, 1.0, k * (line_amps - 5.0)), 250.0, 20.0)
    assert loaded.omega * 30.0 / math.pi == pytest.approx(rpm, abs=0.6)


def test_nise_motor_constants() -> None:
    """Nise's motor with Kt/Ra = 5, Kb = 2, J = 12, D = 10 has the transfer function 0.417/(s(s + 1.667)).

    From memory (Control Systems Engineering, Ex. 2.23), recomputed 0.41667 and 1.66667: K = 2, R = 0.4.
    """
    motor = steady_motor(0.4, 1e-6, 2.0, 12.0, 0.0, viscous=10.0)
    start = motion(motor, chopper(1.0, 0.4, 1e-6, 1000.0, 100.0), 0.0, 0.0)
    assert (start.acceleration, -start.rate) == pytest.approx((0.417, 1.667), abs=5e-4)
    assert (start.acceleration, -start.rate) == pytest.approx((0.41667, 1.66667), abs=5e-6)


def test_bimbhra_speed_range() -> None:
    """A 220 V motor at 30 A through 0.5 ohm, 0.1 V per rpm, turns at 2050 rpm at full duty.

    Certified: Bimbhra, Power Electronics, Ex. 7.27, published and recomputed.
    """
    k = 0.1 * 30.0 / math.pi
    loaded = settled(steady_motor(0.5, 1e-4, k, 0.1, k * 30.0), 220.0, 20.0)
    assert loaded.omega * 30.0 / math.pi == pytest.approx(2050.0, rel=1e-6)
