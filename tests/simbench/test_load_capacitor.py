"""A load capacitor across the motor: against scipy on the switched equations, its balances, its limits, its picture."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.figure import Figure

from sweeprig.errors import ConfigError
from sweeprig.job import load, shipped
from sweeprig.job.stage_models import SimulatedStage
from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.build import motor_truth
from sweeprig.simbench.build_plant import plant_of, stage_of
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.detailed import DetailedPlant
from sweeprig.simbench.load_capacitor import CapacitorSetting, CapacitorStage
from sweeprig.simbench.motor_truth import DetailedTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.waveform import Place

STAGES = {
    "low side": SwitchedStage("low_side_diode", False, False, 0.15, 0.6, 0.08, 0.0, 0.0, 0.2),
    "half, dead time": SwitchedStage("half_bridge", True, False, 0.15, 0.6, 0.08, 2e-6, 0.0, 0.2),
    "full, slow, diode": SwitchedStage("h_bridge", False, False, 0.15, 0.6, 0.08, 0.0, 0.0, 0.2),
    "full, fast": SwitchedStage("h_bridge", True, True, 0.15, 0.6, 0.08, 2e-6, 0.0, 0.2),
}
POINTS = [(300.0, 12.0, 0.5), (300.0, 40.0, 8.0), (1000.0, 40.0, 4.0), (1000.0, 85.0, 13.0), (25e3, 40.0, 4.8)]
FARADS = [1e-6, 22e-6, 470e-6]
"""Ringing within the off-time, discharged within a period, and held over many."""
R, L, ESR = 6.0, 3e-3, 0.1
PLACES: tuple[Place, ...] = (
    "across_motor", "switch_node", "motor_lead", "supply_lead", "switch_shunt", "supply_terminals",
)  # fmt: skip


def setting(name: str, farad: float, pwm_hz: float, duty: float, conducts: bool = True) -> CapacitorSetting:
    return CapacitorStage(STAGES[name], farad, ESR).setting(12.0, R, L, pwm_hz, duty, conducts)


@pytest.mark.parametrize("name", STAGES)
@pytest.mark.parametrize("farad", FARADS)
def test_against_scipy_on_the_switched_equations(reference: Callable[[str], Any], name: str, farad: float) -> None:
    """A period integrated from the stated begin comes back to it and gives the stated means, to 1e-7.

    Independent method: the half bridges' laws and the capacitor's, by scipy's DOP853 at rtol 1e-10. Extremes are seen
    on 2,000 points of each part of the period only: to 0.1 % of the peak, never beyond. The map of a period contracts,
    so what comes back is the only one.
    """
    module, s = reference("circuits"), STAGES[name]
    for pwm_hz, duty, emf in POINTS:
        circuit = module.Circuit(
            s.kind, 12.0, R, L, pwm_hz, duty, s.switch_ohms, s.diode_volts, s.diode_ohms, s.supply_ohms, s.dead_time_s,
            s.synchronous, s.fast_decay, farad, ESR,
        )  # fmt: skip
        shape = setting(name, farad, pwm_hz, duty).wave(emf)
        amps, inner = shape.value("motor_lead", 0.0), shape.segments()[0]
        volts = inner.course.at(0.0)[1]  # type: ignore[attr-defined]  # parts of a conducting stage have their course
        found = module.one_period_loaded(circuit, emf, amps, volts)
        peak = max(shape.peak_amps, -shape.valley_amps)
        assert (found["end"], found["end_volts"]) == pytest.approx((amps, volts), abs=1e-6)
        means = (shape.mean_motor_amps, shape.mean_supply_amps, shape.mean_square_amps)
        assert (found["amps"], found["supply"], found["square"]) == pytest.approx(means, abs=1e-7)
        assert found["volts"] == pytest.approx(shape.mean_motor_volts, abs=1e-6)
        assert -1e-6 <= shape.peak_amps - found["peak"] <= 1e-3 * peak
        assert -1e-6 <= found["valley"] - shape.valley_amps <= 1e-3 * peak
        assert found["spike"] == pytest.approx(shape.peak_supply_amps, rel=1e-3, abs=1e-6)


@pytest.mark.parametrize("name", STAGES)
def test_short_forms_agree_with_the_waveform(name: str) -> None:
    """Mean current, its derivative and the supply's current agree with the waveform at any back-EMF, of either sign."""
    for farad, (pwm_hz, duty) in itertools.product(FARADS, [(300.0, 30.0), (25e3, 60.0)]):
        one = setting(name, farad, pwm_hz, duty)
        for emf in np.linspace(-3.03, 14.01, 18):
            shape = one.wave(float(emf))
            amps, slope = one.mean_current(float(emf))
            assert amps == pytest.approx(shape.mean_motor_amps, rel=1e-8, abs=1e-10)
            assert one.mean_supply_current(float(emf)) == pytest.approx(shape.mean_supply_amps, rel=1e-8, abs=1e-10)
            aside = one.mean_current(float(emf) + 1e-4)[0], one.mean_current(float(emf) - 1e-4)[0]
            assert slope == pytest.approx((aside[0] - aside[1]) / 2e-4, rel=1e-3, abs=1e-6)


