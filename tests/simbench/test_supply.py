"""The simulated supply: settings, output, averages, limit."""

from __future__ import annotations

import statistics
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

QUIET = {"volts_noise": 0.0, "amps_noise": 0.0}


def test_settings_reach_the_plant_and_are_read_back_in_whole_steps(bed: Bed) -> None:
    """12.0004 V and 1500 mA are 12.000 V and 1.5 A at the plant and in the answers."""
    supply = bed.bench_supply()
    bed.tell(supply, "SOUR:VOLT 12.0004", "SOUR:CURR 1500 MA", "OUTP ON")
    volts, limit_amps, on = bed.plant.supply
    assert (volts, limit_amps, on) == pytest.approx((12.0, 1.5, True))
    assert bed.ask(supply, "SOUR:VOLT?;:SOUR:CURR?;:OUTP?") == "1.20000E+01;1.50000E+00;1"


def test_switching_is_put_on_record_once_with_its_reason(bed: Bed) -> None:
    """OUTP ON twice is one switching on; *RST switches off, and says so."""
    supply = bed.bench_supply()
    bed.tell(supply, "OUTP ON", "OUTP 1", "*RST", "OUTP OFF")
    assert [(what, why) for _, what, why in bed.bench.record] == [("supply_on", "OUTP ON"), ("supply_off", "*RST")]


def test_a_reset_and_a_power_cycle_leave_the_output_off(bed: Bed) -> None:
    """After a restart the output is off, the plant knows, and the settings are the defaults."""
    supply = bed.bench_supply()
    bed.tell(supply, "SOUR:VOLT 12", "OUTP ON")
    supply.power_on()
    assert bed.plant.supply == pytest.approx((0.0, 0.1, False))
    assert bed.ask(supply, "OUTP?;*ESR?") == "0;128"


def test_measurements_average_a_tenth_of_a_second(bed: Bed) -> None:
    """Voltage and current come 0.1 s later and are means: half that time driven at 50 % gives half of 0.125 A."""
    supply = bed.bench_supply(errors={**QUIET, "volts_offset_error": 0.01})
    bed.tell(supply, "SOUR:VOLT 12", "OUTP ON")
    began = bed.bench.now
    assert float(bed.ask(supply, "MEAS:VOLT?")) == pytest.approx(12.01, abs=1e-5)
    assert bed.bench.now == pytest.approx(began + 0.101, abs=1e-9)
    bed.bench.at(bed.bench.now + 0.05, lambda _: bed.bench.plant_now().set_drive(1e3, 50.0, True), None)
    assert float(bed.ask(supply, "MEAS:CURR?")) == pytest.approx(0.0625, abs=1e-6)


def test_a_limiting_supply_sets_bit_0_and_the_questionable_summary(bed: Bed) -> None:
    """STAT:QUES:COND? is 1 while the limit acts and the output is on, and *STB? shows bit 3."""
    supply = bed.bench_supply()
    bed.tell(supply, "*CLS", "OUTP ON")
    assert bed.ask(supply, "STAT:QUES:COND?;*STB?") == "0;16"
    bed.plant.supply_limited = True
    assert bed.ask(supply, "STAT:QUES:COND?") == "1"
    assert bed.ask(supply, "*STB?") == "8"
    bed.tell(supply, "OUTP OFF")
    assert bed.ask(supply, "STAT:QUES:COND?") == "0"


@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("SOUR:VOLT 33", -222),
        ("SOUR:VOLT -1", -222),
        ("SOUR:CURR 11", -222),
        ("OUTP MAYBE", -224),
        ("SOUR:VOLT 12 HZ", -131),
    ],
)
def test_a_wrong_setting_is_refused_and_nothing_changes(bed: Bed, message: str, code: int) -> None:
    """The standard error number, and the plant untouched."""
    supply = bed.bench_supply()
    bed.tell(supply, message)
    assert bed.ask(supply, "SYST:ERR?").startswith(f"{code},")
    assert bed.plant.settings == []


def test_the_filter_averages_for_longer(bed: Bed) -> None:
    """With a count of 5 a reading comes 0.5 s later and is the mean over that time; *RST sets the count back."""
    supply = bed.bench_supply(errors=QUIET)
    bed.tell(supply, "SOUR:VOLT 12", "OUTP ON", "SENS:AVER:COUN 5")
    began = bed.bench.now
    bed.bench.at(began + 0.1, lambda _: bed.bench.plant_now().set_drive(1e3, 50.0, True), None)
    driven = float(bed.ask(supply, "MEAS:CURR?"))
    assert bed.bench.now - began == pytest.approx(0.5, abs=0.01)
    # four fifths of the time driven; the fake plant draws 0.125 A then (as in the test of a tenth of a second)
    assert driven == pytest.approx(0.8 * 0.125, abs=1e-6)
    assert bed.ask(supply, "SENS:AVER:COUN?") == "5"
    bed.tell(supply, "*RST")
    assert bed.ask(supply, "SENS:AVER:COUN?") == "1"


def test_the_filter_takes_noise_down(bed: Bed) -> None:
    """100 values averaged scatter a tenth as much: sample standard deviations of 60 readings each, ratio 10 within
    10/1.7 to 10·1.7 (seeded; chance of a false alarm about 1e-4: the F distribution with 59 and 59 degrees)."""
    supply = bed.bench_supply(errors={"amps_noise": 1e-2, "volts_noise": 0.0})
    scatter = []
    for count in (1, 100):
        bed.tell(supply, f"SENS:AVER:COUN {count}")
        scatter.append(statistics.stdev(float(bed.ask(supply, "MEAS:CURR?")) for _ in range(60)))
    assert 10.0 / 1.7 < scatter[0] / scatter[1] < 10.0 * 1.7
