"""The simulated multimeter against a plant with known voltages."""

from __future__ import annotations

import statistics
from typing import TYPE_CHECKING

import pytest

from sweeprig.quantities import Accuracy
from sweeprig.simbench.chopper import chopper, wave

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

QUIET = {"volts_noise_of_range": 0.0}


def driven(bed: Bed, volts: float = 12.0, duty_percent: float = 25.0) -> None:
    bed.plant.set_supply(volts, 1.0, True)
    bed.plant.set_drive(1000.0, duty_percent, True)


def test_a_reading_is_the_mean_over_its_aperture(bed: Bed) -> None:
    """READ? answers at the end of the aperture with the mean in it, also when the drive changes half-way."""
    meter = bed.multimeter(errors=QUIET)
    driven(bed, 12.0, 25.0)
    bed.tell(meter, "CONF:VOLT:DC 100", "SENS:VOLT:DC:APER 0.2")
    began = bed.bench.now

    def more_duty(_: None) -> None:
        bed.bench.plant_now()
        driven(bed, 12.0, 75.0)

    bed.bench.at(began + 0.1, more_duty, None)
    assert float(bed.ask(meter, "READ?")) == pytest.approx(6.0, abs=2e-4)
    assert bed.bench.now == pytest.approx(began + 0.2 + 1e-3, abs=1e-9)


def test_gain_and_offset_errors_are_in_every_reading(bed: Bed) -> None:
    """Stated errors of the rig file's [simulated.NAME] table appear as stated: 3 V × 1.01 + 0.2 V."""
    errors = {**QUIET, "volts_gain_error_percent": 1.0, "volts_offset_error": 0.2}
    meter = bed.multimeter(errors=errors, accuracy={"volts": Accuracy(5.0, 5.0)})
    driven(bed)
    bed.tell(meter, "CONF:VOLT:DC 10")
    assert float(bed.ask(meter, "READ?")) == pytest.approx(3.23, abs=1e-5)


def test_noise_falls_with_the_root_of_the_aperture(bed: Bed) -> None:
    """Standard deviations at 0.1 s and 0.4 s are 0.2 mV and 0.1 mV in the 100 V range (own choice of the model).

    200 readings each; a ratio outside 1.5 to 2.7 has a chance below 1e-5 (F distribution, 199 degrees of freedom).
    """
    meter = bed.multimeter()
    spread = {}
    for aperture in ("0.1", "0.4"):
        bed.tell(meter, "CONF:VOLT:DC 100", f"SENS:VOLT:DC:APER {aperture}")
        spread[aperture] = statistics.stdev(float(bed.ask(meter, "READ?")) for _ in range(200))
    assert spread["0.1"] == pytest.approx(2e-4, rel=0.25)
    assert 1.5 < spread["0.1"] / spread["0.4"] < 2.7


def test_more_than_the_range_holds_is_the_overload_number(bed: Bed) -> None:
    """12 V in the 10 V range (good up to 12 V) reads, 12.1 V is 9.9E37, −12.1 V its negative."""
    meter = bed.multimeter(connected_to="supply_terminals", errors=QUIET)
    bed.tell(meter, "CONF:VOLT:DC 10")
    bed.plant.set_supply(11.9, 1.0, True)
    assert float(bed.ask(meter, "READ?")) == pytest.approx(11.9, abs=1e-5)
    bed.plant.set_supply(12.1, 1.0, True)
    assert bed.ask(meter, "READ?") == "9.90E+37"
    bed.plant.set_supply(-12.1, 1.0, True)
    assert bed.ask(meter, "READ?") == "-9.90E+37"


def test_ranges_are_the_smallest_that_holds_and_autorange_follows(bed: Bed) -> None:
    """RANG 12 gives 100 V; setting a range ends autorange; CONF without a range begins it."""
    meter = bed.multimeter(errors=QUIET)
    bed.tell(meter, "SENS:VOLT:DC:RANG 12")
    assert bed.ask(meter, "SENS:VOLT:DC:RANG?;RANG:AUTO?") == "1.00000000E+02;0"
    bed.tell(meter, "CONF:VOLT:DC")
    assert bed.ask(meter, "SENS:VOLT:DC:RANG:AUTO?") == "1"
    driven(bed, 10.0, 50.0)
    assert float(bed.ask(meter, "READ?")) == pytest.approx(5.0, abs=1e-5)


@pytest.mark.parametrize("message", ["SENS:VOLT:DC:RANG 2000", "SENS:VOLT:DC:APER 60", "SENS:VOLT:DC:APER 0"])
def test_settings_out_of_range_are_refused_and_nothing_changes(bed: Bed, message: str) -> None:
    """-222 in the queue, and range and aperture as before."""
    meter = bed.multimeter()
    before = bed.ask(meter, "SENS:VOLT:DC:RANG?;APER?")
    bed.tell(meter, message)
    assert bed.ask(meter, "SYST:ERR?").startswith("-222,")
    assert bed.ask(meter, "SENS:VOLT:DC:RANG?;APER?") == before


