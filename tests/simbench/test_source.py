"""The supply that does not sink: charging, pumping up, current limit, bleeding, and what its terminals show."""

from __future__ import annotations

import math
import random
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from sweeprig.errors import ConfigError
from sweeprig.job import load
from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.build import build
from sweeprig.simbench.fed_plant import FedPlant
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.source import Source

FREE = MotorTruth(
    resistance_ohm=0.1,
    inductance_henry=0.2e-3,
    torque_constant_nm_per_a=0.03,
    inertia_kg_m2=2e-5,
    quadratic_load_nm_s2=0.0,
    viscous_friction_nm_s=0.0,
    running_friction_nm=0.0,
    running_friction_spread_percent=0.0,
    breakaway_friction_nm=0.0,
    breakaway_friction_spread_percent=0.0,
    friction_correlation_s=1.0,
    barrier_angle_rad=0.0,
    thermal_resistance_k_per_w=0.0,
    thermal_time_constant_s=100.0,
)
"""A rotor of 2e-5 kg·m² without friction, its winding of little resistance."""
FAN = replace(FREE, resistance_ohm=11.2, inductance_henry=10.5e-3, viscous_friction_nm_s=1.2e-5, inertia_kg_m2=7.6e-6)
HALF = SwitchedStage("half_bridge", synchronous=True, holds_bus=True)
LOW = SwitchedStage("low_side_diode", holds_bus=True)
NO_BLEEDER = math.inf


def fed(motor: MotorTruth, source: Source, stage: SwitchedStage = HALF, limit: float = 5.0) -> FedPlant:
    plant = FedPlant(motor, 2.0, np.random.default_rng(1), source, stage=stage)
    plant.set_supply(12.0, limit, True)
    plant.advance(0.2)
    return plant


def test_it_charges_at_its_limit() -> None:
    """Switched on, the capacitor rises with limit/capacitance and stays at the set voltage: closed form."""
    plant = FedPlant(FAN, 2.0, np.random.default_rng(1), Source(2200e-6, bleeder_ohms=NO_BLEEDER), stage=LOW)
    plant.set_supply(12.0, 0.5, True)
    plant.advance(0.02)
    assert plant.supply_limited
    assert plant.bus_volts == pytest.approx(0.5 * 0.02 / 2200e-6, rel=1e-9)
    plant.advance(0.1)
    assert plant.bus_volts == 12.0
    assert not plant.supply_limited
    rise = 12.0 * 2200e-6 / 0.5
    assert plant.supply_volt_seconds == pytest.approx(12.0 * (0.1 - 0.5 * rise), rel=1e-6)


@pytest.mark.parametrize(("farad", "volts"), [(470e-6, 66.0), (2200e-6, 32.0)])
def test_a_joule_of_rotor_energy_pumps_it_up(farad: float, volts: float) -> None:
    """1 J (3,000 rpm, 2e-5 kg·m²) lifts 470 uF from 12 V to 66 V and 2,200 uF to 32 V, without losses.

    Bench practice's two figures, rounded there to whole volts; the duty falls so slowly that the losses are about 1 %.
    """
    plant = fed(FREE, Source(farad, bleeder_ohms=NO_BLEEDER))
    rated = 100.0 * math.pi
    duty = 100.0 * 0.03 * rated / 12.0
    plant.set_drive(25e3, duty, True)
    plant.advance(1.0)
    assert plant.omega == pytest.approx(rated, rel=1e-3)
    for step in range(1, 201):
        plant.set_drive(25e3, duty * (1.0 - step / 200), True)
        plant.advance(plant.now + 0.004)
    plant.advance(plant.now + 0.05)
    assert 0.5 * 2e-5 * rated**2 == pytest.approx(1.0, rel=0.02)
    assert plant.omega < 0.01 * rated
    assert plant.bus_volts == pytest.approx(volts, rel=0.02)


def test_pumped_charge_is_what_the_stage_gave_back() -> None:
    """While it is pumped up, capacitance · rise = charge through the switch's shunt, to rounding."""
    plant = fed(FAN, Source(470e-6, bleeder_ohms=NO_BLEEDER))
    plant.set_drive(25e3, 80.0, True)
    plant.advance(2.0)
    plant.set_drive(25e3, 40.0, True)
    given, volts = plant.switch_amp_seconds, plant.bus_volts
    for at in (2.01, 2.02, 2.04):
        plant.advance(at)
        plant.set_drive(25e3, plant.duty_percent - 0.01, True)  # a changed setting commits the state
        assert plant.bus_volts > volts
        assert 470e-6 * (plant.bus_volts - volts) == pytest.approx(given - plant.switch_amp_seconds, rel=1e-9)


