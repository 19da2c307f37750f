"""The chopper's waveform: balances, its short forms, and a fine time-stepping of the switched equations."""

import math

import numpy as np
import pytest

from sweeprig.simbench.chopper import (
    Chopper,
    chopper,
    mean_current,
    mean_supply_current,
    motor_current,
    motor_voltage,
    motor_voltage_integral,
    on_volts_at_limit,
    wave,
)

CASES = [(12.0, 300.0, 10.0), (12.0, 1000.0, 35.0), (12.0, 25e3, 20.0), (5.0, 300.0, 70.0), (12.0, 1.0, 50.0)]


def fan(supply_v: float, pwm_hz: float, duty_percent: float) -> Chopper:
    return chopper(supply_v, 11.6, 0.016, pwm_hz, duty_percent)


def stepped(setting: Chopper, emf: float, steps: int = 20_000) -> tuple[float, float, float, float]:
    """(motor A, supply A, motor V, peak A) of the switched equations by midpoint steps, over the last of many periods.

    The diode is a clamp: the current cannot fall below zero. Independent method: no formula of `wave` is used.
    """
    h, current = setting.period_s / steps, 0.0
    on_steps = round(setting.on_s / h)
    for _ in range(1 + math.ceil(12.0 * setting.tau_s / setting.period_s)):
        amps = supply = volts = peak = 0.0
        for step in range(steps):
            across = setting.on_volts if step < on_steps else -setting.diode_drop_v
            if current <= 0.0 and across < emf:
                volts += emf
                continue
            inductance = setting.tau_s * setting.resistance_ohm
            half = current + 0.5 * h * (across - emf - setting.resistance_ohm * current) / inductance
            after = max(0.0, current + h * (across - emf - setting.resistance_ohm * half) / inductance)
            amps += 0.5 * (current + after)
            supply += 0.5 * (current + after) if step < on_steps else 0.0
            volts += across
            current = after
            peak = max(peak, current)
    return amps / steps, supply / steps, volts / steps, peak


@pytest.mark.parametrize(
    ("setting", "emf", "steps"),
    [
        (fan(12.0, 300.0, 10.0), 0.7, 20_000),
        (fan(12.0, 300.0, 50.0), 8.0, 20_000),
        (fan(12.0, 1000.0, 40.0), 0.0, 8_000),
        (fan(12.0, 25e3, 20.0), 1.0, 200),
    ],
)
def test_against_fine_time_stepping(setting: Chopper, emf: float, steps: int) -> None:
    """Means and peak agree with time-stepped switched equations to 0.1 %, with and without a current-free gap.

    Independent method; its own error (a step where the diode opens) is below 1/steps of the conduction time.
    """
    shape = wave(setting, emf)
    amps, supply, volts, peak = stepped(setting, emf, steps)
    assert shape.mean_motor_amps == pytest.approx(amps, rel=1e-3)
    assert shape.mean_supply_amps == pytest.approx(supply, rel=1e-3)
    assert shape.mean_motor_volts == pytest.approx(volts, rel=1e-3)
    assert shape.peak_amps == pytest.approx(peak, rel=1e-3)


def test_where_the_ammeter_sits() -> None:
    """12 V, 6 ohm, 3 mH, 0.5 V diode, 300 Hz, 30 %, back-EMF 4 V: motor 0.295 A, supply 0.227 A, mean 5.77 V.

    Bench practice's example, three digits, computed by another script (derived for this project).
    """
    shape = wave(chopper(12.0, 6.0, 3e-3, 300.0, 30.0, diode_drop_v=0.5), 4.0)
    assert shape.mean_motor_amps == pytest.approx(0.295, abs=5e-4)
    assert shape.mean_supply_amps == pytest.approx(0.227, abs=5e-4)
    assert shape.mean_motor_volts == pytest.approx(5.77, abs=5e-3)


@pytest.mark.parametrize(("supply_v", "pwm_hz", "duty"), CASES)
def test_power_balance(supply_v: float, pwm_hz: float, duty: float) -> None:
    """Supply power = winding heat + mechanical power + diode loss: V·Is = R·<i²> + E·I + Vf·(I − Is), any back-EMF."""
    setting = fan(supply_v, pwm_hz, duty)
    for emf in np.linspace(0.0, supply_v * 1.1, 45):
        shape = wave(setting, float(emf))
        spent = (
            setting.resistance_ohm * shape.mean_square_amps
            + emf * shape.mean_motor_amps
            + setting.diode_drop_v * (shape.mean_motor_amps - shape.mean_supply_amps)
        )
        assert setting.on_volts * shape.mean_supply_amps == pytest.approx(spent, rel=1e-9, abs=1e-13)


@pytest.mark.parametrize(("supply_v", "pwm_hz", "duty"), CASES)
def test_short_forms_agree_with_the_wave(supply_v: float, pwm_hz: float, duty: float) -> None:
    """`mean_current` and `mean_supply_current` give the wave's means; the derivative is the secant's."""
    setting = fan(supply_v, pwm_hz, duty)
    edge = setting.boundary_emf
    emfs = [
        float(e) for e in np.linspace(0.0, supply_v * 1.05, 40) if abs(e - edge) > 1e-3 and abs(e - supply_v) > 1e-3
    ]
    for emf in emfs:
        amps, slope = mean_current(setting, emf)
        assert amps == pytest.approx(wave(setting, emf).mean_motor_amps, rel=1e-9, abs=1e-12)
        assert mean_supply_current(setting, emf) == pytest.approx(wave(setting, emf).mean_supply_amps, rel=1e-9)
        secant = (mean_current(setting, emf + 1e-5)[0] - mean_current(setting, emf - 1e-5)[0]) / 2e-5
        assert slope == pytest.approx(secant, rel=1e-4, abs=1e-8)