def test_initiate_and_fetch_do_what_read_does(bed: Bed) -> None:
    """FETC? waits for the end of an initiated reading, gives it again later, and has nothing before the first one."""
    meter = bed.multimeter(errors=QUIET)
    driven(bed)
    bed.tell(meter, "CONF:VOLT:DC 10", "SENS:VOLT:DC:APER 0.5")
    assert bed.ask(meter, "FETC?", within_s=1.0) == ""
    assert bed.ask(meter, "SYST:ERR?").startswith("-230,")
    bed.tell(meter, "INIT")
    bed.tell(meter, "INIT")
    assert bed.ask(meter, "SYST:ERR?").startswith("-213,")
    first = bed.ask(meter, "FETC?")
    assert float(first) == pytest.approx(3.0, abs=1e-4)
    assert bed.ask(meter, "FETC?") == first


def test_operation_complete_waits_for_an_initiated_reading(bed: Bed) -> None:
    """*OPC? after INIT answers when the aperture ends; *OPC sets its bit then, not before; *WAI holds what follows."""
    meter = bed.multimeter()
    bed.tell(meter, "*CLS", "SENS:VOLT:DC:APER 1")
    began = bed.bench.now
    assert bed.ask(meter, "INIT;*OPC?") == "1"
    assert bed.bench.now == pytest.approx(began + 1.001, abs=1e-9)
    bed.tell(meter, "INIT;*OPC")
    assert bed.ask(meter, "*ESR?") == "0"
    bed.bench.advance(bed.bench.now + 1.0)
    assert bed.ask(meter, "*ESR?") == "1"
    began = bed.bench.now
    assert bed.ask(meter, "INIT;*WAI;*ESR?") == "0"
    assert bed.bench.now == pytest.approx(began + 1.001, abs=1e-9)


def test_at_the_switch_node_it_reads_supply_less_motor(bed: Bed) -> None:
    """V_node = V_supply − V_motor: 12 V and 25 % give 9 V."""
    meter = bed.multimeter(connected_to="switch_node", errors=QUIET)
    driven(bed)
    bed.tell(meter, "CONF:VOLT:DC 10")
    assert float(bed.ask(meter, "READ?")) == pytest.approx(9.0, abs=1e-4)


def test_an_unconnected_meter_reads_its_own_zero(bed: Bed) -> None:
    """Open leads give the offset error and nothing of the motor."""
    meter = bed.multimeter(connected_to="none", errors={**QUIET, "volts_offset_error": 0.005})
    driven(bed)
    bed.tell(meter, "CONF:VOLT:DC 10")
    assert float(bed.ask(meter, "READ?")) == pytest.approx(0.005, abs=1e-5)


@pytest.mark.parametrize("aperture", [0.02, 0.0237, 0.0005])
def test_an_aperture_that_is_no_whole_number_of_periods_reads_within_the_published_bound(
    bed: Bed, aperture: float
) -> None:
    """The error stays within V·D(1−D)/(fT) for a square wave at any phase, and is zero for whole periods.

    checks.md 11.5 (derived for the project and computed; no outside source). A resistive load far below the back-EMF
    limit makes the motor voltage a square wave of the supply and minus the diode drop.
    """
    hz, duty, volts, drop = 1000.0, 30.0, 12.0, 0.5
    meter = bed.multimeter(errors=QUIET)
    setting = chopper(volts, 6.0, 60e-3, hz, duty, drop)
    bed.plant.present_wave = wave(setting, 0.0)
    mean = bed.plant.present_wave.mean_motor_volts
    assert not bed.plant.present_wave.discontinuous
    bed.plant.phase_of = lambda now: now % (1.0 / hz)
    bed.plant.set_supply(mean, 1.0, True)
    bed.plant.set_drive(hz, 100.0, True)
    bed.tell(meter, "CONF:VOLT:DC 100", f"SENS:VOLT:DC:APER {aperture}")
    errors = []
    for _ in range(40):
        bed.bench.advance(bed.bench.now + 0.01317)
        errors.append(float(bed.ask(meter, "READ?")) - mean)
    bound = (volts + drop) * duty / 100 * (1 - duty / 100) / (hz * aperture)
    whole = abs(hz * aperture - round(hz * aperture)) < 1e-9
    worst = max(map(abs, errors))
    assert worst <= (0.0 if whole else bound) + 1e-4
    assert worst >= (0.0 if whole else 0.2 * bound)