@pytest.mark.parametrize("name", STAGES)
@pytest.mark.parametrize("farad", FARADS)
def test_places_agree_with_each_other(name: str, farad: float) -> None:
    """Values have the integrals that are stated, the node and the terminals follow from the rest, by fine sums."""
    of_supply, of_motor, ohms = CapacitorStage(STAGES[name], farad, ESR).node
    for emf in (0.5, 8.0, 13.5):
        shape = setting(name, farad, 1000.0, 35.0).wave(emf)
        for place in PLACES:
            fine = 0.0
            for part in shape.segments():
                even = ((np.arange(400) + 0.5) / 400).tolist()  # squared: the spike at the begin is short
                values = [part.value(place, part.seconds * u * u) * 2.0 * u for u in even]
                fine += sum(values) * part.seconds / len(values)
            assert shape.mean(place) == pytest.approx(fine / shape.period_s, rel=2e-3, abs=2e-3), place
            assert shape.integral(place, 0.3e-3, 7.3e-3) == pytest.approx(7e-3 * shape.mean(place), abs=1e-12)
        assert shape.mean("supply_terminals") == pytest.approx(12.0 - 0.2 * shape.mean_supply_amps, abs=1e-10)
        node = of_supply * shape.mean("supply_terminals") + of_motor * shape.mean_motor_volts
        assert shape.mean("switch_node") == pytest.approx(node + ohms * shape.mean_motor_amps, abs=1e-9)


def test_energy_of_a_period() -> None:
    """What the supply gives is the heat of winding, switch and capacitor and the mechanical work: no diode conducts.

    Own derivation, from the values within the period by fine sums. The switch shunt's current is the stage's.
    """
    shape = setting("low side", 470e-6, 1000.0, 35.0).wave(3.0)
    given = taken = lost = 0.0
    for part in shape.segments():
        grid, weight = (np.arange(4000) + 0.5) * part.seconds / 4000, part.seconds / 4000 / shape.period_s
        read = {p: np.array([part.value(p, float(at)) for at in grid]) for p in PLACES}
        amps, drawn = read["motor_lead"], read["switch_shunt"]
        given += weight * float(np.sum(read["supply_terminals"] * drawn))
        taken += weight * float(np.sum(R * amps**2 + 3.0 * amps))
        lost += weight * float(np.sum(0.15 * drawn**2 + ESR * (drawn - amps) ** 2))
    assert min(shape.value("across_motor", at) for at in np.linspace(0.0, 0.99e-3, 100)) > 0.0
    assert given == pytest.approx(taken + lost, rel=1e-5)
    assert taken == pytest.approx(R * shape.mean_square_amps + 3.0 * shape.mean_motor_amps, rel=1e-5)


def test_a_small_one_is_none() -> None:
    """With a nanofarad the means are those of the bare stage, but for its charge, 24 V · 1 nF · f twice a period.

    Without a current-free gap: in one it would ring with the winding, and the next on-time begin anywhere in that.
    """
    for name, (pwm_hz, duty, emf) in itertools.product(STAGES, [(300.0, 80.0, 0.2), (1000.0, 70.0, 0.5)]):
        bare = STAGES[name].setting(12.0, R, L, pwm_hz, duty, True).wave(emf)
        shape = CapacitorStage(STAGES[name], 1e-9, ESR).setting(12.0, R, L, pwm_hz, duty, True).wave(emf)
        assert shape.mean_motor_amps == pytest.approx(bare.mean_motor_amps, rel=1e-3, abs=5e-5)
        assert shape.mean_supply_amps == pytest.approx(bare.mean_supply_amps, rel=1e-3, abs=5e-5)


def test_a_large_one_is_a_peak_detector() -> None:
    """A capacitor that no period empties, behind switches alone, holds a level that the charge balance gives.

    Own derivation: as charged through r for the part D of the time and drained by (v − E)/R always,
    D·(V − v)/r = (v − E)/R, for a winding and a capacitor slow against the period.
    """
    stage = CapacitorStage(SwitchedStage("low_side_diode", switch_ohms=0.4), 1e-3, 0.1)
    shape = stage.setting(12.0, R, L, 25e3, 30.0, True).wave(3.0)
    # while charging, the winding's current also passes the switch: 12 − r·(i_c + i) = v + rc·i_c, balanced over D
    duty, r, rc = 0.3, 0.4, 0.1
    # i_c = (12 − v − r·i)/(r + rc) in D, −i in 1 − D; i = (mean of terminal − E)/R
    unknown = np.array([[duty / (r + rc), duty * r / (r + rc) + (1.0 - duty)], [1.0, -R]])
    _, amps = np.linalg.solve(unknown, np.array([duty * 12.0 / (r + rc), 3.0]))
    assert shape.mean_motor_amps == pytest.approx(float(amps), rel=2e-3)
    assert shape.mean_motor_volts > 2.0 * duty * 12.0


