"""The chopper against published worked examples and circuit simulations by others' tools.

Own derivations are not tested here; they are in tests/simbench.
"""

import math

import pytest

from sweeprig.simbench.chopper import chopper, wave


def test_rashid_example_5_2() -> None:
    """Continuous current without back-EMF: extremes, mean, r.m.s. and supply current of the textbook's example.

    Rashid, Power Electronics, 4th ed., Ex. 5.2: inputs verified in the public worked-solution companion; the printed
    18.37, 25.63, 7.26, 22.1 A are from memory, recomputed to more digits by an independent script. The book's supply
    current 11 A is an approximation (k·Ia); the exact integral is 11.1007 A (independent script).
    """
    shape = wave(chopper(220.0, 5.0, 7.5e-3, 1000.0, 50.0, diode_drop_v=0.0), 0.0)
    assert shape.valley_amps == pytest.approx(18.3669, abs=5e-5)
    assert shape.peak_amps == pytest.approx(25.6331, abs=5e-5)
    assert shape.peak_amps - shape.valley_amps == pytest.approx(7.26618, abs=5e-6)
    assert shape.mean_motor_amps == pytest.approx(22.0, abs=5e-4)
    assert math.sqrt(shape.mean_square_amps) == pytest.approx(22.1005, abs=5e-5)
    assert shape.mean_supply_amps == pytest.approx(11.1007, abs=5e-5)
    assert not shape.discontinuous


def test_bimbhra_example_7_12() -> None:
    """Current-free gap: peak current as published, mean voltage and current as recomputed.

    Bimbhra, Power Electronics, Ex. 7.12: peak 81.5 A published and recomputed; the companion's mean values are wrong,
    103.9469 V and 31.9469 A are from the textbook's formula and from time stepping (independent method).
    """
    setting = chopper(220.0, 1.0, 1e-3, 500.0, 40.0, diode_drop_v=0.0)
    shape = wave(setting, 72.0)
    assert shape.peak_amps == pytest.approx(81.5, abs=0.05)
    assert shape.peak_amps == pytest.approx(81.4993, abs=5e-5)
    assert shape.conduction_s == pytest.approx(1.557030e-3, abs=5e-10)
    assert shape.mean_motor_volts == pytest.approx(103.9469, abs=5e-5)
    assert shape.mean_motor_amps == pytest.approx(31.9469, abs=5e-5)
    at_boundary = chopper(220.0, 1.0, 1e-3, 500.0, 56.424, diode_drop_v=0.0)
    assert at_boundary.boundary_emf == pytest.approx(72.0, abs=72.0 * 2e-5)


def test_continuous_current_against_ngspice() -> None:
    """12 V, 6 ohm, 3 mH, 50 %, 1 kHz, back-EMF 2 V: closed form and ngspice with an ideal diode agree.

    Independent method: closed form by an own script 0.204550, 1.128784, 0.666667 A; ngspice 39.3 0.20409, 1.12853,
    0.66632 A (its switch has a resistance).
    """
    shape = wave(chopper(12.0, 6.0, 3e-3, 1000.0, 50.0, diode_drop_v=0.0), 2.0)
    assert shape.valley_amps == pytest.approx(0.204550, abs=5e-7)
    assert shape.peak_amps == pytest.approx(1.128784, abs=5e-7)
    assert shape.mean_motor_amps == pytest.approx(0.666667, abs=5e-7)
    assert (shape.valley_amps, shape.peak_amps, shape.mean_motor_amps) == pytest.approx(
        (0.20409, 1.12853, 0.66632), rel=3e-3
    )


@pytest.mark.parametrize(
    ("emf", "conduction_s", "peak", "volts", "amps", "spice_amps"),
    [
        (4.0, 0.908620e-3, 0.842827, 6.365521, 0.394253, 0.39415),
        (8.0, 0.637321e-3, 0.421414, 8.901429, 0.150238, 0.15022),
    ],
)
def test_current_free_gap_against_ngspice(
    emf: float, conduction_s: float, peak: float, volts: float, amps: float, spice_amps: float
) -> None:
    """The same winding above the boundary of conduction (E/V = 0.268941): formula values and ngspice (independent)."""
    setting = chopper(12.0, 6.0, 3e-3, 1000.0, 50.0, diode_drop_v=0.0)
    assert setting.boundary_emf / 12.0 == pytest.approx(0.268941, abs=5e-7)
    shape = wave(setting, emf)
    assert shape.discontinuous
    assert shape.conduction_s == pytest.approx(conduction_s, abs=5e-10)
    assert shape.peak_amps == pytest.approx(peak, abs=5e-7)
    assert shape.mean_motor_volts == pytest.approx(volts, abs=5e-7)
    assert shape.mean_motor_amps == pytest.approx(amps, abs=5e-7)
    assert shape.mean_motor_amps == pytest.approx(spice_amps, rel=5e-4)


def test_25_khz_against_ngspice() -> None:
    """At 25 kHz the ripple is small and the freewheel drop decides: 20 % less mean current with a silicon diode.

    Independent method: own script 0.313336, 0.353331, 0.333333 A; ngspice 39.3 with a silicon diode 0.26576 A. Its
    diode's drop at 0.3 A lies between 0.7 and 0.9 V (common practice, no source): so must the model's mean current.
    """
    ideal = wave(chopper(12.0, 6.0, 3e-3, 25e3, 50.0, diode_drop_v=0.0), 4.0)
    assert ideal.valley_amps == pytest.approx(0.313336, abs=5e-7)
    assert ideal.peak_amps == pytest.approx(0.353331, abs=5e-7)
    assert ideal.mean_motor_amps == pytest.approx(0.333333, abs=5e-7)
    low, high = (wave(chopper(12.0, 6.0, 3e-3, 25e3, 50.0, diode_drop_v=drop), 4.0) for drop in (0.9, 0.7))
    assert low.mean_motor_amps < 0.26576 < high.mean_motor_amps


def test_schottky_against_ngspice() -> None:
    """1 kHz, back-EMF 2 V, Schottky diode: ngspice's 0.63466 A lies where drops of 0.3 and 0.5 V put the mean current.

    Independent method (ngspice 39.3); the two drops are common practice, no source.
    """
    low, high = (wave(chopper(12.0, 6.0, 3e-3, 1000.0, 50.0, diode_drop_v=drop), 2.0) for drop in (0.5, 0.3))
    assert low.mean_motor_amps < 0.63466 < high.mean_motor_amps
