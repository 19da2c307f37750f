"""Switched stages: against scipy on Kirchhoff's laws, their balances, their limits, and the plain stage as a case."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from sweeprig.errors import ConfigError
from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.chopper import chopper, mean_current, mean_supply_current, wave
from sweeprig.simbench.switched import Branch, Phase, SwitchedSetting

if TYPE_CHECKING:
    from tests.figures.circuits import Circuit

STAGES = {
    "low side": SwitchedStage("low_side_diode", False, False, 0.15, 0.6, 0.08, 0.0, 0.0, 0.2),
    "half, diode": SwitchedStage("half_bridge", False, False, 0.15, 0.6, 0.08, 0.0, 0.0, 0.2),
    "half, dead time": SwitchedStage("half_bridge", True, False, 0.15, 0.6, 0.08, 2e-6, 0.0, 0.2),
    "full, slow": SwitchedStage("h_bridge", True, False, 0.15, 0.6, 0.08, 2e-6, 0.0, 0.2),
    "full, fast, diode": SwitchedStage("h_bridge", False, True, 0.15, 0.6, 0.08, 0.0, 0.0, 0.2),
    "full, fast": SwitchedStage("h_bridge", True, True, 0.15, 0.6, 0.08, 2e-6, 0.0, 0.2),
}
POINTS = [(300.0, 12.0, 0.3), (300.0, 40.0, 8.0), (1000.0, 40.0, 4.0), (1000.0, 85.0, 13.0), (25e3, 40.0, 4.8)]
R, L = 6.0, 3e-3


@pytest.fixture(scope="module")
def kirchhoff(reference: Callable[[str], Any]) -> Any:
    return reference("circuits")


def setting(name: str, pwm_hz: float, duty: float) -> SwitchedSetting:
    return STAGES[name].setting(12.0, R, L, pwm_hz, duty, True)


def circuit(kirchhoff: Any, name: str, pwm_hz: float, duty: float) -> Circuit:
    s = STAGES[name]
    made: Circuit = kirchhoff.Circuit(
        s.kind, 12.0, R, L, pwm_hz, duty, s.switch_ohms, s.diode_volts, s.diode_ohms, s.supply_ohms, s.dead_time_s,
        s.synchronous, s.fast_decay,
    )  # fmt: skip
    return made


@pytest.mark.parametrize("name", STAGES)
@pytest.mark.parametrize(("pwm_hz", "duty", "emf"), POINTS)
def test_against_scipy_on_kirchhoffs_laws(kirchhoff: Any, name: str, pwm_hz: float, duty: float, emf: float) -> None:
    """One period integrated from the stated current comes back to it and gives the stated means, to 1e-8.

    Independent method: each half bridge's output from gates, current and diode law, by scipy's DOP853 at rtol 1e-10
    restarted at every switching moment and zero. The map of a period contracts, so what comes back is the only one.
    """
    shape = setting(name, pwm_hz, duty).wave(emf)
    found = kirchhoff.one_period(circuit(kirchhoff, name, pwm_hz, duty), emf, shape.value("motor_lead", 0.0))
    scale = max(shape.peak_amps, -shape.valley_amps, 1e-3)
    assert found["end"] == pytest.approx(shape.value("motor_lead", 0.0), abs=1e-8 * scale)
    assert found["amps"] == pytest.approx(shape.mean_motor_amps, abs=1e-8 * scale)
    assert found["supply"] == pytest.approx(shape.mean_supply_amps, abs=1e-8 * scale)
    assert found["volts"] == pytest.approx(shape.mean_motor_volts, abs=1e-7)
    assert found["square"] == pytest.approx(shape.mean_square_amps, abs=1e-8 * scale**2)
    assert found["valley"] == pytest.approx(shape.valley_amps, abs=1e-8 * scale)
    assert found["peak"] == pytest.approx(shape.peak_amps, abs=1e-8 * scale)


@pytest.mark.parametrize("name", STAGES)
def test_short_forms_agree_with_the_waveform(name: str) -> None:
    """Mean current, its derivative and the supply's current agree with the waveform at any back-EMF, of either sign.

    The grid misses the back-EMFs at which conduction begins (12 V and those a drop away): the derivative jumps there.
    """
    for (pwm_hz, duty), emf in itertools.product([(300.0, 30.0), (25e3, 60.0)], np.linspace(-3.03, 14.01, 35)):
        one = setting(name, pwm_hz, duty)
        shape = one.wave(float(emf))
        amps, slope = one.mean_current(float(emf))
        assert amps == pytest.approx(shape.mean_motor_amps, rel=1e-9, abs=1e-12)
        assert one.mean_supply_current(float(emf)) == pytest.approx(shape.mean_supply_amps, rel=1e-9, abs=1e-12)
        secant = (one.mean_current(float(emf) + 1e-6)[0] - one.mean_current(float(emf) - 1e-6)[0]) / 2e-6
        assert slope == pytest.approx(secant, rel=1e-3, abs=1e-6)


@pytest.mark.parametrize("name", STAGES)
def test_means_by_place_agree(name: str) -> None:
    """Voltages and currents by place have the stated means, and the node follows from supply, motor and current."""
    of_supply, of_motor, ohms = STAGES[name].node
    for emf in (0.5, 5.0, 11.0, 13.5):
        shape = setting(name, 1000.0, 35.0).wave(emf)
        period = shape.period_s
        for place in ("across_motor", "motor_lead", "switch_shunt", "supply_lead"):
            assert shape.mean(place) == pytest.approx(shape.integral(place, 0.0, period) / period, abs=1e-10)
            assert shape.integral(place, 0.3 * period, 7.3 * period) == pytest.approx(7.0 * period * shape.mean(place))
        assert shape.mean("supply_terminals") == pytest.approx(12.0 - 0.2 * shape.mean_supply_amps, abs=1e-10)
        node = of_supply * shape.mean("supply_terminals") + of_motor * shape.mean_motor_volts
        assert shape.mean("switch_node") == pytest.approx(node + ohms * shape.mean_motor_amps, abs=1e-10)


@pytest.mark.parametrize("name", STAGES)
def test_energy_of_a_period(name: str) -> None:
    """Supply energy = winding and switch heat + mechanical work + diode losses, from the waveform's own segments.

    The integrals are fine sums over the phase-resolved values (independent of the closed integrals), to 0.1 %.
    """
    shape = setting(name, 1000.0, 35.0).wave(3.0)
    grid = (np.arange(20_000) + 0.5) * shape.period_s / 20_000
    amps, supply, motor, rail = (
        np.array([shape.value(place, float(t)) for t in grid])
        for place in ("motor_lead", "supply_lead", "across_motor", "supply_terminals")
    )
    given, taken = float(np.mean(rail * supply)), float(np.mean(motor * amps))
    assert taken == pytest.approx(R * shape.mean_square_amps + 3.0 * shape.mean_motor_amps, rel=1e-3)
    assert 0.0 < given - taken < 0.4 * given  # drops only ever take


@pytest.mark.parametrize(("pwm_hz", "duty"), [(300.0, 10.0), (1000.0, 35.0), (25e3, 20.0), (1000.0, 100.0)])
def test_ideal_parts_are_the_plain_stage(pwm_hz: float, duty: float) -> None:
    """Without resistances a switched low-side stage is the closed form of the plain one, below the supply's voltage."""
    one = SwitchedStage("low_side_diode").setting(12.0, R, L, pwm_hz, duty, True)
    plain = chopper(12.0, R, L, pwm_hz, duty)
    for emf in np.linspace(0.0, 11.9, 25):
        assert one.mean_current(float(emf)) == pytest.approx(mean_current(plain, float(emf)), rel=1e-9, abs=1e-12)
        assert one.mean_supply_current(float(emf)) == pytest.approx(mean_supply_current(plain, float(emf)), abs=1e-12)
        ours, theirs = one.wave(float(emf)), wave(plain, float(emf))
        for field in ("valley_amps", "peak_amps", "mean_motor_volts", "mean_square_amps"):
            assert getattr(ours, field) == pytest.approx(getattr(theirs, field), rel=1e-9, abs=1e-12)
        for phase in np.linspace(0.03, 0.97, 15) / pwm_hz:
            for place in ("across_motor", "switch_node", "motor_lead", "supply_lead"):
                assert ours.value(place, float(phase)) == pytest.approx(theirs.value(place, float(phase)), abs=1e-9)


