"""Generator, thermometer, sound-level meter, line tachometer, ammeter and captured waveform: adapters on scripted
instruments. Expected values are arithmetic on the scripted answers."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import pytest
from sweeprig_drivers.generator import ScpiGenerator
from sweeprig_drivers.line_tachometer import LineTachometer
from sweeprig_drivers.multimeter import ScpiMultimeter
from sweeprig_drivers.scope import ScpiScope
from sweeprig_drivers.sound_meter import ScpiSoundMeter
from sweeprig_drivers.thermometer import ScpiThermometer

from sweeprig.conformance import Scripted, checks, perform
from sweeprig.dialects import find_dialect
from sweeprig.errors import ConfigError, InstrumentRefused, LinkGarbled, OffNotProved
from sweeprig.quantities import Accuracy
from sweeprig.roles import Adapter, AdapterSetup, Drive, DriveSetting, Window

GENERATOR = AdapterSetup(
    "generator", {"high_level": "5 V"}, find_dialect("pulse-two-levels", None), {"duty_set": Accuracy(0.0, 0.1)}
)
THERMOMETER = AdapterSetup(
    "thermometer", {"winding": 1, "ambient": 3}, find_dialect("temperature-channel-list", None),
    {"winding": Accuracy(0.0, 0.5)},
)  # fmt: skip
SOUND = AdapterSetup("sound", {"average": "0.5 s"}, find_dialect("sound-level-average", None))
TACHOMETER = AdapterSetup(
    "tachometer", {"resolution": "3 rpm"}, find_dialect("speed-lines", None), {"speed": Accuracy(0.1)}
)
AMMETER = AdapterSetup(
    "ammeter", {"function": "amps", "range": "1 A", "aperture": "0.2 s"}, find_dialect("read-aperture", None)
)
TRACED = AdapterSetup(
    "scope", {"threshold": "1.8 V", "trace_channel": 2}, find_dialect("measure-channel-list", None),
    {"highest": Accuracy(1.0)},
)  # fmt: skip
DRIVE = (DriveSetting(1000.0, 30.0), DriveSetting(250.0, 62.5))


class Shaped(Scripted):
    """A scripted generator: `FUNC` is a word, infinity reads back as the number for it."""

    def __call__(self, ask: object) -> object:  # type: ignore[override] # narrowed again below
        answer = super().__call__(ask)  # type: ignore[arg-type] # an Ask, as the suite gives
        if self.settings["OUTP:LOAD"] == "INF":
            self.settings["OUTP:LOAD"] = "9.9E37"
        return answer


def generator() -> Scripted:
    settings = {
        "OUTP:LOAD": "50", "SOUR:VOLT:HIGH": "0.1", "SOUR:VOLT:LOW": "-1", "SOUR:VOLT:OFFS": "-2", "SOUR:FREQ": "500",
        "SOUR:PULS:DCYC": "50", "SOUR:FUNC": "SIN", "OUTP": "0",
    }  # fmt: skip
    return Shaped({}, settings)


def thermometer() -> Scripted:
    return Scripted({"MEAS:TEMP? (@1)": "+45.20", "MEAS:TEMP? (@3)": "21.0"})


def sound() -> Scripted:
    return Scripted({"MEAS:SLEV?": "48.3"}, {"SENS:AVER:TIME": "1", "SENS:WEIG": "C"})


def tachometer() -> Scripted:
    return Scripted({"": "n 1234.5 1/min"})


def ammeter() -> Scripted:
    settings = {"SENS:CURR:DC:RANG": "10", "SENS:CURR:DC:RANG:AUTO": "0", "SENS:CURR:DC:APER": "0.02"}
    return Scripted({"READ?": "+1.250E-01"}, settings, {"CONF:CURR:DC": "SENS:CURR:DC:RANG"})


def scope() -> Scripted:
    answers = {
        "MEAS:FREQ? (@1)": "1.0E+03", "MEAS:PDUT? (@1)": "30.5", "TRAC:PRE? (@2)": "5,1.0E-4,0.1,-12.8",
        "READ:TRAC? (@2)": "\x80\xf3\x0a\xff\x0d",
    }  # fmt: skip
    return Scripted(answers, {"SENS:LEV": "2.5"})


CASES: dict[str, tuple[Callable[[AdapterSetup], Adapter], AdapterSetup, Callable[[], Scripted]]] = {
    "generator": (ScpiGenerator, GENERATOR, generator),
    "thermometer": (ScpiThermometer, THERMOMETER, thermometer),
    "sound": (ScpiSoundMeter, SOUND, sound),
    "tachometer": (LineTachometer, TACHOMETER, tachometer),
    "ammeter": (ScpiMultimeter, AMMETER, ammeter),
    "scope": (ScpiScope, TRACED, scope),
}


@pytest.mark.parametrize("name", sorted(CASES))
def test_they_keep_the_contract(name: str) -> None:
    """Every check of the conformance suite passes, each with evidence."""
    kind, setup, instrument = CASES[name]
    found = checks(lambda: kind(setup), instrument, DRIVE if name == "generator" else None)
    assert [check for check in found if not check.passed] == []
    assert all(check.evidence for check in found)


# Generator


def test_a_generator_is_a_drive_without_a_heartbeat() -> None:
    """It fits the contract of a drive, and says that nothing stops it."""
    adapter = ScpiGenerator(GENERATOR)
    assert isinstance(adapter, Drive)
    assert adapter.heartbeat_s is None


def test_a_generator_is_told_its_load_before_its_levels() -> None:
    """With 50 ohm set, 5 V would be 10 V at a gate: load, then high, then low level, each read back."""
    instrument = generator()
    perform(ScpiGenerator(GENERATOR).configure(), instrument)
    assert instrument.sent == [
        b"*CLS", b"SYST:ERR?", b"OUTP:LOAD INF", b"OUTP:LOAD?", b"SOUR:VOLT:HIGH 5", b"SOUR:VOLT:HIGH?",
        b"SOUR:VOLT:LOW 0", b"SOUR:VOLT:LOW?", b"SOUR:FUNC?", b"SOUR:FUNC PULS", b"SOUR:FUNC?", b"SYST:ERR?",
    ]  # fmt: skip


def test_a_generator_that_keeps_its_load_is_refused() -> None:
    """A load that reads back as 50 ohm is an error before any level is set."""
    instrument = generator()
    instrument.answers["OUTP:LOAD?"] = "50"
    with pytest.raises(InstrumentRefused, match="a gate draws nothing"):
        perform(ScpiGenerator(GENERATOR).configure(), instrument)
    assert b"SOUR:VOLT:HIGH 5" not in instrument.sent


@pytest.mark.parametrize(("duty", "level"), [(0.0, "0"), (100.0, "5")])
def test_no_and_full_duty_are_constant_levels(duty: float, level: str) -> None:
    """A rectangle has both levels: 0 % is the low level for good, 100 % the high one, and reads back as such."""
    instrument, adapter = generator(), ScpiGenerator(GENERATOR)
    readings = perform(adapter.apply(DriveSetting(1000.0, duty)), instrument)
    assert (instrument.settings["SOUR:FUNC"], instrument.settings["SOUR:VOLT:OFFS"]) == ("DC", level)
    assert readings["duty_set"].value == duty
    assert perform(adapter.measure(Window(0.5)), instrument)["duty_set"].value == duty


def test_a_shape_that_is_not_taken_is_refused() -> None:
    """Read back as another shape: InstrumentRefused, after the duty was set and before anything is on."""
    instrument = generator()
    instrument.answers["SOUR:FUNC?"] = "SIN"
    with pytest.raises(InstrumentRefused, match="shape"):
        perform(ScpiGenerator(GENERATOR).apply(DRIVE[0]), instrument)


def test_a_generator_that_stays_on_is_no_proof_of_off() -> None:
    """OffNotProved when the output says that it is on."""
    instrument = generator()
    instrument.answers["OUTP?"] = "1"
    with pytest.raises(OffNotProved):
        perform(ScpiGenerator(GENERATOR).switch_off(), instrument)


@pytest.mark.parametrize(
    "setting", [DriveSetting(2e6, 10.0), DriveSetting(1000.0, 101.0), DriveSetting(1000.0, math.nan),
                DriveSetting(1000.0, 30.0, tap=3)],
)  # fmt: skip
def test_what_a_generator_cannot_make_is_never_sent(setting: DriveSetting) -> None:
    """Too fast, more than 100 %, no number, and a potentiometer tap stop before the instrument."""
    instrument = generator()
    with pytest.raises(ConfigError, match="cannot be set"):
        perform(ScpiGenerator(GENERATOR).apply(setting), instrument)
    assert instrument.sent == []


# Thermometer, sound-level meter, ammeter


def test_a_thermometer_reads_the_sensors_that_are_stated() -> None:
    """45.2 degC at the winding with u = 0.5 K/√3 of its statement, and the room; no channel for the case."""
    readings = perform(ScpiThermometer(THERMOMETER).measure(Window(1.0)), thermometer())
    assert set(readings) == {"winding", "ambient"}
    assert readings["winding"].value == pytest.approx(45.2)
    assert readings["winding"].u == pytest.approx(0.5 / math.sqrt(3.0))


def test_a_broken_sensor_is_no_data_and_none_is_colder_than_absolute_zero() -> None:
    """OPEN is no data with its reason; −300 degC is a garbled reply."""
    instrument, adapter = thermometer(), ScpiThermometer(THERMOMETER)
    instrument.answers["MEAS:TEMP? (@1)"] = "OPEN"
    assert perform(adapter.measure(Window(1.0)), instrument)["winding"].flags == ("no_data:marker",)
    instrument.answers["MEAS:TEMP? (@1)"] = "-300"
    with pytest.raises(LinkGarbled, match="temperature"):
        perform(adapter.measure(Window(1.0)), instrument)


def test_a_sound_meter_is_set_and_read() -> None:
    """Averaging time and weighting are set and read back; the level is one reading in dB."""
    instrument, adapter = sound(), ScpiSoundMeter(SOUND)
    perform(adapter.configure(), instrument)
    assert (instrument.settings["SENS:AVER:TIME"], instrument.settings["SENS:WEIG"]) == ("0.5", "A")
    reading = perform(adapter.measure(Window(1.0)), instrument)["level"]
    assert (reading.value, reading.unit, reading.channel) == (48.3, "dB", "sound.level")


def test_an_ammeter_is_a_multimeter_with_a_fixed_range() -> None:
    """The current function with range and aperture, read back; five readings of 0.2 s in a second, in A."""
    instrument, adapter = ammeter(), ScpiMultimeter(AMMETER)
    perform(adapter.configure(), instrument)
    assert b"CONF:CURR:DC 1" in instrument.sent
    reading = perform(adapter.measure(Window(1.0, 1000.0)), instrument)["amps"]
    assert (reading.unit, reading.channel) == ("A", "ammeter.amps")
    assert reading.value == pytest.approx(0.125)
    assert instrument.sent.count(b"READ?") == 5


# Captured waveform


def test_the_waveform_gives_highest_and_lowest() -> None:
    """Codes 255 and 10 at 0.1 V a step from −12.8 V: 12.7 V, clipped, and −11.8 V; u has half a step in it."""
    readings = perform(ScpiScope(TRACED).measure(Window(1.0)), scope())
    assert readings["highest"].value == pytest.approx(12.7)
    assert readings["lowest"].value == pytest.approx(-11.8)
    assert (readings["highest"].flags, readings["lowest"].flags) == (("clipped",), ())
    assert readings["lowest"].u == pytest.approx(0.1 / math.sqrt(12.0))
    assert readings["highest"].u == pytest.approx(math.hypot(0.127 / math.sqrt(3.0), 0.1 / math.sqrt(12.0)))


@pytest.mark.parametrize(
    "preamble", ["5,1E-4,0.1", "4,1E-4,0.1,-12.8", "5,0,0.1,-12.8", "5,1E-4,9.9E37,-12.8", "x,1,1,1"]
)
def test_a_waveform_that_does_not_fit_its_preamble_is_garbled(preamble: str) -> None:
    """Too few numbers, another count of points, no time, no step, no number: never a voltage."""
    instrument = scope()
    instrument.answers["TRAC:PRE? (@2)"] = preamble
    with pytest.raises(LinkGarbled):
        perform(ScpiScope(TRACED).measure(Window(1.0)), instrument)


def test_a_threshold_is_set_and_read_back() -> None:
    """1.8 V goes to the scope; one that keeps 2.5 V is refused."""
    instrument = scope()
    perform(ScpiScope(TRACED).configure(), instrument)
    assert instrument.settings["SENS:LEV"] == "1.8"
    instrument.answers["SENS:LEV?"] = "2.5"
    with pytest.raises(InstrumentRefused, match="threshold"):
        perform(ScpiScope(TRACED).configure(), instrument)


# Line tachometer


def lines(instrument: Scripted, texts: list[str]) -> None:
    left = list(texts)
    instrument.answers[""] = lambda _: left.pop(0) if len(left) > 1 else left[0]


def test_lines_are_averaged_over_the_window() -> None:
    """Four lines of 0.25 s in a second: their mean; u is 0.1 % and 3 rpm, both rectangles."""
    instrument = tachometer()
    lines(instrument, [f"n {rpm} 1/min" for rpm in (1000.0, 1010.0, 1020.0, 1030.0)])
    readings = perform(LineTachometer(TACHOMETER).measure(Window(1.0)), instrument)
    assert readings["speed"].value == pytest.approx(1015.0)
    assert readings["speed"].u == pytest.approx(math.hypot(1.015, 3.0) / math.sqrt(3.0))
    assert readings["edge_age"].value == pytest.approx(0.25)


def test_a_stopped_rotor_is_no_speed_and_its_age_grows() -> None:
    """The last line says zero: no data, never 0 rpm; the age counts from the last line that said more."""
    instrument, adapter = tachometer(), LineTachometer(TACHOMETER)
    perform(adapter.measure(Window(0.25)), instrument)
    seen = instrument.now
    lines(instrument, ["n 0.0 1/min"])
    instrument.now += 3.0
    readings = perform(adapter.measure(Window(0.5)), instrument)
    assert (readings["speed"].value, readings["speed"].flags) == (None, ("no_data:no_edges",))
    assert readings["edge_age"].value == pytest.approx(instrument.now - seen + 0.25)


def test_pulses_become_revolutions_with_the_motor_files_count() -> None:
    """A dialect in Hz with scale 0.1: 500 tenths of a hertz at 2 pulses a revolution are 1500 rpm."""
    dialect = {
        "kind": "line-tachometer", "values": {"line_every_s": 0.5, "scale": 0.1},
        "texts": {"line": "(?P<value>[0-9]+)", "unit": "Hz"},
    }  # fmt: skip
    adapter = LineTachometer(AdapterSetup("t", {}, dialect, pulses_per_revolution=2.0))
    assert perform(adapter.measure(Window(0.5)), Scripted({"": "500"}))["speed"].value == pytest.approx(1500.0)
    identity = perform(adapter.identify(), Scripted({"": "500"}))
    assert (identity.maker, identity.model) == ("unnamed", "line tachometer")


@pytest.mark.parametrize("line", ["", "1234.5", "n 1234.5", "n 12.3.4 1/min", "m 1234.5 1/min", "n 1234.5 1/min x"])
def test_another_line_is_garbled(line: str) -> None:
    """The whole line must fit, or it is no reading."""
    instrument = tachometer()
    instrument.answers[""] = line
    with pytest.raises(LinkGarbled):
        perform(LineTachometer(TACHOMETER).measure(Window(0.25)), instrument)


# Refusals


def texts(**changed: str) -> dict[str, object]:
    dialect = find_dialect("speed-lines", None)
    known = dialect["texts"]
    assert isinstance(known, dict)
    return {**dialect, "texts": {**known, **changed}}


@pytest.mark.parametrize(
    ("kind", "setup", "change", "says"),
    [
        (ScpiGenerator, GENERATOR, {"options": {}}, "'high_level' is missing"),
        (ScpiGenerator, GENERATOR, {"options": {"high_level": "3 V", "low_level": "4 V"}}, "not below 'high_level'"),
        (ScpiGenerator, GENERATOR, {"dialect": {}}, "needs a dialect for a generator"),
        (ScpiThermometer, THERMOMETER, {"options": {}}, "at least one must be stated"),
        (ScpiThermometer, THERMOMETER, {"options": {"winding": 1, "case": 1}}, "an input of its own"),
        (ScpiThermometer, THERMOMETER, {"options": {"winding": 0}}, "'winding' is not a whole number in range"),
        (ScpiSoundMeter, SOUND, {"options": {"weighting": "B"}}, "'weighting' is not one of the choices"),
        (ScpiSoundMeter, SOUND, {"options": {"average": "60 s"}}, "'average' is out of range"),
        (LineTachometer, TACHOMETER, {"options": {"gate": "1 s"}}, "'gate' is not known"),
        (LineTachometer, TACHOMETER, {"dialect": texts(line="n (")}, "is no regular expression"),
        (LineTachometer, TACHOMETER, {"dialect": texts(line="n [0-9]+")}, "has no group"),
        (LineTachometer, TACHOMETER, {"dialect": texts(unit="1/s")}, "not one that this adapter knows"),
        (LineTachometer, TACHOMETER, {"dialect": texts(other="x")}, "texts.other' is not known"),
        (ScpiMultimeter, AMMETER, {"options": {"function": "ohms"}}, "'function' is not one of the choices"),
        (ScpiMultimeter, AMMETER, {"options": {"function": "amps", "range": "200 A"}}, "'range' is out of range"),
        (ScpiScope, TRACED, {"options": {"threshold": "2 A"}}, "'threshold' cannot be read"),
    ],
)  # fmt: skip
def test_a_bad_entry_is_refused(
    kind: Callable[[AdapterSetup], Adapter], setup: AdapterSetup, change: dict[str, object], says: str
) -> None:
    """Each refusal names the option or key, and what to do."""
    with pytest.raises(ConfigError) as caught:
        kind(replace(setup, **change))  # type: ignore[arg-type] # the cases change fields of several types
    assert says in str(caught.value)
    assert caught.value.remedy


@pytest.mark.parametrize(
    ("kind", "setup", "lacks", "says"),
    [(ScpiMultimeter, AMMETER, "amps_function", "how this function is spelt"),
     (ScpiScope, TRACED, "threshold", "lacks a command"), (ScpiScope, TRACED, "trace", "lacks a command")],
)  # fmt: skip
def test_an_option_that_the_dialect_cannot_serve_is_refused(
    kind: Callable[[AdapterSetup], Adapter], setup: AdapterSetup, lacks: str, says: str
) -> None:
    """The command is optional in a dialect; the option needs it."""
    commands = setup.dialect["commands"]
    assert isinstance(commands, dict)
    less = {key: text for key, text in commands.items() if key != lacks}
    with pytest.raises(ConfigError, match=says):
        kind(replace(setup, dialect={**setup.dialect, "commands": less}))
