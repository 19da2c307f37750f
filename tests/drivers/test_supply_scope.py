"""The supply and the scope adapters on scripted instruments."""

from __future__ import annotations

import math
from contextlib import nullcontext
from dataclasses import replace

import pytest
from sweeprig_drivers.scope import ScpiScope
from sweeprig_drivers.supply import ScpiSupply

from sweeprig.conformance import Scripted, perform
from sweeprig.errors import ConfigError, InstrumentRefused, LinkGarbled, OffNotProved
from sweeprig.roles import AdapterSetup, Reply, Supply, SupplySetting, Window


@pytest.fixture
def adapter(setups: dict[str, AdapterSetup]) -> ScpiSupply:
    return ScpiSupply(setups["supply"])


def test_apply_sets_the_limit_before_the_voltage(adapter: ScpiSupply, supply: Scripted) -> None:
    """Each is read back, and the values read back are returned."""
    readings = perform(adapter.apply(SupplySetting(12.0, 1.5)), supply)
    assert supply.sent == [b"SOUR:CURR 1.5", b"SOUR:CURR?", b"SOUR:VOLT 12", b"SOUR:VOLT?"]
    assert {key: (each.value, each.unit, each.channel) for key, each in readings.items()} == {
        "volts_set": (12.0, "V", "supply.volts_set"),
        "amps_limit": (1.5, "A", "supply.amps_limit"),
    }


@pytest.mark.parametrize(("text", "taken"), [("12.001", True), ("11.9990", True), ("12.01", False), ("1.2", False)])
def test_a_voltage_is_confirmed_within_its_resolution(
    adapter: ScpiSupply, supply: Scripted, text: str, taken: bool
) -> None:
    """One step of 1 mV is a rounding, more is a refusal."""
    supply.answers["SOUR:VOLT?"] = text
    with nullcontext() if taken else pytest.raises(InstrumentRefused):
        perform(adapter.apply(SupplySetting(12.0, 1.5)), supply)
    assert supply.sent[-1] == (b"SOUR:VOLT?" if taken else b"SYST:ERR?")


def test_a_coarser_resolution_can_be_stated(setups: dict[str, AdapterSetup], supply: Scripted) -> None:
    """A supply that sets whole 10 mV is told so in the rig file."""
    adapter = ScpiSupply(replace(setups["supply"], options={"volts_resolution": "10 mV"}))
    supply.answers["SOUR:VOLT?"] = "12.01"
    assert perform(adapter.apply(SupplySetting(12.005, 1.5)), supply)["volts_set"].value == 12.01


def test_a_refused_limit_tells_the_error_queue(adapter: ScpiSupply, supply: Scripted) -> None:
    """Row B12: The read-back differs and the instrument says why."""
    supply.answers["SOUR:CURR?"] = "0.1"
    supply.errors.append('-222,"Data out of range"')
    with pytest.raises(InstrumentRefused, match=r"set to 1\.5 A .*-222,\"Data out of range\".*0\.1 A"):
        perform(adapter.apply(SupplySetting(12.0, 1.5)), supply)
    assert b"SOUR:VOLT 12" not in supply.sent


@pytest.mark.parametrize(
    "setting", [SupplySetting(math.nan, 1.0), SupplySetting(12.0, math.inf), SupplySetting(-1.0, 1.0)]
)
def test_a_senseless_setting_is_never_sent(adapter: ScpiSupply, supply: Scripted, setting: SupplySetting) -> None:
    """NaN, infinity and negative values stop before the instrument."""
    with pytest.raises(ConfigError, match="cannot be set"):
        perform(adapter.apply(setting), supply)
    assert supply.sent == []


def test_a_window_is_filled_with_pairs_of_readings(adapter: ScpiSupply, supply: Scripted) -> None:
    """Each query averages 0.1 s: a window of 0.6 s takes three pairs and one look at the status."""
    volts, amps = iter(["12.0", "12.1", "12.2"]), iter(["0.1", "0.2", "0.6"])
    supply.answers["MEAS:VOLT?"] = lambda _: next(volts)
    supply.answers["MEAS:CURR?"] = lambda _: next(amps)
    readings = perform(adapter.measure(Window(0.6)), supply)
    assert supply.sent == [b"MEAS:VOLT?", b"MEAS:CURR?"] * 3 + [b"STAT:QUES:COND?"]
    assert readings["volts"].value == pytest.approx(12.1)
    assert readings["amps"].value == pytest.approx(0.3)
    # half-width by the statement: 0.2 % of 0.3 A + 1 mA = 1.6 mA (independent arithmetic)
    assert readings["amps"].u == pytest.approx(1.6e-3 / math.sqrt(3.0), rel=1e-9)
    assert (readings["amps"].raw, readings["amps"].at, readings["amps"].flags) == ("0.1 0.2 0.6", supply.now, ())


def test_the_readings_of_a_window_can_be_capped(setups: dict[str, AdapterSetup], supply: Scripted) -> None:
    """With `most_readings = 1` any window takes one pair."""
    adapter = ScpiSupply(replace(setups["supply"], options={"most_readings": 1}))
    perform(adapter.measure(Window(10.0)), supply)
    assert supply.sent == [b"MEAS:VOLT?", b"MEAS:CURR?", b"STAT:QUES:COND?"]