def test_ideal_synchronous_half_bridge_brakes() -> None:
    """Mean current (D·V − E)/R of either sign; above D·V the motor is a generator that feeds the supply.

    Own derivation: an ideal half bridge puts D·V across the motor whatever the current.
    """
    one = SwitchedStage("half_bridge", synchronous=True).setting(12.0, R, L, 25e3, 25.0, True)
    for emf in (0.0, 2.0, 3.0, 8.0):
        assert one.mean_current(emf) == pytest.approx(((3.0 - emf) / R, -1.0 / R), rel=1e-12)
    assert one.mean_supply_current(8.0) == pytest.approx(0.25 * -5.0 / R, rel=0.01)
    shape = one.wave(8.0)
    assert 12.0 * shape.mean_supply_amps == pytest.approx(
        R * shape.mean_square_amps + 8.0 * shape.mean_motor_amps, rel=1e-9
    )


def test_dead_time_is_a_duty_error() -> None:
    """With current flowing forward, a dead time of 1 us costs 2.5 % duty at 25 kHz: (V + Vf)·t·f less mean voltage.

    Bench practice's 2.5 %; the voltage from the upper switch's later closing and the diode's drop in both gaps.
    """
    with_dead = SwitchedStage("half_bridge", synchronous=True, dead_time_s=1e-6).setting(12.0, R, L, 25e3, 50.0, True)
    without = SwitchedStage("half_bridge", synchronous=True).setting(12.0, R, L, 25e3, 50.0, True)
    lost = without.wave(2.0).mean_motor_volts - with_dead.wave(2.0).mean_motor_volts
    assert lost == pytest.approx(1e-6 * 25e3 * (12.0 + 2.0 * 0.5), rel=1e-9)
    braking = with_dead.wave(9.0).mean_motor_volts - without.wave(9.0).mean_motor_volts
    assert braking == pytest.approx(1e-6 * 25e3 * (12.0 + 2.0 * 0.5), rel=1e-9)


