"""Two-body heat, copper and magnet: the closed solution, published copper figures, and the plant that warms by it."""

import math
import random

import numpy as np
import pytest
from scipy.linalg import expm

from sweeprig.simbench.chopper import chopper, mean_current
from sweeprig.simbench.detailed import DetailedPlant
from sweeprig.simbench.heat import TwoBodies, copper_factor, copper_temperature, magnet_factor
from sweeprig.simbench.motor_truth import DetailedTruth

BODIES = TwoBodies(
    winding_case_k_per_w=5.0, case_ambient_k_per_w=12.0, winding_j_per_k=9.0, case_j_per_k=55.0, ambient_degc=25.0
)


def motor(heat: TwoBodies | None, breakaway: float = 1.0, resistance: float = 11.2) -> DetailedTruth:
    """A motor that nothing moves."""
    return DetailedTruth(
        resistance_ohm=resistance,
        inductance_henry=10e-3,
        torque_constant_nm_per_a=0.028,
        inertia_kg_m2=7e-6,
        quadratic_load_nm_s2=4e-8,
        viscous_friction_nm_s=1e-5,
        running_friction_nm=0.6e-3,
        running_friction_spread_percent=0.0,
        breakaway_friction_nm=breakaway,
        breakaway_friction_spread_percent=0.0,
        friction_correlation_s=0.2,
        barrier_angle_rad=0.1,
        thermal_resistance_k_per_w=17.0,
        thermal_time_constant_s=240.0,
        heat=heat,
    )


@pytest.mark.parametrize("seed", range(20))
def test_two_bodies_against_the_matrix_exponential(seed: int) -> None:
    """Any two bodies from any temperatures, over any time, agree with scipy's matrix exponential to 1e-8 K.

    Independent method: expm of the 2 × 2 system, with its constant inflow as a third state.
    """
    rng = random.Random(seed)
    r1, r2, c1, c2 = (10.0 ** rng.uniform(-1.0, 2.0) for _ in range(4))
    bodies = TwoBodies(r1, r2, c1, c2, ambient_degc=rng.uniform(-20.0, 40.0))
    watts, seconds = rng.uniform(0.0, 5.0), 10.0 ** rng.uniform(-2.0, 4.0)
    begin = np.array([rng.uniform(0.0, 90.0), rng.uniform(0.0, 90.0), 1.0])
    system = np.array(
        [
            [-1.0 / (r1 * c1), 1.0 / (r1 * c1), watts / c1],
            [1.0 / (r1 * c2), -(1.0 / r1 + 1.0 / r2) / c2, bodies.ambient_degc / (r2 * c2)],
            [0.0, 0.0, 0.0],
        ]
    )
    expected = (expm(system * seconds) @ begin)[:2]
    assert bodies.after(float(begin[0]), float(begin[1]), watts, seconds) == pytest.approx(expected, abs=1e-8)


def test_two_bodies_end_where_the_resistances_say() -> None:
    """After a very long time winding and case stand at ambient plus loss times resistance (Ohm's law of heat)."""
    assert BODIES.after(25.0, 25.0, 3.0, 1e6) == pytest.approx((25.0 + 3.0 * 17.0, 25.0 + 3.0 * 12.0), rel=1e-12)
    assert BODIES.final(3.0) == (76.0, 61.0)


@pytest.mark.parametrize(
    ("cold", "warm", "ratio"), [(20.0, 75.0, 1.21611), (20.0, 130.0, 1.43222), (25.0, 125.0, 1.38536)]
)
def test_published_copper_ratios(cold: float, warm: float, ratio: float) -> None:
    """Copper's resistance ratios 75/20, 130/20 and 125/25 degC, and the temperature found back from them.

    Certified (read on a public engineering page and recomputed): R2/R1 = (234.5 + t2)/(234.5 + t1), five decimals.
    """
    assert copper_factor(warm) / copper_factor(cold) == pytest.approx(ratio, abs=5e-6)
    assert copper_temperature(ratio, 1.0, cold) == pytest.approx(warm, abs=2e-3)


def test_resistance_method_example() -> None:
    """2.00 ohm at 20 degC, 2.60 ohm hot in air of 25 degC: a rise of 71.35 K.

    From memory (the form of IEC 60034-1), recomputed for K = 234.5; with that standard's 235 it would be 71.50 K.
    """
    assert copper_temperature(2.60, 2.00, 20.0) - 25.0 == pytest.approx(71.35, abs=5e-3)