@pytest.mark.parametrize(
    ("status", "flags"), [("0", ()), ("1", ("supply_limited",)), ("+513", ("supply_limited",)), ("512", ())]
)
def test_readings_of_a_limiting_supply_are_flagged(
    adapter: ScpiSupply, supply: Scripted, status: str, flags: tuple[str, ...]
) -> None:
    """Bit 0 of the questionable condition says that the limit acts; other bits do not."""
    supply.answers["STAT:QUES:COND?"] = status
    readings = perform(adapter.measure(Window(0.2)), supply)
    assert (readings["volts"].flags, readings["amps"].flags) == (flags, flags)


def test_no_current_leaves_the_voltage(adapter: ScpiSupply, supply: Scripted) -> None:
    """An overloaded current is no data; the voltage of the same window stays a number."""
    supply.answers["MEAS:CURR?"] = "9.91E37"
    supply.answers["STAT:QUES:COND?"] = "1"
    readings = perform(adapter.measure(Window(0.2)), supply)
    assert (readings["amps"].value, readings["amps"].flags) == (None, ("no_data:overload", "supply_limited"))
    assert readings["volts"].value == 12.001


@pytest.mark.parametrize("status", ["", "x", "0.5", "9.91E37", "0,0"])
def test_a_garbled_status_is_refused(adapter: ScpiSupply, supply: Scripted, status: str) -> None:
    """Whether the limit acts is never guessed."""
    supply.answers["STAT:QUES:COND?"] = status
    with pytest.raises(LinkGarbled):
        perform(adapter.measure(Window(0.2)), supply)


def test_on_and_off_are_shown(adapter: ScpiSupply, supply: Scripted) -> None:
    """Both ask the output state back; switching off needs no identity and its first message no answer."""
    perform(adapter.switch_on(), supply)
    assert supply.settings["OUTP"] == "1"
    perform(adapter.switch_off(), supply)
    assert supply.settings["OUTP"] == "0"
    first = next(adapter.switch_off())
    assert (first.message, first.reply, first.early) == (b"OUTP OFF", Reply.NOTHING, True)


def test_an_output_that_stays_on_is_not_proved_off(adapter: ScpiSupply, supply: Scripted) -> None:
    """The remedy is to cut the supply by hand."""
    supply.answers["OUTP?"] = "1"
    with pytest.raises(OffNotProved, match="by hand"):
        perform(adapter.switch_off(), supply)


def test_it_is_a_supply(adapter: ScpiSupply) -> None:
    """The contract's runtime check sees the actuator in it."""
    assert isinstance(adapter, Supply)


# Scope


def test_the_scope_reads_frequency_duty_and_volts(setups: dict[str, AdapterSetup], scope: Scripted) -> None:
    """One query a quantity, each on its channel; volts only where a channel is wired for it."""
    adapter = ScpiScope(setups["scope"])
    readings = perform(adapter.measure(Window(0.5)), scope)
    assert scope.sent == [b"MEAS:FREQ? (@1)", b"MEAS:PDUT? (@1)", b"MEAS:VOLT:DC? (@2)"]
    found = {key: (each.value, each.unit, each.channel) for key, each in readings.items()}
    assert found == {
        "frequency": (1000.0, "Hz", "scope.frequency"),
        "duty": (30.5, "%", "scope.duty"),
        "volts": (3.66, "V", "scope.volts"),
    }
    assert readings["duty"].u == pytest.approx(0.05 / math.sqrt(3.0))
    without = ScpiScope(replace(setups["scope"], options={}))
    assert dict(without.channels) == {"frequency": "Hz", "duty": "%"}


def test_a_switch_that_conducts_at_low_turns_the_duty(setups: dict[str, AdapterSetup], scope: Scripted) -> None:
    """The scope measures the high part; the duty is the conducting part."""
    adapter = ScpiScope(replace(setups["scope"], options={"conducting_level": "low"}))
    assert perform(adapter.measure(Window(0.5)), scope)["duty"].value == pytest.approx(69.5)


def test_no_edges_are_no_data(setups: dict[str, AdapterSetup], scope: Scripted) -> None:
    """At duty 0 the scope cannot measure a frequency: never 0 Hz."""
    scope.answers.update({"MEAS:FREQ? (@1)": "9.91E37", "MEAS:PDUT? (@1)": "****"})
    readings = perform(ScpiScope(setups["scope"]).measure(Window(0.5)), scope)
    assert (readings["frequency"].value, readings["frequency"].flags) == (None, ("no_data:overload",))
    assert (readings["duty"].value, readings["duty"].flags) == (None, ("no_data:marker",))


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"channel": 0}, "'channel' is not a whole number in range: 0 (allowed: 1 to 64)"),
        ({"channel": True}, "'channel' is not a whole number in range: True"),
        ({"channel": "1"}, "'channel' is not a whole number in range: '1'"),
        ({"conducting_level": "both"}, "'conducting_level' is not one of the choices: 'both' (allowed: high, low)"),
    ],
)
def test_bad_scope_options_are_refused(setups: dict[str, AdapterSetup], options: dict[str, object], text: str) -> None:
    """The error names instrument, option, value and what is allowed."""
    with pytest.raises(ConfigError) as caught:
        ScpiScope(replace(setups["scope"], options=options))
    assert text in str(caught.value)