@pytest.mark.parametrize(("supply_v", "pwm_hz", "duty"), CASES)
def test_no_jump_at_the_boundary_of_conduction(supply_v: float, pwm_hz: float, duty: float) -> None:
    """Continuous and discontinuous formulas meet at the boundary back-EMF."""
    setting = fan(supply_v, pwm_hz, duty)
    below, above = wave(setting, setting.boundary_emf - 1e-9), wave(setting, setting.boundary_emf + 1e-9)
    for name in ("mean_motor_amps", "mean_supply_amps", "mean_motor_volts", "mean_square_amps", "peak_amps"):
        assert getattr(below, name) == pytest.approx(getattr(above, name), rel=1e-6, abs=1e-8)
    assert below.valley_amps == pytest.approx(0.0, abs=1e-9)


def test_ends_of_the_duty_range() -> None:
    """Duty 0 leaves the back-EMF and no current; duty 100 is direct current; above the supply nothing flows."""
    off = wave(fan(12.0, 1000.0, 0.0), 3.0)
    assert (off.mean_motor_volts, off.mean_motor_amps, off.peak_amps) == (3.0, 0.0, 0.0)
    full = wave(fan(12.0, 1000.0, 100.0), 3.0)
    for amps in (full.valley_amps, full.peak_amps, full.mean_motor_amps, full.mean_supply_amps):
        assert amps == pytest.approx(9.0 / 11.6, rel=1e-9)
    assert full.mean_square_amps == pytest.approx((9.0 / 11.6) ** 2, rel=1e-9)
    pumped = wave(fan(12.0, 1000.0, 50.0), 13.0)
    assert (pumped.mean_motor_volts, pumped.mean_motor_amps, pumped.mean_supply_amps) == (13.0, 0.0, 0.0)


@pytest.mark.parametrize("emf", [0.7, 9.0])
def test_voltage_integral_is_the_voltage_integrated(emf: float) -> None:
    """The closed integral equals a fine sum of the phase-resolved voltage, over any part of many periods."""
    shape = wave(fan(12.0, 300.0, 35.0), emf)
    rng = np.random.default_rng(5)
    for begin, length in rng.uniform(0.0, 0.012, size=(5, 2)):
        grid = begin + length * (np.arange(40_000) + 0.5) / 40_000
        summed = sum(motor_voltage(shape, float(t)) for t in grid) * length / 40_000
        # each of at most 12 switching moments is misplaced by half a step of the sum at most, 12.5 V high
        bound = 12 * 12.5 * 0.5 * length / 40_000
        assert motor_voltage_integral(shape, begin, begin + length) == pytest.approx(summed, abs=bound)


def test_current_waveform_meets_its_own_marks() -> None:
    """The phase-resolved current starts at the valley, peaks when the switch opens and is zero in the gap."""
    shape = wave(fan(12.0, 300.0, 35.0), 8.0)
    on = shape.chopper.on_s
    assert motor_current(shape, 0.0) == pytest.approx(shape.valley_amps, abs=1e-12)
    assert motor_current(shape, on) == pytest.approx(shape.peak_amps, rel=1e-9)
    assert motor_current(shape, shape.conduction_s - 1e-9) == pytest.approx(0.0, abs=1e-5)
    assert motor_current(shape, 0.5 * (shape.conduction_s + shape.chopper.period_s)) == 0.0
    grid = (np.arange(20_000) + 0.5) * shape.chopper.period_s / 20_000
    assert np.mean([motor_current(shape, float(t)) for t in grid]) == pytest.approx(shape.mean_motor_amps, rel=1e-4)


@pytest.mark.parametrize(("pwm_hz", "duty", "emf"), [(300.0, 20.0, 5.0), (300.0, 60.0, 0.5), (25e3, 60.0, 0.5)])
def test_current_limit_is_just_met(pwm_hz: float, duty: float, emf: float) -> None:
    """At the limited on-voltage the mean supply current is the limit, in both kinds of operation."""
    limit = 0.4 * mean_supply_current(fan(12.0, pwm_hz, duty), emf)
    volts = on_volts_at_limit(fan(12.0, pwm_hz, duty), emf, limit)
    assert volts < 12.0
    assert mean_supply_current(fan(volts, pwm_hz, duty), emf) == pytest.approx(limit, rel=1e-9)


def test_switch_drop_lowers_the_on_voltage_only() -> None:
    """A switch drop acts like a lower supply during the on-time."""
    dropped = chopper(12.0, 11.6, 0.016, 1000.0, 40.0, switch_drop_v=0.3)
    assert wave(dropped, 2.0) == wave(chopper(11.7, 11.6, 0.016, 1000.0, 40.0), 2.0)