@pytest.mark.parametrize(
    ("start_duty", "duty", "limit"), [(80.0, 30.0, 5.0), (0.0, 100.0, 0.35), (80.0, 5.0, 5.0), (20.0, 90.0, 0.2)]
)
def test_against_scipy_on_voltage_and_speed(start_duty: float, duty: float, limit: float) -> None:
    """Capacitor voltage and speed after a step of duty follow their two averaged equations, to 0.3 % of their change.

    Independent method: an ideal synchronous half bridge draws D·I, so C·dV/dt = I_supply − D·I − V/R_b and
    J·dω/dt = K·I − c·ω with I = (D·V − K·ω)/R, by scipy's RK45; ripple at 25 kHz is below 1e-4 of the current.
    """
    source = Source(470e-6)
    plant = fed(FAN, source, limit=limit)
    plant.set_drive(25e3, start_duty, True)
    plant.advance(4.0)
    share, k, r, began = duty / 100.0, FAN.torque_constant_nm_per_a, FAN.resistance_ohm, plant.now

    def slopes(_: float, state: np.ndarray[tuple[int], np.dtype[np.float64]]) -> list[float]:
        volts, speed = float(state[0]), float(state[1])
        amps = (share * volts - k * speed) / r
        drawn = share * amps + volts / source.bleeder_ohms
        at_target = min(max(drawn, 0.0), limit)
        gives = limit if volts < 12.0 - 1e-4 else 0.0 if volts > 12.0 + 1e-4 else at_target
        torque = k * amps - FAN.viscous_friction_nm_s * speed
        return [(gives - drawn) / 470e-6, torque / FAN.inertia_kg_m2]

    first = (plant.bus_volts, plant.omega)
    times = np.array([0.004, 0.012, 0.03, 0.08, 0.2])
    exact = solve_ivp(slopes, (0.0, 0.2), first, t_eval=times, rtol=1e-8, atol=1e-9, max_step=2e-4).y
    plant.set_drive(25e3, duty, True)
    span = float(np.ptp(np.append(exact[1], first[1])))
    for at, volts, speed in zip(times, *exact, strict=True):
        plant.advance(began + float(at))
        assert plant.omega == pytest.approx(speed, abs=0.003 * span)
        assert plant.bus_volts == pytest.approx(volts, abs=0.02)  # the reference dithers about 12 V


def test_clamp_and_blocking_diode() -> None:
    """A clamp ends the rise; behind a blocking diode only the capacitor rises, and no current flows back."""
    clamped = fed(FAN, Source(470e-6, clamp_volts=14.0))
    blocked = fed(FAN, Source(470e-6, blocking_diode_volts=0.4))
    assert blocked.bus_volts == pytest.approx(11.6)
    for plant in (clamped, blocked):
        plant.set_drive(25e3, 90.0, True)
        plant.advance(2.0)
        plant.set_drive(25e3, 10.0, True)
        before = plant.supply_volt_seconds, plant.supply_amp_seconds, plant.switch_amp_seconds
        plant.advance(2.02)
        after = plant.supply_volt_seconds, plant.supply_amp_seconds, plant.switch_amp_seconds
        assert after[2] < before[2]
        assert plant.bus_volts > 13.0
        volts, lead = (after[0] - before[0]) / 0.02, after[1] - before[1]
        pumped_terminals, returned = plant is clamped, plant is clamped
        assert (volts > 12.5) == pumped_terminals
        assert (lead < 0.0) == returned
    assert clamped.bus_volts == pytest.approx(14.0)
    assert volts == pytest.approx(12.0, abs=1e-9)
    assert lead == pytest.approx(0.0, abs=1e-9)


def test_looks_within_a_tick_see_no_current_through_a_blocking_diode() -> None:
    """While the capacitor behind the diode is above the supply, the lead's charge stands still at any moment."""
    plant = fed(FAN, Source(470e-6, blocking_diode_volts=0.4))
    plant.set_drive(25e3, 90.0, True)
    plant.advance(2.0)
    plant.set_drive(25e3, 10.0, True)
    plant.advance(2.003)
    lead, shunt = plant.supply_amp_seconds, plant.switch_amp_seconds
    for step in range(1, 40):
        plant.advance(2.003 + 0.00031 * step)
        assert plant.supply_amp_seconds == pytest.approx(lead, abs=1e-12)
    assert plant.switch_amp_seconds < shunt - 1e-4


def test_a_coasting_motor_feeds_the_rail_through_the_body_diodes() -> None:
    """With supply and gate off the rail falls to the back-EMF less one diode's drop and then follows it.

    Own derivation: what the bleeder takes costs another 11.2 ohm times it; the rail lags by a few milliseconds.
    """
    plant = fed(FAN, Source(470e-6, bleeder_ohms=300.0))
    plant.set_drive(25e3, 90.0, True)
    plant.advance(2.0)
    plant.set_drive(25e3, 90.0, False)
    plant.set_supply(12.0, 5.0, False)
    for at in (2.4, 2.6):
        plant.advance(at)
        emf = 0.03 * plant.omega
        assert emf > 3.0
        assert plant.bus_volts == pytest.approx(emf - 0.5 - 11.2 * plant.bus_volts / 300.0, rel=0.03)


