"""What a scope sees within a PWM period of fans with electronics and of prescribed motors, and its picture."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pytest
from matplotlib.figure import Figure
from scipy.integrate import solve_ivp

from sweeprig.job import load, shipped
from sweeprig.simbench import build
from sweeprig.simbench.probes import SIGNAL_VOLTS, running_volts, volt_seconds
from sweeprig.simbench.waveform import Place

if TYPE_CHECKING:
    from sweeprig.simbench.kinds.stepped import Stepped
    from sweeprig.simbench.waveform import Waveform
    from tests.simbench.kinds.conftest import Kinds

PLACES: tuple[Place, ...] = ("across_motor", "switch_node", "supply_terminals", "motor_lead", "supply_lead")


def shape_of(machine: Stepped) -> Waveform:
    shape = machine.wave()
    assert shape is not None
    return shape


def machines(kinds: type[Kinds]) -> dict[str, Stepped]:
    """Fans and motors in all ways in which the period may look; no friction wanders, so that a second is like the next.

    Frequencies of which a second holds whole periods.
    """
    plain, held = (
        replace(truth, running_friction_spread_percent=0.0, breakaway_friction_spread_percent=0.0)
        for truth in (kinds.electronic_truth, kinds.held_up_truth)
    )
    made = {
        "woken": (kinds.electronic(plain), 300.0, 60.0),
        "woken, soft": (kinds.electronic(replace(plain, soft_start_s=2e-3)), 300.0, 60.0),
        "woken, limited": (kinds.electronic(plain, limit_amps=0.08), 300.0, 80.0),
        "too short to wake": (kinds.electronic(plain), 1000.0, 30.0),
        "held up": (kinds.electronic(replace(held, soft_start_s=0.0)), 25e3, 50.0),
        "held up, limited": (kinds.electronic(replace(held, soft_start_s=0.0), limit_amps=0.1), 25e3, 50.0),
        "held up, resets": (kinds.electronic(replace(held, soft_start_s=0.0)), 100.0, 50.0),
        "steady supply": (kinds.electronic(plain), 1000.0, 100.0),
        "gate off": (kinds.electronic(plain), 1000.0, 0.0),
        "four wires": (kinds.four_wire(replace(kinds.four_wire_truth, speed_spread_percent=0.0)), 25e3, 50.0),
        "prescribed": (kinds.prescribed(), 1000.0, 40.0),
    }
    for machine, pwm_hz, duty in made.values():
        machine.set_drive(pwm_hz, duty, True)
        machine.advance(15.0)
    return {name: machine for name, (machine, _, _) in made.items()}


def test_means_are_those_that_the_machine_integrates(kinds: type[Kinds]) -> None:
    """Settled, a second's integrals grow by the waveform's means, at every place; its own integrals have them too."""
    for name, machine in machines(kinds).items():
        shape = shape_of(machine)

        def read(machine: Stepped = machine) -> list[float]:
            return [machine.motor_volt_seconds, machine.node_volt_seconds, machine.supply_volt_seconds,
                    machine.motor_amp_seconds, machine.supply_amp_seconds]  # fmt: skip

        before = read()
        machine.advance(16.0)
        means = [shape.mean(place) for place in PLACES]
        assert [b - a for a, b in zip(before, read(), strict=True)] == pytest.approx(means, rel=2e-4, abs=2e-6), name
        period = shape.period_s
        for place, mean in zip(PLACES, means, strict=True):
            assert shape.integral(place, 0.3 * period, 5.3 * period) == pytest.approx(5.0 * period * mean, abs=1e-12)
            fine = np.mean([shape.value(place, at * period) for at in (np.arange(4000) + 0.5) / 4000])
            assert mean == pytest.approx(float(fine), rel=2e-3, abs=1e-6), (name, place)


def test_an_on_time_shows_waking_and_then_a_block(kinds: type[Kinds]) -> None:
    """Without a capacitor: nothing but its own 12 mA for 0.4 ms, then (V − E)/R until the supply goes; then nothing."""
    fan = machines(kinds)["woken"]
    shape, t = shape_of(fan), kinds.electronic_truth
    block = (12.0 - t.torque_constant_nm_per_a * fan.omega) / t.resistance_ohm
    assert [shape.value("motor_lead", at) for at in (0.2e-3, 0.5e-3, 1.9e-3, 2.1e-3)] == pytest.approx(
        [0.0, block, block, 0.0]
    )
    assert [shape.value("supply_lead", at) for at in (0.2e-3, 0.5e-3, 2.1e-3)] == pytest.approx(
        [0.012, block + 0.012, 0.0]
    )
    assert [shape.value("across_motor", at) for at in (0.2e-3, 1.9e-3, 2.1e-3)] == [12.0, 12.0, 0.0]
    assert [shape.value("switch_node", at) for at in (0.2e-3, 2.1e-3)] == [0.0, 12.0]


@pytest.mark.parametrize("pwm_hz", [3e3, 25e3])
def test_capacitors_period_against_scipy(kinds: type[Kinds], pwm_hz: float) -> None:
    """Held up: voltage and supply current at 40 phases are those of scipy on C·dv/dt = (V − v)/R − I, settled, to 1e-6.

    Independent method (DOP853, 1e-10): many periods from 12 V on, with the mean current drawn all the time. The spike
    at switching on is the machine's own figure for it.
    """
    t = replace(kinds.held_up_truth, soft_start_s=0.0, running_friction_spread_percent=0.0)
    fan = kinds.electronic(t)
    fan.set_drive(pwm_hz, 50.0, True)
    fan.advance(20.0)
    shape = shape_of(fan)
    drain, volts = shape.mean_supply_amps, 12.0

    def charge(_: float, v: np.ndarray[tuple[int], np.dtype[np.float64]]) -> list[float]:
        return [((12.0 - float(v[0])) / t.charge_ohm - drain) / t.holdup_farad]

    on = 0.5 / pwm_hz
    for _ in range(60):
        done = solve_ivp(charge, (0.0, on), [volts], method="DOP853", rtol=1e-10, atol=1e-12, dense_output=True)
        lowest, volts = volts, float(done.y[0, -1]) - drain * on / t.holdup_farad
    assert volts == pytest.approx(lowest, rel=1e-9)
    for at in np.linspace(0.01, 0.99, 20) * on:
        inside = float(done.sol(at)[0])  # type: ignore[misc]  # asked for by dense_output
        assert shape.value("across_motor", float(at)) == pytest.approx(inside, rel=1e-6)
        assert shape.value("supply_lead", float(at)) == pytest.approx((12.0 - inside) / t.charge_ohm, rel=1e-5)
        falling = float(done.y[0, -1]) - drain * float(at) / t.holdup_farad
        assert shape.value("across_motor", on + float(at)) == pytest.approx(falling, rel=1e-6)
        assert shape.value("supply_lead", on + float(at)) == 0.0
    assert shape.value("supply_lead", 0.0) == pytest.approx(fan.peak_supply_amps, rel=1e-4)
    assert shape.value("supply_lead", 0.0) > 2.0 * drain


def test_prescribed_is_a_plain_square(kinds: type[Kinds]) -> None:
    """The supply's voltage for the on-time, none for the rest, and the current that the law says, evenly."""
    shape = shape_of(machines(kinds)["prescribed"])
    assert [shape.value("across_motor", at) for at in (0.0, 0.39e-3, 0.41e-3, 0.99e-3)] == [12.0, 12.0, 0.0, 0.0]
    assert [shape.value("supply_lead", at) for at in (0.1e-3, 0.9e-3)] == pytest.approx([0.16, 0.0])
    assert shape.valley_amps == shape.peak_amps == pytest.approx(0.16)


