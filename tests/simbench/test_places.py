"""Where meter and probe sit: the trade's worked cases of current, voltage and duty on the simulated waveform."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from matplotlib.figure import Figure
from scipy.integrate import solve_ivp

from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.chopper import chopper
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.waveform import Place, Waveform

VOLTAGES: tuple[Place, ...] = ("switch_node", "across_motor")
CURRENTS: tuple[Place, ...] = ("motor_lead", "supply_lead")


def both(pwm_hz: float, duty: float, emf: float) -> list[Waveform]:
    """12 V, 6 ohm, 3 mH, 0.5 V diode: from the closed form and from the general stage."""
    switched = SwitchedStage("low_side_diode").setting(12.0, 6.0, 3e-3, pwm_hz, duty, True)
    return [chopper(12.0, 6.0, 3e-3, pwm_hz, duty).wave(emf), switched.wave(emf)]


def share_below(shape: Waveform, volts: float) -> float:
    """Percent of the period during which the node is below a threshold: what a scope calls on-time there."""
    grid = (np.arange(20_000) + 0.5) * shape.period_s / 20_000
    return 100.0 * float(np.mean([shape.value("switch_node", float(t)) < volts for t in grid]))


def automatic_mid_level(shape: Waveform) -> float:
    levels = [value for _, before, after in shape.voltage_steps("switch_node") for value in (before, after)]
    return 0.5 * (min(levels) + max(levels))


def test_where_the_ammeter_sits() -> None:
    """At 300 Hz, 30 %, back-EMF 4 V: motor lead 0.295 A, supply lead and shunt 0.227 A, and duty · motor 0.089 A.

    Bench practice's example, three digits, computed by another script (derived for this project).
    """
    for shape in both(300.0, 30.0, 4.0):
        assert shape.mean("motor_lead") == pytest.approx(0.295, abs=5e-4)
        assert shape.mean("supply_lead") == pytest.approx(0.227, abs=5e-4)
        assert shape.mean("switch_shunt") == pytest.approx(0.227, abs=5e-4)
        assert 0.3 * shape.mean("motor_lead") == pytest.approx(0.089, abs=1e-3)


def test_which_voltage() -> None:
    """In the same case a meter across the motor reads 5.77 V, where D·V = 3.6 V are applied; the node tells the rest.

    Bench practice's example (derived for this project); motor voltage = supply − node at every moment.
    """
    for shape in both(300.0, 30.0, 4.0):
        assert shape.mean("across_motor") == pytest.approx(5.77, abs=5e-3)
        assert shape.mean("supply_terminals") - shape.mean("switch_node") == pytest.approx(5.77, abs=5e-3)
        for phase in np.linspace(0.01, 0.99, 23) * shape.period_s:
            across = shape.value("supply_terminals", float(phase)) - shape.value("switch_node", float(phase))
            assert shape.value("across_motor", float(phase)) == pytest.approx(across, abs=1e-12)
        gap = 0.98 * shape.period_s
        assert shape.value("motor_lead", gap) == 0.0
        assert shape.value("across_motor", gap) == pytest.approx(4.0)
        assert shape.value("switch_node", gap) == pytest.approx(8.0)


@pytest.mark.parametrize(("pwm_hz", "duty", "emf", "reads"), [(300.0, 30.0, 7.0, 93.0), (1000.0, 50.0, 8.0, 87.0)])
def test_duty_at_the_switch_node(pwm_hz: float, duty: float, emf: float, reads: float) -> None:
    """An automatic mid level counts the current-free gap as on: 30 % reads 93 %, 50 % reads 87 %; not so 15 % of 12 V.

    Bench practice's two figures, whole percent (derived for this project).
    """
    for shape in both(pwm_hz, duty, emf):
        middle = automatic_mid_level(shape)
        assert middle == pytest.approx(6.25)
        assert share_below(shape, middle) == pytest.approx(reads, abs=0.5)
        assert share_below(shape, 0.15 * 12.0) == pytest.approx(duty, abs=0.01)


def test_steps_of_the_node_are_all_there() -> None:
    """Going from each jump of the node to the next, its value changes only little: no jump is missing.

    Own derivation: on a plain stage the node jumps at both ends of the on-time and where the current ends.
    """
    shape = both(300.0, 30.0, 4.0)[1]
    steps = list(shape.voltage_steps("switch_node"))
    assert [round(phase * 300.0, 6) for phase, _, _ in steps[:2]] == [0.0, 0.3]
    assert [(round(before, 9), round(after, 9)) for _, before, after in steps] == [(8.0, 0.0), (0.0, 12.5), (12.5, 8.0)]


FAN = MotorTruth(11.2, 10.5e-3, 0.0283, 7.6e-6, 4.0e-8, 1.2e-5, 0.6e-3, 0.0, 1e-3, 0.0, 0.2, 0.1, 0.0, 240.0)


@pytest.mark.parametrize("kind", ["low_side_diode", "half_bridge", "h_bridge"])
def test_running_integrals_by_place(kind: str) -> None:
    """A settled motor's integrals grow as the waveform's means at node, terminals, lead and shunt say."""
    stage = SwitchedStage(kind, kind != "low_side_diode", False, 0.1, 0.5, 0.05, 0.0, 0.0, 0.3)  # type: ignore[arg-type]
    plant = Plant(FAN, 2.0, np.random.default_rng(1), stage=stage)
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(300.0, 40.0, True)
    plant.advance(5.0)
    assert plant.omega > 50.0

    def read() -> list[float]:
        return [plant.motor_volt_seconds, plant.node_volt_seconds, plant.supply_volt_seconds,
                plant.motor_amp_seconds, plant.supply_amp_seconds, plant.switch_amp_seconds]  # fmt: skip

    before, shape = read(), plant.wave()
    plant.advance(6.0)
    grown = [b - a for a, b in zip(before, read(), strict=True)]
    means = [
        shape.mean(place)
        for place in ("across_motor", "switch_node", "supply_terminals", "motor_lead", "supply_lead", "switch_shunt")
    ]
    # the linear combination for the node holds while current flows; in a gap the node has no such resistance
    assert grown == pytest.approx(means, rel=1e-5)


def test_a_bridge_brakes_and_a_switch_lets_coast() -> None:
    """After a falling step of duty a half bridge brakes with (D·V − K·ω)/R, and a low-side switch only lets it coast.

    Independent method: scipy on J·dω/dt = K·I − friction − load with that current, and with none (back-EMF above the
    boundary of conduction for the whole time).
    """
    ends = []
    for stage in (SwitchedStage("half_bridge", synchronous=True), SwitchedStage("low_side_diode")):
        plant = Plant(FAN, 2.0, np.random.default_rng(1), stage=stage)
        plant.set_supply(12.0, 3.0, True)
        plant.set_drive(25e3, 80.0, True)
        plant.advance(3.0)
        first = plant.omega
        plant.set_drive(25e3, 20.0, True)
        plant.advance(3.05)
        ends.append((first, plant.omega))
    for (first, last), braked in zip(ends, (1.0, 0.0), strict=True):

        def slope(_: float, speed: np.ndarray[tuple[int], np.dtype[np.float64]], braked: float = braked) -> list[float]:
            w = float(speed[0])
            amps = braked * (0.2 * 12.0 - 0.0283 * w) / 11.2
            return [(0.0283 * amps - 0.6e-3 - 1.2e-5 * w - 4.0e-8 * w * w) / 7.6e-6]

        exact = solve_ivp(slope, (0.0, 0.05), [first], rtol=1e-9, atol=1e-9).y[0, -1]
        assert last == pytest.approx(float(exact), rel=1e-3)
    assert ends[0][1] < 0.85 * ends[1][1]


def test_a_bridge_at_duty_zero_shorts_the_motor_and_off_frees_it() -> None:
    """Synchronous at duty 0 the motor's terminals are at 0 V and it brakes; with the gate off it coasts."""
    stopped = []
    for on in (True, False):
        plant = Plant(FAN, 2.0, np.random.default_rng(1), stage=SwitchedStage("half_bridge", synchronous=True))
        plant.set_supply(12.0, 3.0, True)
        plant.set_drive(1000.0, 60.0, True)
        plant.advance(2.0)
        plant.set_drive(1000.0, 0.0, on)
        volts = plant.wave().mean_motor_volts
        assert volts == pytest.approx(0.0 if on else 0.0283 * plant.omega, abs=1e-9)
        plant.advance(2.2)
        stopped.append(plant.omega)
    assert stopped[0] < 0.3 * stopped[1]