def test_limit_answers_after_its_response_time() -> None:
    """For the response time the supply holds its voltage above the limit; then it settles where an ideal limit does."""
    at_once, later = (fed(FAN, Source(470e-6, response), LOW, 0.35) for response in (0.0, 5e-3))
    ideal = Plant(FAN, 2.0, np.random.default_rng(1), stage=LOW)
    ideal.set_supply(12.0, 0.35, True)
    ideal.advance(0.2)
    locked = []
    for plant in (at_once, later, ideal):
        plant.bind(1.0)
        plant.set_drive(25e3, 100.0, True)
        plant.advance(0.2049)
        locked.append((plant.supply_limited, plant.supply_volt_seconds, plant.supply_amp_seconds))
        plant.advance(0.4)
    assert all(limited for limited, _, _ in locked)
    assert locked[1][2] - 0.0 == pytest.approx(12.0 / 11.2 * 0.0049, rel=1e-3)
    assert locked[0][2] < 0.9 * locked[1][2]
    for plant in (at_once, later):
        before = plant.supply_volt_seconds, plant.supply_amp_seconds
        plant.advance(0.5)
        assert (plant.supply_amp_seconds - before[1]) / 0.1 == pytest.approx(0.35, rel=0.02)  # less the bleeder's share
        assert (plant.supply_volt_seconds - before[0]) / 0.1 == pytest.approx(0.35 * 11.2, rel=0.02)
    assert ideal.wave().mean_supply_amps == pytest.approx(0.35)


def test_after_output_off_the_bleeder_empties_it() -> None:
    """With the drive off, 12 V fall below 1 V after R·C·ln 12, and the idle bench then makes one jump."""
    plant = fed(FAN, Source(470e-6, bleeder_ohms=1000.0))
    plant.set_supply(12.0, 1.0, False)
    fall = 0.47 * math.log(12.0)
    plant.advance(0.2 + fall - 0.04)
    assert plant.bus_volts > 1.0
    plant.advance(0.2 + fall + 0.04)
    assert plant.bus_volts < 1.0
    volts, volt_seconds = plant.bus_volts, plant.supply_volt_seconds
    plant.advance(3e7)
    assert plant.bus_volts == 0.0
    assert plant.supply_volt_seconds - volt_seconds == pytest.approx(0.47 * (volts - 0.01), rel=0.03)


def test_looking_changes_nothing() -> None:
    """However often it is looked at in between, all that is read later is the same to the last bit."""

    def story(looks: random.Random | None) -> list[tuple[float, ...]]:
        plant = fed(FAN, Source(470e-6, 2e-3), limit=0.4)
        seen: list[tuple[float, ...]] = []
        for until, duty, on in ((1.0, 90.0, True), (1.7, 15.0, True), (2.9, 60.0, True), (4.0, 0.0, False)):
            while looks is not None and (at := plant.now + looks.uniform(0.0, 0.03)) < until:
                plant.advance(at)
                assert plant.supply_volt_seconds > 0.0
                assert plant.supply_amp_seconds >= -1.0
                assert plant.wave().period_s > 0.0
            plant.advance(until)
            plant.set_drive(1000.0, duty, on)
            seen.append((
                plant.omega, plant.bus_volts, plant.supply_volt_seconds, plant.supply_amp_seconds,
                plant.switch_amp_seconds, plant.node_volt_seconds, plant.edges, plant.last_edge_at,
            ))  # fmt: skip
        return seen

    assert story(random.Random(3)) == story(None)


def test_values_no_supply_can_have_are_refused() -> None:
    """A capacitance of nothing is a config error that says where."""
    with pytest.raises(ConfigError, match="simulated_source"):
        Source(0.0)


def test_a_rig_file_describes_it(short_job: Path) -> None:
    """Stage and supply of the rig file act on the bench: the supply's own voltmeter reads the pumped-up voltage."""
    rig = short_job.parent / "shelter-bench.toml"
    text = rig.read_text(encoding="utf-8").replace('stage = "low_side_diode"', 'stage = "half_bridge"')
    rig.write_text(
        text + "\n[simulated_stage]\ndead_time_s = 5e-7\nswitch_resistance_ohm = 0.05\n"
        "\n[simulated_source]\nresistance_ohm = 0.1\nbleeder_ohm = 200.0\nclamp_volts = 30.0\n",
        encoding="utf-8",
    )
    bench = build(load(short_job))
    plant = bench.plant
    plant.set_supply(12.0, 1.5, True)
    plant.set_drive(25e3, 90.0, True)
    bench.advance(5.0)
    plant.advance(5.0)
    plant.set_drive(25e3, 20.0, True)
    before = plant.supply_volt_seconds
    plant.advance(5.02)
    assert (plant.supply_volt_seconds - before) / 0.02 > 12.4
    assert isinstance(plant, FedPlant)
    plant.set_drive(25e3, 90.0, True)
    plant.advance(9.0)
    plant.set_drive(25e3, 0.0, False)
    plant.set_supply(12.0, 1.5, False)
    plant.advance(9.3)
    # the bleeder alone would leave 12 V·e^(−0.3/0.094) = 0.5 V; the coasting motor holds the rail up
    assert plant.bus_volts > 1.0
