"""Outer loads, growing stiction and drift: their laws, and what they do to the plant's rotor."""

import math
import random
from dataclasses import replace

import pytest

from sweeprig.errors import ConfigError
from sweeprig.simbench.detailed import DetailedPlant
from sweeprig.simbench.drift import Age, Drift
from sweeprig.simbench.load import RPM, Load
from sweeprig.simbench.motor_truth import DetailedTruth

FAN = DetailedTruth(
    resistance_ohm=11.2,
    inductance_henry=10.5e-3,
    torque_constant_nm_per_a=0.0283,
    inertia_kg_m2=7.6e-6,
    quadratic_load_nm_s2=2.0e-7,
    viscous_friction_nm_s=1.2e-5,
    running_friction_nm=0.2e-3,
    running_friction_spread_percent=0.0,
    breakaway_friction_nm=0.4e-3,
    breakaway_friction_spread_percent=0.0,
    friction_correlation_s=0.2,
    barrier_angle_rad=0.0,
    thermal_resistance_k_per_w=0.0,
    thermal_time_constant_s=240.0,
)
K, R = FAN.torque_constant_nm_per_a, FAN.resistance_ohm


def on(truth: DetailedTruth, duty: float, pwm_hz: float = 25e3) -> DetailedPlant:
    plant = DetailedPlant(truth, 2.0, random.Random(5))
    plant.set_supply(12.0, 10.0, True)
    plant.set_drive(pwm_hz, duty, duty > 0.0)
    return plant


def balance(plant: DetailedPlant, load: float) -> float:
    """Torque left over at the settled speed of a smooth current, Nm: K·(D·12.5 − 0.5 − K·ω)/R less all loads."""
    speed = plant.omega
    drive = K * (plant.duty_percent / 100.0 * 12.5 - 0.5 - K * speed) / R
    return drive - 0.2e-3 - 1.2e-5 * speed - load


def test_curve_is_straight_between_its_corners_and_level_beyond() -> None:
    """Torque and slope of a load curve at corners, between and beyond them (straight lines, by hand)."""
    load = Load(curve_rpm=(0.0, 1000.0, 2000.0), curve_nm=(0.0, 2e-3, 1e-3))
    for rpm, torque, slope in ((-50.0, 0.0, 0.0), (250.0, 0.5e-3, 2e-6), (1500.0, 1.5e-3, -1e-6), (2600.0, 1e-3, 0.0)):
        found = load.against(rpm / RPM, 0.0, 0.0)
        assert found == pytest.approx((torque, slope * RPM), rel=1e-12, abs=1e-18)


@pytest.mark.parametrize(("x", "y"), [((0.0,), (1.0,)), ((0.0, 1.0), (1.0,)), ((0.0, 5.0, 5.0), (1.0, 2.0, 3.0))])
def test_a_curve_that_is_none_is_refused(x: tuple[float, ...], y: tuple[float, ...]) -> None:
    """One corner, unpaired corners and speeds that do not rise are refused with what is allowed."""
    with pytest.raises(ConfigError, match="as many torques as speeds, speeds rising"):
        Load(curve_rpm=x, curve_nm=y)


def test_settled_speed_balances_drive_and_load() -> None:
    """With constant load and a curve on top the settled speed balances all torques to 1e-6 of the drive's.

    Independent method: the balance is written out here for a smooth current (25 kHz; its ripple is 1 % of the mean).
    """
    load = Load(constant_nm=1e-3, curve_rpm=(0.0, 3000.0), curve_nm=(0.0, 3e-3))
    plant = on(replace(FAN, load=load), 70.0)
    plant.advance(4.0)
    rpm = plant.omega * RPM
    rest = balance(plant, 2e-7 * plant.omega**2 + 1e-3 + 1e-6 * rpm)
    assert 200.0 < rpm < 2000.0
    assert abs(rest) < 1e-6 * K * 12.0 / R


def test_draught_turns_a_free_fan_backwards_and_hinders_it_forwards() -> None:
    """Undriven it turns backwards at the balance of air and friction; driven it turns forwards against the draught.

    Independent method: both balances written out here, to 1e-4 of the speed.
    """
    plant = on(replace(FAN, load=Load(draught_rpm=900.0)), 0.0)
    d = 900.0 / RPM
    plant.advance(20.0)
    w = -plant.omega
    brake = K * (K * w - 0.5) / R  # turned backwards, the motor feeds its own freewheel diode
    assert brake > 0.1e-3
    assert 2e-7 * (d - w) ** 2 == pytest.approx(0.2e-3 + 1.2e-5 * w + brake, rel=1e-4)
    assert plant.wave().mean_motor_amps == pytest.approx(brake / K, rel=1e-4)
    assert plant.turning
    assert plant.edges == math.floor(plant.angle / math.pi) > 10
    assert plant.position == pytest.approx(-plant.angle, rel=1e-3)
    plant.set_drive(25e3, 60.0, True)
    plant.advance(30.0)
    assert plant.omega > 20.0
    assert abs(balance(plant, 2e-7 * (plant.omega + d) ** 2)) < 1e-6 * K * 12.0 / R
    plant.set_drive(25e3, 60.0, False)
    plant.advance(60.0)
    assert plant.omega == pytest.approx(-w, rel=1e-3)
    assert plant.stops == 2  # once on each way through zero