def test_the_gap_no_longer_shows_the_back_emf() -> None:
    """Where the bare stage reads just the back-EMF at the period's end, the capacitor still stands volts above it."""
    bare = STAGES["low side"].setting(12.0, R, L, 300.0, 30.0, True).wave(4.0)
    shape = setting("low side", 470e-6, 300.0, 30.0).wave(4.0)
    end = 0.999 / 300.0
    assert bare.value("across_motor", end) == pytest.approx(4.0, abs=1e-9)
    assert shape.value("across_motor", end) > 6.0
    assert shape.value("motor_lead", end) > 0.1 > bare.value("motor_lead", end)


def test_spike_is_limited_by_the_resistances() -> None:
    """At switching on the supply gives (V − lowest voltage) over all resistances in its way, whatever the winding."""
    shape = setting("low side", 470e-6, 300.0, 30.0).wave(4.0)
    inner = shape.segments()[0].course.at(0.0)  # type: ignore[attr-defined]  # parts of a conducting stage have it
    spike = (12.0 - inner[1] + ESR * inner[0]) / (0.15 + 0.2 + ESR)
    assert shape.peak_supply_amps == pytest.approx(spike, rel=1e-9)
    assert spike > 10.0 * shape.mean_motor_amps


def test_without_gate_nothing_flows_and_the_back_emf_stands() -> None:
    """With the gate off the current is zero, the motor's voltage its back-EMF, the node the rest of the supply's."""
    one = setting("low side", 22e-6, 1000.0, 40.0, conducts=False)
    shape = one.wave(5.0)
    assert (one.mean_current(5.0), one.mean_supply_current(5.0)) == ((0.0, 0.0), 0.0)
    assert [shape.value(place, 1e-4) for place in PLACES] == [5.0, 7.0, 0.0, 0.0, 0.0, 12.0]
    assert (shape.mean_motor_volts, shape.peak_supply_amps, shape.period_s) == (5.0, 0.0, 1e-3)


@pytest.mark.parametrize("name", STAGES)
def test_current_limit_is_just_met(name: str) -> None:
    """On the limited voltage the mean supply current is the limit; a setting moved there is the one made for it."""
    one = setting(name, 22e-6, 1000.0, 70.0)
    limit = 0.4 * one.mean_supply_current(1.0)
    lowered = one.limited(1.0, limit)
    assert lowered.supply_volts < 12.0
    assert lowered.mean_supply_current(1.0) == pytest.approx(limit, rel=1e-8)
    made = CapacitorStage(STAGES[name], 22e-6, ESR).setting(lowered.supply_volts, R, L, 1000.0, 70.0, True)
    assert made.mean_current(1.0)[0] == pytest.approx(lowered.mean_current(1.0)[0], rel=1e-9)


@pytest.mark.parametrize(("farad", "ohm"), [(0.0, 0.1), (1e-6, 0.0), (-1e-6, 0.1)])
def test_values_that_no_capacitor_has(farad: float, ohm: float) -> None:
    """No farads or no resistance is a config error that says what, both values, and where to correct them."""
    with pytest.raises(ConfigError, match=r"load capacitor.*F.*ohm.*above zero.*simulated_stage"):
        CapacitorStage(STAGES["low side"], farad, ohm)


def rig_with(farad: float | None) -> tuple[Any, Any]:
    """(rig with this load capacitor, true motor) of the shipped demo."""
    job = load(shipped("demo"))
    rig = job.rig.model_copy(update={"simulated_stage": SimulatedStage(load_capacitor_farad=farad)})
    return rig, replace(motor_truth(job), running_friction_spread_percent=0.0)


def test_the_rig_files_key_is_the_plants_stage() -> None:
    """With the key the rig's stage has the capacitor, without it none; the motor then runs faster at the same duty."""
    speeds = []
    for farad in (None, 100e-6):
        rig, truth = rig_with(farad)
        assert isinstance(stage_of(rig), CapacitorStage) is (farad is not None)
        plant = plant_of(rig, truth, 2.0, np.random.default_rng(1))
        plant.set_supply(12.0, 3.0, True)
        plant.set_drive(300.0, 40.0, True)
        plant.advance(3.0)
        speeds.append(plant.omega)
        before = (plant.motor_volt_seconds, plant.motor_amp_seconds, plant.supply_amp_seconds)
        shape = plant.wave()
        plant.advance(4.0)
        grown = [b - a for a, b in zip(before, (plant.motor_volt_seconds, plant.motor_amp_seconds,
                                                plant.supply_amp_seconds), strict=True)]  # fmt: skip
        means = [shape.mean_motor_volts, shape.mean_motor_amps, shape.mean_supply_amps]
        assert grown == pytest.approx(means, rel=1e-3)
    assert speeds[1] > 1.1 * speeds[0]


