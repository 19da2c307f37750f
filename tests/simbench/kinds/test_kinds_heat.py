"""Warming of fans with electronics: two bodies against scipy and by hand, what a warm fan does, the thermometer."""

from __future__ import annotations

import random
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pytest
from matplotlib.figure import Figure
from scipy.integrate import solve_ivp

from sweeprig.job import load, shipped
from sweeprig.job.simulated_details import SimulatedHeat, SimulatedInputHeat
from sweeprig.simbench import build
from sweeprig.simbench.heat import TwoBodies
from sweeprig.simbench.kinds.choose import other_kind
from sweeprig.simbench.kinds.control_input import ControlInputFan
from sweeprig.simbench.kinds.electronic import ElectronicFan
from sweeprig.simbench.thermometer import Thermometer
from tests.simbench.kinds.test_kinds_common import story

if TYPE_CHECKING:
    from sweeprig.simbench.kinds.electronic import ElectronicTruth
    from tests.simbench.conftest import Bed
    from tests.simbench.kinds.conftest import Kinds

BODIES = TwoBodies(8.0, 12.0, 1.5, 20.0, ambient_degc=25.0, magnet_percent_per_k=-0.2)


def steady(truth: ElectronicTruth, **more: object) -> ElectronicTruth:
    return replace(truth, running_friction_spread_percent=0.0, breakaway_friction_spread_percent=0.0, **more)  # type: ignore[arg-type]  # names of its own fields


@pytest.mark.parametrize(("pwm_hz", "duty", "share"), [(1000.0, 100.0, 1.0), (300.0, 60.0, 0.48)])
def test_a_held_rotor_warms_as_scipy_says(kinds: type[Kinds], pwm_hz: float, duty: float, share: float) -> None:
    """Pushed against a held rotor, winding and case follow C·dT/dt = losses − flows within 0.3 K, the copper's rise in.

    Independent method: scipy's DOP853 on both equations, with R(T)·i² in the driven part of the time, 0.4 ms of each
    on-time being lost, and 12 mA · 12 V in the case. The bench renews the loss every 20 ms: 0.3 K at 8 K/s leaves room.
    """
    t = steady(kinds.electronic_truth, heat=BODIES, breakaway_friction_nm=1.0, lock_detect_s=60.0)
    fan = kinds.electronic(t)
    assert (fan.winding_degc, fan.case_degc, fan.ambient_degc) == (25.0, 25.0, 25.0)
    fan.set_drive(pwm_hz, duty, True)

    def warming(_: float, degc: np.ndarray[tuple[int], np.dtype[np.float64]]) -> list[float]:
        winding, case = float(degc[0]), float(degc[1])
        ohms = 14.0 * (234.5 + winding) / 254.5
        inward = (winding - case) / 8.0
        own = 0.012 * 12.0 * duty / 100.0
        return [(share * 144.0 / ohms - inward) / 1.5, (inward + own - (case - 25.0) / 12.0) / 20.0]

    exact = solve_ivp(warming, (0.0, 50.0), [25.0, 25.0], method="DOP853", rtol=1e-9, dense_output=True)
    for at in (0.5, 3.0, 12.0, 50.0):
        fan.advance(at)
        expected = tuple(exact.sol(at))  # type: ignore[misc]  # asked for by dense_output
        assert (fan.winding_degc, fan.case_degc) == pytest.approx(expected, abs=0.3)
    assert fan.winding_degc > 50.0


def test_a_warm_fan_takes_less_and_cools_to_the_air(kinds: type[Kinds]) -> None:
    """By hand: after an hour at rest without supply it has the air's temperature; warm, its current is copper's.

    Held, the current is V/R(T): 234.5 K more than the winding's temperature, over 254.5 K.
    """
    t = steady(kinds.electronic_truth, heat=BODIES, breakaway_friction_nm=1.0, lock_detect_s=60.0)
    fan = kinds.electronic(t)
    fan.set_drive(1000.0, 100.0, True)
    fan.advance(50.0)
    warm, charge = fan.winding_degc, fan.motor_amp_seconds
    fan.advance(50.1)
    ohms = 14.0 * (234.5 + warm) / 254.5
    assert (fan.motor_amp_seconds - charge) / 0.1 == pytest.approx(12.0 / ohms, rel=1e-3)
    fan.set_supply(12.0, 3.0, False)
    fan.advance(3650.0)
    assert (fan.winding_degc, fan.case_degc) == pytest.approx((25.0, 25.0), abs=0.01)


def test_a_faded_magnet_lets_it_run_otherwise(kinds: type[Kinds]) -> None:
    """In air of 80 degC the speed settles where K, 12 % less, and R, 24 % more, meet the load.

    Own derivation: K·(V − K·ω)/R = T + c·ω + q·ω², solved for ω by bisection, at the temperatures the fan tells.
    """
    for air in (20.0, 80.0):
        t = steady(kinds.electronic_truth, heat=replace(BODIES, ambient_degc=air))
        fan = kinds.electronic(t)
        fan.set_drive(1000.0, 100.0, True)
        fan.advance(600.0)
        k = 0.024 * (1.0 - 0.002 * (fan.case_degc - 20.0))
        ohms = 14.0 * (234.5 + fan.winding_degc) / 254.5
        low, high = 0.0, 12.0 / k
        for _ in range(60):
            w = 0.5 * (low + high)
            surplus = k * (12.0 - k * w) / ohms - 0.5e-3 - 4e-6 * w - 4e-8 * w * w
            low, high = (w, high) if surplus > 0.0 else (low, w)
        assert fan.omega == pytest.approx(low, rel=1e-3)
        assert fan.case_degc > air