def test_gusts_wander_about_their_mean() -> None:
    """A gusty draught changes the backward speed from one look to the next; a steady one does not."""
    for spread, least in ((0.0, 0.0), (20.0, 1.0)):
        plant = on(replace(FAN, load=Load(draught_rpm=900.0, draught_spread_percent=spread)), 0.0)
        plant.advance(30.0)
        speeds = []
        for _ in range(20):
            plant.advance(plant.now + 5.0)
            speeds.append(plant.omega)
        assert max(speeds) < 0.0
        spread_found = max(speeds) - min(speeds)
        assert least <= spread_found <= 1e-6 + 100.0 * least


def test_a_weight_pulls_back_when_the_drive_fails() -> None:
    """A constant load above the breakaway friction turns the rotor backwards without drive, one below it does not."""
    falls = on(replace(FAN, load=Load(constant_nm=0.5e-3)), 0.0)
    stays = on(replace(FAN, load=Load(constant_nm=0.3e-3)), 0.0)
    for plant in (falls, stays):
        plant.advance(3.0)
    assert falls.omega < -5.0
    assert (stays.omega, stays.edges) == (0.0, 0)


def test_stiction_grows_with_the_logarithm_of_rest() -> None:
    """10 % per decade from 1 s: factors 1, 1.0301, 1.1041 and 1.2004 after 0, 1, 10 and 100 s; a day at most.

    By hand from b·log10(1 + t/t0) (Dieterich 1972, from memory).
    """
    load = Load(stiction_percent_per_decade=10.0)
    for rested, factor in ((0.0, 1.0), (1.0, 1.030103), (10.0, 1.104139), (100.0, 1.200432)):
        assert load.stiction(rested) == pytest.approx(factor, abs=1e-6)
    assert load.stiction(math.inf) == load.stiction(86_400.0)


def start_duty_after(rest_s: float) -> float:
    """The duty that starts a rotor so long after it stopped, found in steps of 0.1 % on fresh plants."""
    truth = replace(FAN, breakaway_friction_nm=3e-3, load=Load(stiction_percent_per_decade=15.0))
    duty = 10.0
    while True:
        plant = on(truth, 60.0)
        plant.advance(2.0)
        plant.set_drive(25e3, 60.0, False)
        while plant.turning:
            plant.advance(plant.now + 0.1)
        plant.advance(plant.stopped_at + rest_s)
        plant.set_drive(25e3, duty, True)
        if plant.turning:
            return duty
        duty += 0.1


def test_a_longer_rest_asks_for_more_duty_to_start() -> None:
    """After 10 s and 1,000 s of rest the start duties differ by R·ΔT/(K·12.5 V) of the stiction, within 0.2 % duty."""
    grown = 0.15 * (math.log10(1001.0) - math.log10(11.0))
    expected = 100.0 * R * 3e-3 * grown / (K * 12.5)
    assert start_duty_after(1000.0) - start_duty_after(10.0) == pytest.approx(expected, abs=0.2)


def test_drift_laws() -> None:
    """Grease loosens up exponentially while turning and sets at rest; ageing compounds by the hour of turning only."""
    drift = Drift(50.0, 600.0, 2.0, -1.0)
    age = drift.later(Age(), 600.0, turning=True)
    assert drift.grease(age) == pytest.approx(1.0 + 0.5 / math.e, rel=1e-12)
    rested = drift.later(age, 600.0, turning=False)
    assert rested.cold == pytest.approx(1.0 - (1.0 - 1.0 / math.e) / math.e, rel=1e-12)
    assert rested.hours == age.hours == pytest.approx(1.0 / 6.0)
    old = Age(0.0, 3.0)
    assert (drift.friction(old), drift.magnet(old)) == pytest.approx((1.02**3, 0.99**3), rel=1e-12)
    halves = drift.later(drift.later(Age(), 123.0, True), 477.0, True)
    assert halves == pytest.approx(age, rel=1e-12)


def test_cold_grease_makes_it_slow_at_first() -> None:
    """A motor with cold grease runs up by itself as the grease loosens; the speeds balance friction at both ends.

    Independent method: torque balance, running and viscous friction times the grease's factor, to 0.2 % of the drive.
    """
    truth = replace(FAN, running_friction_nm=1.5e-3, drift=Drift(80.0, 120.0))
    plant = on(truth, 50.0)
    speeds = []
    for at in (3.0, 900.0):
        plant.advance(at)
        w, factor = plant.omega, 1.0 + 0.8 * math.exp(-at / 120.0)
        drive = K * (0.5 * 12.5 - 0.5 - K * w) / R
        assert abs(drive - factor * (1.5e-3 + 1.2e-5 * w) - 2e-7 * w * w) < 2e-3 * drive
        speeds.append(w)
    assert speeds[1] > 1.05 * speeds[0]


def test_ageing() -> None:
    """After 15 min of turning at +100 %/h friction and −10 %/h magnet the speed is the aged values', to 1e-3."""
    aged = on(replace(FAN, running_friction_nm=2e-3, drift=Drift(0.0, 600.0, 100.0, -10.0)), 60.0)
    aged.advance(900.0)
    fresh = replace(FAN, running_friction_nm=2e-3 * 2.0**0.25, torque_constant_nm_per_a=K * 0.9**0.25)
    new = on(fresh, 60.0)
    new.advance(5.0)
    assert aged.omega == pytest.approx(new.omega, rel=1e-3)
    assert new.omega != pytest.approx(on_and_settled(replace(FAN, running_friction_nm=2e-3)), rel=0.01)


def on_and_settled(truth: DetailedTruth) -> float:
    plant = on(truth, 60.0)
    plant.advance(5.0)
    return plant.omega