def test_a_control_inputs_pwm_is_on_its_line_only() -> None:
    """Across the fan a probe finds the steady supply, on the control line the PWM: 30 % of the signal's level."""
    bench = build(load(shipped("four-wire")))
    bench.plant.set_supply(12.0, 1.5, True)
    bench.plant.set_drive(25e3, 30.0, True)
    bench.signal.change(0.0, 25e3, 30.0, True)
    bench.advance(3.00001)
    times = np.linspace(0.0, 80e-6, 400)
    across, line = (np.diff(running_volts(bench, place)(times)) / np.diff(times) for place in (
        "across_motor", "drive_signal"
    ))  # fmt: skip
    assert across == pytest.approx(np.full(399, 12.0))
    assert set(np.round(line, 6)) >= {0.0, SIGNAL_VOLTS}
    assert np.mean(line) == pytest.approx(0.3 * SIGNAL_VOLTS, rel=0.02)


def test_a_meter_sees_the_period_under_way() -> None:
    """An aperture that ends within an on-time of a chopped fan has the on-time's voltage in it, not the mean's."""
    bench = build(load(shipped("electronic")))
    bench.plant.set_supply(12.0, 1.5, True)
    bench.plant.set_drive(100.0, 60.0, True)
    bench.advance(2.0)
    before = volt_seconds(bench, "across_motor")
    bench.advance(2.005)
    assert volt_seconds(bench, "across_motor") - before == pytest.approx(12.0 * 0.005, rel=1e-6)
    bench.advance(2.01)
    assert volt_seconds(bench, "across_motor") - before == pytest.approx(12.0 * 0.006, rel=1e-6)


def test_picture_of_each_period(kinds: type[Kinds], tmp_path: Path) -> None:
    """A picture of voltage and currents within two periods of each; chopped ones go to zero, steady ones do not."""
    figure = Figure(figsize=(15, 6), layout="constrained")
    shown = ("woken", "held up", "held up, resets", "four wires", "prescribed")
    axes = figure.subplots(2, len(shown))
    found, lowest = machines(kinds), []
    for column, name in enumerate(shown):
        shape = shape_of(found[name])
        times = np.linspace(0.0, 2.0 * shape.period_s, 1000)
        for row, places in enumerate((PLACES[:2], PLACES[3:])):
            for place in places:
                drawn = [shape.value(place, float(at)) for at in times]
                axes[row, column].plot(times * 1e3, drawn, label=place)
            axes[row, column].set_xlabel("ms")
        lowest.append(min(shape.value("across_motor", float(at)) for at in times))
        axes[0, column].set_title(name, fontsize=9)
    for row, unit in enumerate(("V", "A")):
        axes[row, 0].set_ylabel(unit)
        axes[row, 0].legend(fontsize=7)
    figure.suptitle("within a PWM period (SIMULATED)")
    path = tmp_path / "periods.png"
    figure.savefig(path, dpi=90)
    assert path.stat().st_size > 20_000
    assert [round(volts) for volts in lowest] == [0, 12, 4, 12, 0]