def test_a_control_inputs_losses(kinds: type[Kinds]) -> None:
    """By hand, settled at full speed: 40 % of (0.35 − 0.02) A · 12 V in the winding, 0.02 A · 12 V in the case."""
    truth = replace(kinds.four_wire_truth, heat=BODIES, loss_percent=40.0, speed_spread_percent=0.0)
    fan = kinds.four_wire(truth)
    fan.set_drive(25e3, 100.0, True)
    fan.advance(4000.0)
    winding, own = 0.4 * 0.33 * 12.0, 0.02 * 12.0
    case = 25.0 + 12.0 * (winding + own)
    assert (fan.winding_degc, fan.case_degc) == pytest.approx((case + 8.0 * winding, case), rel=2e-3)


def test_looking_changes_nothing_of_a_warm_fan_either(kinds: type[Kinds]) -> None:
    """However often it is looked at in between, all that is read later is the same to the last bit, heat in it."""
    ends = []
    for looks in (random.Random(3), None):
        electronic = kinds.electronic(replace(kinds.electronic_truth, heat=BODIES))
        ends.append((story(electronic, looks), electronic.winding_degc, electronic.case_degc))
        inside = kinds.four_wire(replace(kinds.four_wire_truth, heat=BODIES, loss_percent=40.0))
        ends.append((story(inside, looks), inside.winding_degc, inside.case_degc))
    assert ends[:2] == ends[2:]
    assert min(degc for _, degc, _ in ends) > 25.2


def test_without_a_table_nothing_warms(kinds: type[Kinds]) -> None:
    """No heat table: 20 degC everywhere after any run, and the resistance is the file's."""
    for fan in (kinds.electronic(), kinds.four_wire()):
        story(fan, None)
        assert (fan.winding_degc, fan.case_degc, fan.ambient_degc) == (20.0, 20.0, 20.0)


def test_from_the_motor_file_to_the_thermometer(bed: Bed) -> None:
    """A motor file's heat table makes a fan of which the thermometer reads winding, case and air, to its 0.01 K."""
    bodies = {"winding_case_k_per_w": 8.0, "case_ambient_k_per_w": 12.0, "winding_j_per_k": 1.5, "case_j_per_k": 20.0}
    tables = {"electronic": SimulatedHeat(**bodies, ambient_degc=30.0), "four-wire": SimulatedInputHeat(**bodies)}
    options: dict[str, object] = {"winding": 1, "case": 2, "ambient": 3}
    thermometer = bed.add(Thermometer, options=options, errors={"temperature_noise": 0.0, "sensor_lag_s": 0.0})
    for name, kind in (("electronic", ElectronicFan), ("four-wire", ControlInputFan)):
        motor = load(shipped(name)).motor
        simulated = motor.simulated.model_copy(update={"heat": tables[name]})  # type: ignore[union-attr]  # it has one
        fan = other_kind(motor.model_copy(update={"simulated": simulated}), np.random.default_rng(1), bed.bench.now)
        assert isinstance(fan, kind)
        fan.set_supply(12.0, 1.5, True)
        fan.set_drive(25e3, 100.0, True)
        bed.bench.plant = fan
        bed.bench.advance(bed.bench.now + 300.0)
        answer = bed.ask(thermometer, "MEAS:TEMP? (@1,2,3)")
        read = [float(value) for value in answer.split(",")]
        assert read == pytest.approx([fan.winding_degc, fan.case_degc, tables[name].ambient_degc], abs=0.011)
        assert read[0] > read[1] > read[2]


def test_the_shipped_fans_stay_cold() -> None:
    """The shipped jobs have no heat table: their fans' temperatures are the room's."""
    for name in ("electronic", "four-wire"):
        plant = build(load(shipped(name))).plant
        assert isinstance(plant, ElectronicFan | ControlInputFan)
        assert plant.winding_degc == 20.0


def test_picture_of_warming(kinds: type[Kinds], tmp_path: Path) -> None:
    """A picture: a fan at full duty, held from 60 s on and pushed 0.5 s in 3.5, and one with a control input."""
    figure = Figure(figsize=(10, 3.6), layout="constrained")
    left, right = figure.subplots(1, 2)
    fan = kinds.electronic(steady(kinds.electronic_truth, heat=BODIES))
    fan.set_drive(1000.0, 100.0, True)
    inside = kinds.four_wire(replace(kinds.four_wire_truth, heat=BODIES, loss_percent=40.0))
    inside.set_drive(25e3, 100.0, True)
    peaks = []
    for axes, one in ((left, fan), (right, inside)):
        rows = []
        for step in range(480):
            if one is fan and step == 240:
                fan.set_drive(1000.0, 0.0, True)
                fan._breakaway = kinds.electronic(steady(kinds.electronic_truth, breakaway_friction_nm=1.0))._breakaway
            if one is fan and step == 250:
                fan.set_drive(1000.0, 100.0, True)
            one.advance(one.now + 0.25)
            rows.append((step * 0.25, one.winding_degc, one.case_degc))
        for column, label in ((1, "winding"), (2, "case")):
            axes.plot([row[0] for row in rows], [row[column] for row in rows], label=label)
        axes.set_xlabel("time (s)")
        axes.set_ylabel("degC")
        axes.legend()
        peaks.append(max(row[1] for row in rows))
    figure.suptitle("warming of fans with electronics (SIMULATED)")
    figure.savefig(tmp_path / "warming.png", dpi=90)
    assert (tmp_path / "warming.png").stat().st_size > 10_000
    assert min(peaks) > 35.0