@pytest.mark.parametrize(("pwm_hz", "percent"), [(1000.0, 0.1), (25e3, 2.5)])
def test_switch_delay_is_a_duty_error(pwm_hz: float, percent: float) -> None:
    """A switch that opens 1 us late adds 0.1 % duty at 1 kHz and 2.5 % at 25 kHz (bench practice's figures)."""
    late = SwitchedStage("low_side_diode", on_time_error_s=1e-6).setting(12.0, R, L, pwm_hz, 40.0, True)
    longer = SwitchedStage("low_side_diode").setting(12.0, R, L, pwm_hz, 40.0 + percent, True)
    assert late.mean_current(1.0)[0] == pytest.approx(longer.mean_current(1.0)[0], rel=1e-9)
    off = SwitchedStage("low_side_diode", on_time_error_s=1e-6).setting(12.0, R, L, pwm_hz, 0.0, True)
    assert off.mean_current(1.0)[0] == 0.0
    never = SwitchedStage("low_side_diode", on_time_error_s=-1e-3).setting(12.0, R, L, 25e3, 40.0, True)
    assert never.mean_current(1.0)[0] == 0.0


def test_fast_decay_empties_the_winding_sooner() -> None:
    """In fast decay the current reaches zero sooner than in slow decay, and what it held goes back to the supply."""
    slow, fast = (
        SwitchedStage("h_bridge", fast_decay=fast).setting(12.0, R, L, 300.0, 20.0, True).wave(4.0)
        for fast in (False, True)
    )
    assert fast.mean_motor_amps < slow.mean_motor_amps
    assert fast.value("supply_lead", 0.75e-3) < 0.0 == slow.value("supply_lead", 0.75e-3)
    ends = [shape.segments()[-1].begin_s for shape in (slow, fast)]
    at_peak = (12.0 - 4.0) / R * -math.expm1(-0.2 / 300.0 * R / L)
    for end, pulling in zip(ends, (4.5, 17.0), strict=True):
        # own derivation: from the peak, L·di/dt + R·i = −(E + Vf), or −(E + V + 2·Vf) in fast decay
        assert end == pytest.approx(0.2 / 300.0 + L / R * math.log1p(at_peak * R / pulling), rel=1e-9)


class Clamped:
    """A stage whose off-time has unlike circuits for the two signs of the current, so that it flows through zero."""

    node, supply_ohms = (1.0, -1.0, 0.0), 0.0

    def setting(self, volts: float) -> SwitchedSetting:
        on = Branch(volts, 0.0, 0.0, 0.0, 1.0)
        off = Phase(0.6e-3, Branch(-1.0, 0.0, 0.0, 0.0, 0.0), Branch(2.0, 9.0, 0.0, 0.0, 0.0))
        return SwitchedSetting(self, volts, R, L, (Phase(0.4e-3, on, on), off), False, self.setting)


@pytest.mark.parametrize("conducts", [True, False])
def test_another_voltage_changes_nothing_else(conducts: bool) -> None:
    """A setting moved to another voltage is the one made for that voltage, also with the gate off."""
    stage = SwitchedStage("half_bridge", synchronous=True, holds_bus=True)
    moved = stage.setting(12.0, R, L, 1000.0, 60.0, conducts).at_volts(7.0)
    made = stage.setting(7.0, R, L, 1000.0, 60.0, conducts)
    for emf in (0.0, 3.0, 7.2, 9.0):
        assert moved.wave(emf) == made.wave(emf)
    assert made.mean_current(6.0)[0] < 0.0 or not conducts


def test_current_through_zero_into_another_circuit() -> None:
    """Where the current goes on through zero into an unlike circuit, its derivative is still the secant's."""
    one = Clamped().setting(12.0)
    for emf in (3.0, 5.0, 8.0):
        shape = one.wave(emf)
        assert shape.valley_amps < 0.0 < shape.peak_amps
        secant = (one.mean_current(emf + 1e-6)[0] - one.mean_current(emf - 1e-6)[0]) / 2e-6
        assert one.mean_current(emf)[1] == pytest.approx(secant, rel=1e-5)


@pytest.mark.parametrize("name", STAGES)
def test_current_limit_is_just_met(name: str) -> None:
    """On the limited voltage the mean supply current is the limit."""
    one = setting(name, 1000.0, 70.0)
    limit = 0.4 * one.mean_supply_current(1.0)
    lowered = one.limited(1.0, limit)
    assert lowered.supply_volts < 12.0
    assert lowered.mean_supply_current(1.0) == pytest.approx(limit, rel=1e-8)


def test_what_cannot_be_wired_is_refused() -> None:
    """A low-side switch with a second switch, and fast decay without an H bridge, are config errors with the remedy."""
    with pytest.raises(ConfigError, match=r"no second switch.*diode"):
        SwitchedStage("low_side_diode", synchronous=True)
    with pytest.raises(ConfigError, match=r"only an H bridge.*h_bridge"):
        SwitchedStage("half_bridge", fast_decay=True)