def test_picture_of_each_stage(tmp_path: Path) -> None:
    """A picture of node, motor voltage and the currents of each stage; what it draws goes to both rails and the gap."""
    stages = {
        "low side, diode": SwitchedStage("low_side_diode", switch_ohms=0.3),
        "half bridge, synchronous, 20 us dead": SwitchedStage("half_bridge", True, switch_ohms=0.3, dead_time_s=2e-5),
        "H bridge, slow, diode": SwitchedStage("h_bridge", switch_ohms=0.3),
        "H bridge, fast, diode": SwitchedStage("h_bridge", fast_decay=True, switch_ohms=0.3),
    }
    figure = Figure(figsize=(12, 9), layout="constrained")
    axes = figure.subplots(2, len(stages), sharex=True, sharey="row")
    times = np.linspace(0.0, 2.0, 1500)
    for column, (name, stage) in enumerate(stages.items()):
        shape = stage.setting(12.0, 6.0, 3e-3, 1000.0, 35.0, True).wave(5.0)
        for row, places in enumerate((VOLTAGES, CURRENTS)):
            for place in places:
                drawn = [shape.value(place, float(at) * 1e-3) for at in times]
                axes[row, column].plot(times, drawn, label=place)
                assert max(drawn) > 0.1
        axes[0, column].set_title(name, fontsize=9)
    for row, unit in enumerate(("V", "A")):
        axes[row, 0].set_ylabel(unit)
        axes[row, 0].legend(fontsize=7)
        axes[1, 0].set_xlabel("ms")
    path = tmp_path / "stages.png"
    figure.savefig(path, dpi=90)
    nodes = [axes[0, column].lines[0].get_ydata() for column in range(len(stages))]
    # a diode above the rail: freewheeling, and in the dead time of the braking half bridge; else the rail, unloaded
    assert [round(float(np.max(node)), 1) for node in nodes] == [12.5, 12.5, 12.0, 12.0]
    assert path.stat().st_size > 20_000
