"""The option `averaging`: the instrument's own filter takes the mean of a window, on scripted instruments."""

from __future__ import annotations

import copy
from dataclasses import replace

import pytest
from sweeprig_drivers.common import MOST_AVERAGED
from sweeprig_drivers.multimeter import ScpiMultimeter
from sweeprig_drivers.supply import ScpiSupply

from sweeprig.conformance import Scripted, perform
from sweeprig.errors import ConfigError, InstrumentRefused
from sweeprig.roles import AdapterSetup, Window

IN_INSTRUMENT = {"averaging": "instrument"}


@pytest.fixture
def averaging_meter(setups: dict[str, AdapterSetup], meter: Scripted) -> ScpiMultimeter:
    meter.settings["SENS:AVER:COUN"] = "1"
    setup = setups["meter"]
    return ScpiMultimeter(replace(setup, options={**setup.options, **IN_INSTRUMENT}))


@pytest.fixture
def averaging_supply(setups: dict[str, AdapterSetup], supply: Scripted) -> ScpiSupply:
    supply.settings["SENS:AVER:COUN"] = "1"
    return ScpiSupply(replace(setups["supply"], options=IN_INSTRUMENT))


def test_one_reading_fills_a_window(averaging_meter: ScpiMultimeter, meter: Scripted) -> None:
    """One second at an aperture of 0.2 s is one reading of five apertures, which its ask waits for."""
    reading = perform(averaging_meter.measure(Window(1.0)), meter)["volts"]
    assert meter.sent == [b"SENS:AVER:COUN 5", b"SENS:AVER:COUN?", b"READ?"]
    assert (reading.value, reading.raw) == (5.0, "+5.0000E+00")
    assert next(averaging_meter.measure(Window(1.0))).within_s == pytest.approx(5 * 0.2 + 1.0)


def test_the_filter_is_set_when_another_window_comes_and_only_then(
    averaging_meter: ScpiMultimeter, meter: Scripted
) -> None:
    """Equal windows cost one message each; after a new configuration nothing is taken for granted."""
    for seconds in (1.0, 1.0, 0.4):
        perform(averaging_meter.measure(Window(seconds)), meter)
    assert meter.sent[2:] == [b"READ?", b"READ?", b"SENS:AVER:COUN 2", b"SENS:AVER:COUN?", b"READ?"]
    perform(averaging_meter.configure(), meter)
    meter.sent.clear()
    perform(averaging_meter.measure(Window(0.4)), meter)
    assert meter.sent == [b"SENS:AVER:COUN 2", b"SENS:AVER:COUN?", b"READ?"]


def test_a_filter_that_reads_back_differently_is_refused(averaging_meter: ScpiMultimeter, meter: Scripted) -> None:
    """Another number of apertures than the one asked for is no mean over the window. What the filter is at is not known
    then: the next window sets it, also one of the number that it was at before."""
    perform(averaging_meter.measure(Window(0.4)), meter)
    meter.answers["SENS:AVER:COUN?"] = "4"
    with pytest.raises(InstrumentRefused, match="number averaged was set to 5"):
        perform(averaging_meter.measure(Window(1.0)), meter)
    del meter.answers["SENS:AVER:COUN?"]
    meter.sent.clear()
    perform(averaging_meter.measure(Window(0.4)), meter)
    assert meter.sent == [b"SENS:AVER:COUN 2", b"SENS:AVER:COUN?", b"READ?"]


def test_a_long_window_takes_several_readings(averaging_meter: ScpiMultimeter, meter: Scripted) -> None:
    """300 s are 1,500 apertures: fifteen readings of a hundred each, the most that is asked of a filter."""
    perform(averaging_meter.measure(Window(300.0)), meter)
    assert MOST_AVERAGED == 100
    assert meter.sent == [b"SENS:AVER:COUN 100", b"SENS:AVER:COUN?", *[b"READ?"] * 15]


def test_one_pair_fills_the_window_of_a_supply(averaging_supply: ScpiSupply, supply: Scripted) -> None:
    """A window of 1 s is voltage and current, each averaged over 0.5 s, and one look at the status."""
    readings = perform(averaging_supply.measure(Window(1.0)), supply)
    assert supply.sent == [b"SENS:AVER:COUN 5", b"SENS:AVER:COUN?", b"MEAS:VOLT?", b"MEAS:CURR?", b"STAT:QUES:COND?"]
    assert (readings["volts"].value, readings["amps"].value) == (12.001, 0.25)
    assert next(averaging_supply.measure(Window(1.0))).within_s == pytest.approx(2.0 + 5 * 0.1)


def test_supply_window_after_configuring(averaging_supply: ScpiSupply, supply: Scripted) -> None:
    """Configuring forgets what the filter was set to."""
    perform(averaging_supply.measure(Window(1.0)), supply)
    perform(averaging_supply.configure(), supply)
    supply.sent.clear()
    perform(averaging_supply.measure(Window(1.0)), supply)
    assert supply.sent[0] == b"SENS:AVER:COUN 5"


@pytest.mark.parametrize(("name", "kind"), [("meter", ScpiMultimeter), ("supply", ScpiSupply)])
def test_a_dialect_without_the_filter_is_refused(
    setups: dict[str, AdapterSetup], name: str, kind: type[ScpiMultimeter] | type[ScpiSupply]
) -> None:
    """What the dialect cannot spell is refused when the rig opens, never ignored."""
    dialect = copy.deepcopy(dict(setups[name].dialect))
    commands = dialect["commands"]
    assert isinstance(commands, dict)
    del commands["average_query"]
    options = {**setups[name].options, **IN_INSTRUMENT}
    with pytest.raises(ConfigError, match=f"{name}: the dialect does not say how this instrument averages"):
        kind(replace(setups[name], options=options, dialect=dialect))