def test_a_motor_runs_up_as_scipy_says(reference: Callable[[str], Any]) -> None:
    """Settled, the plant's mean torque on this stage is what holds its speed: by the reference's mean current.

    Independent method for the current; K·Ī = friction + c·ω + q·ω² by Newton's law, to 0.5 % of the friction torque.
    """
    _, truth = rig_with(None)
    truth = replace(truth, thermal_resistance_k_per_w=0.0)
    stage = CapacitorStage(STAGES["low side"], 22e-6, ESR)
    plant = Plant(truth, 2.0, np.random.default_rng(1), stage=stage)
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(1000.0, 40.0, True)
    plant.advance(6.0)
    k, w, s = truth.torque_constant_nm_per_a, plant.omega, STAGES["low side"]
    module = reference("circuits")
    circuit = module.Circuit(
        s.kind, 12.0, truth.resistance_ohm, truth.inductance_henry, 1000.0, 40.0, s.switch_ohms, s.diode_volts,
        s.diode_ohms, s.supply_ohms, 0.0, False, False, 22e-6, ESR,
    )  # fmt: skip
    amps, volts = plant.wave().value("motor_lead", 0.0), k * w
    for _ in range(12):
        found = module.one_period_loaded(circuit, k * w, amps, volts, 1e-8)
        amps, volts = found["end"], found["end_volts"]
    needed = truth.running_friction_nm + truth.viscous_friction_nm_s * w + truth.quadratic_load_nm_s2 * w * w
    assert k * found["amps"] == pytest.approx(needed, abs=5e-3 * truth.running_friction_nm)


def test_picture_with_and_without(tmp_path: Path) -> None:
    """A picture of one setting without, with a small and with a large capacitor; ripple falls as it grows."""
    figure = Figure(figsize=(12, 7), layout="constrained")
    axes = figure.subplots(2, 4, sharex=True, sharey="row")
    times = np.linspace(0.0, 2.0, 2000)
    ripples = []
    for column, farad in enumerate((0.0, 1e-6, 22e-6, 470e-6)):
        bare = STAGES["low side"].setting(12.0, R, L, 1000.0, 35.0, True)
        shape = bare.wave(5.0) if farad == 0.0 else setting("low side", farad, 1000.0, 35.0).wave(5.0)
        for row, places in enumerate((PLACES[:2], PLACES[2:4])):
            for place in places:
                drawn = [shape.value(place, float(at) * 1e-3) for at in times]
                axes[row, column].plot(times, drawn, label=place)
        axes[0, column].set_title(f"{farad * 1e6:g} uF", fontsize=9)
        axes[1, column].set_xlabel("ms")
        ripples.append(shape.peak_amps - shape.valley_amps)
    axes[1, 0].set_ylim(-0.2, 2.0)
    for row, unit in enumerate(("V", "A")):
        axes[row, 0].set_ylabel(unit)
        axes[row, 0].legend(fontsize=7)
    figure.suptitle("load capacitor across the motor, low side, 35 %, 5 V back-EMF (SIMULATED)")
    path = tmp_path / "load-capacitor.png"
    figure.savefig(path, dpi=90)
    assert path.stat().st_size > 20_000
    assert ripples[3] < 0.2 * ripples[0] < 0.2 * ripples[1]


def test_among_detents_the_mean_current_is_stepped_with() -> None:
    """A motor with cogging steps out of its detent on this stage, with a current between those at its two speeds."""
    plain = motor_truth(load(shipped("demo")))
    values = {field.name: getattr(plain, field.name) for field in fields(plain)}
    stage = CapacitorStage(STAGES["low side"], 22e-6, ESR)
    plant = DetailedPlant(DetailedTruth(**values, cogging=Cogging(1e-3, 6)), 2.0, np.random.default_rng(1), stage=stage)
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(1000.0, 40.0, True)
    plant.advance(0.01)
    one = stage.setting(12.0, plain.resistance_ohm, plain.inductance_henry, 1000.0, 40.0, True)
    emf = plain.torque_constant_nm_per_a * plant.omega
    assert plant.resolved
    assert emf > 0.05
    assert one.mean_current(emf)[0] < plant.motor_amp_seconds / 0.01 < one.mean_current(0.0)[0]