def test_ferrite_loses_a_fifth_of_a_percent_per_kelvin() -> None:
    """60 K above 20 degC the torque constant is 12 % lower (−0.2 %/K: common practice, no source)."""
    assert magnet_factor(80.0, -0.2) == pytest.approx(0.88, rel=1e-12)


def test_locked_rotor_heats_at_the_adiabatic_rate() -> None:
    """A locked winding of 1 g copper at 20 A/mm² warms by 2.0 K/s at first, rho·J²/(c·d).

    Constants from memory: rho = 1/58 ohm·mm²/m, c = 385 J/(kg·K), d = 8960 kg/m³ give 0.0050 K/s per (A/mm²)². The wire
    here has 0.1 mm²; the circuit sets its current to 2 A at 20 degC. Within 2 %: the table's figure has two digits.
    """
    mass, area, density = 1e-3, 0.1e-6, 8960.0
    length = mass / (density * area)
    resistance = length / area / 58e6
    capacity = mass * 385.0
    heat = TwoBodies(1000.0, 1000.0, capacity, 1e4)
    plant = DetailedPlant(motor(heat, 1e3, resistance), 2.0, random.Random(1))
    plant.set_supply(2.0 * resistance, 100.0, True)
    plant.set_drive(25e3, 100.0, True)
    plant.advance(0.5)
    assert (plant.winding_degc - 20.0) / 0.5 == pytest.approx(2.0, rel=0.02)
    assert not plant.turning


def test_plant_warms_as_two_bodies_with_growing_resistance() -> None:
    """A locked rotor's winding and case follow the two bodies' equations with copper's growing resistance, to 0.05 K.

    Independent method: a fine fourth-order integration of both equations at a constant mean voltage (R·I falls as R
    grows), the smooth current of 25 kHz taken from the chopper's mean. The plant renews the loss every 0.5 s.
    """
    plant = DetailedPlant(motor(BODIES), 2.0, random.Random(1))
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(25e3, 60.0, True)

    def slope(state: "np.ndarray[tuple[int], np.dtype[np.float64]]") -> "np.ndarray[tuple[int], np.dtype[np.float64]]":
        r = 11.2 * (234.5 + state[0]) / 254.5
        amps = mean_current(chopper(12.0, float(r), 10e-3, 25e3, 60.0), 0.0)[0]
        across = (state[0] - state[1]) / 5.0
        return np.array([(r * amps * amps - across) / 9.0, (across - (state[1] - 25.0) / 12.0) / 55.0])

    state, step = np.array([25.0, 25.0]), 1.0
    for second in range(1, 1201):
        a = slope(state)
        b = slope(state + 0.5 * step * a)
        c = slope(state + 0.5 * step * b)
        state = state + step * (a + 2.0 * b + 2.0 * c + slope(state + step * c)) / 6.0
        if second in (10, 60, 300, 1200):
            plant.advance(float(second))
            assert (plant.winding_degc, plant.case_degc) == pytest.approx(tuple(state), abs=0.05)
    assert plant.winding_degc > 60.0
    assert plant.ambient_degc == 25.0
    shape = plant.wave()
    assert shape.mean_motor_volts / shape.mean_motor_amps == pytest.approx(
        11.2 * copper_factor(plant.winding_degc), rel=1e-3
    )
    plant.set_drive(25e3, 60.0, False)
    before = plant.winding_degc, plant.case_degc
    plant.advance(1500.0)
    assert (plant.winding_degc, plant.case_degc) == pytest.approx(BODIES.after(*before, 0.0, 300.0), abs=1e-9)


def test_a_warm_magnet_gives_less_torque_and_more_speed() -> None:
    """A motor in air of 70 degC runs at the no-load speed of a magnet 10 % weaker: (V − R·I)/K, within 0.1 %.

    The friction is small and constant, so I = T/K; R and K are those of 70 degC (copper 13.1; magnet −0.2 %/K).
    """
    hot = TwoBodies(0.01, 0.01, 1.0, 1.0, ambient_degc=70.0)
    still = motor(hot, breakaway=0.6e-3)
    plant = DetailedPlant(still, 2.0, random.Random(1))
    plant.set_supply(12.0, 10.0, True)
    plant.set_drive(25e3, 100.0, True)
    plant.advance(5.0)
    k, r = 0.028 * 0.9, 11.2 * copper_factor(70.0)
    speed = 400.0
    for _ in range(200):
        amps = (0.6e-3 + 1e-5 * speed + 4e-8 * speed * speed) / k
        speed = 0.5 * speed + 0.5 * (12.0 - r * amps) / k
    assert plant.omega == pytest.approx(speed, rel=1e-3)
    assert math.isfinite(plant.case_degc)
