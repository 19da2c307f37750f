"""The multimeter adapter on a scripted instrument."""

from __future__ import annotations

import math
import random
from dataclasses import replace

import pytest
from sweeprig_drivers.common import MOST_ERRORS
from sweeprig_drivers.multimeter import BROKEN_PERIOD_TOLERANCE, ScpiMultimeter, broken_period

from sweeprig.conformance import Scripted, perform
from sweeprig.errors import ConfigError, InstrumentRefused, LinkGarbled
from sweeprig.quantities import Accuracy
from sweeprig.roles import AdapterSetup, Identity, Window


@pytest.fixture
def adapter(setups: dict[str, AdapterSetup]) -> ScpiMultimeter:
    return ScpiMultimeter(setups["meter"])


def replies(meter: Scripted, texts: list[str]) -> None:
    left = iter(texts)
    meter.answers["READ?"] = lambda _: next(left)


def test_a_window_is_the_mean_of_as_many_readings_as_fill_it(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """One second at an aperture of 0.2 s is five readings; time, raw text and u are those of the mean."""
    replies(meter, ["5.0", "+5.1", "5.2E0", "5.3e+00", " 5.4"])
    reading = perform(adapter.measure(Window(1.0)), meter)["volts"]
    assert meter.sent == [b"READ?"] * 5
    assert reading.value == pytest.approx(5.2, abs=1e-12)
    # half-width by the statement: 0.02 % of 5.2 V + 3 mV (independent arithmetic: 4.04 mV)
    assert reading.u == pytest.approx(4.04e-3 / math.sqrt(3.0), rel=1e-12)
    assert (reading.at, reading.channel, reading.unit, reading.flags) == (meter.now, "meter.volts", "V", ())
    assert reading.raw == "5.0 +5.1 5.2E0 5.3e+00  5.4"


def test_a_window_shorter_than_the_aperture_is_one_reading(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """There is never less than one reading, and its ask waits for aperture + 1 s."""
    perform(adapter.measure(Window(0.01)), meter)
    assert meter.sent == [b"READ?"]
    assert next(adapter.measure(Window(0.01))).within_s == pytest.approx(1.2)


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("9.9E37", "no_data:overload"),
        ("9.91E37", "no_data:overload"),
        ("-9.900000302E+37", "no_data:overload"),
        ("1E38", "no_data:overload"),
        ("OL", "no_data:marker"),
        ("****", "no_data:marker"),
        ("", "no_data:empty"),
    ],
)
def test_no_value_is_no_data_with_its_reason(adapter: ScpiMultimeter, meter: Scripted, text: str, reason: str) -> None:
    """Rows B1 and B10: Sentinels of SCPI-1999 (as they were seen) and the dialect's markers never become numbers."""
    meter.answers["READ?"] = text
    reading = perform(adapter.measure(Window(0.2)), meter)["volts"]
    assert (reading.value, reading.u, reading.flags, reading.raw) == (None, 0.0, (reason,), text)


def test_one_missing_reading_makes_the_mean_no_data(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """A mean over what the meter could read would be biased, so there is none."""
    replies(meter, ["5.0", "9.9E37", "5.0", "5.0", "5.0"])
    reading = perform(adapter.measure(Window(1.0)), meter)["volts"]
    assert (reading.value, reading.flags) == (None, ("no_data:overload",))


@pytest.mark.parametrize(
    "text", ["nan", "inf", "-Infinity", "1_0", "1.2.3", "5.0,5.1", "5.0 V", "\xb5", "0x10", "5.0;5.1"]
)
def test_a_garbled_reading_is_refused_with_its_bytes(adapter: ScpiMultimeter, meter: Scripted, text: str) -> None:
    """What Python's float would take and an instrument never writes is refused too; the bytes are kept."""
    meter.answers["READ?"] = text
    with pytest.raises(LinkGarbled, match="meter: the reply is no number") as caught:
        perform(adapter.measure(Window(0.2)), meter)
    assert caught.value.partial == text.encode("latin-1")


@pytest.mark.parametrize(
    ("text", "identity"),
    [
        ("MAKER,MODEL,1,0", Identity("MAKER", "MODEL", "1", "0")),
        (" Maker , M-2 ,, 1.0, build 7 ", Identity("Maker", "M-2", "", "1.0, build 7")),
        ("SIMULATED,multimeter,SIM1,1.0", Identity("SIMULATED", "multimeter", "SIM1", "1.0")),
    ],
)
def test_identities_are_read_leniently(adapter: ScpiMultimeter, meter: Scripted, text: str, identity: Identity) -> None:
    """Blanks, empty fields and a comma in the last one occur on instruments (IEEE 488.2, 10.14 allows fewer)."""
    meter.answers["*IDN?"] = text
    found = perform(adapter.identify(), meter)
    assert found == identity
    assert found.simulated is (identity.maker == "SIMULATED")
    assert meter.sent == [b"*IDN?"]


@pytest.mark.parametrize("text", ["", "5.0", "MAKER,MODEL,1", "812,4,16000,16000000,12", "M\xb5,A,1,0", "M,A,1,\x000"])
def test_what_is_no_identity_is_garbled(adapter: ScpiMultimeter, meter: Scripted, text: str) -> None:
    """A late reply with numbers in it, too few fields and noise are no identity."""
    meter.answers["*IDN?"] = text
    with pytest.raises(LinkGarbled, match="no identity of four fields"):
        perform(adapter.identify(), meter)


def test_configure_fixes_the_range_and_then_the_aperture(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """Choosing the function presets the aperture, so the aperture comes after; both are asked back."""
    perform(adapter.configure(), meter)
    assert meter.sent == [
        b"*CLS", b"SYST:ERR?", b"CONF:VOLT:DC 100", b"SENS:VOLT:DC:RANG?", b"SENS:VOLT:DC:RANG:AUTO?",
        b"SENS:VOLT:DC:APER 0.2", b"SENS:VOLT:DC:APER?", b"SYST:ERR?",
    ]  # fmt: skip
    assert perform(adapter.settings(), meter) == {"range_volts": "100", "aperture_s": "0.2", "event_status": "0"}


def test_a_range_that_reads_back_differently_is_refused(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """Row B7: The error names quantity, both values and what stands in the instrument's error queue."""
    meter.answers["SENS:VOLT:DC:RANG?"] = "1.0E+03"
    meter.answers["SYST:ERR?"] = '0,"No error"'
    with pytest.raises(InstrumentRefused) as caught:
        perform(adapter.configure(), meter)
    assert str(caught.value) == (
        "meter: the range was set to 100 V and reads back differently; its error queue is empty: 1000 V "
        "(allowed: 100 ± 1 V). check the setting against the instrument's ranges (sweeprig manual rig)"
    )


def test_autorange_that_stays_on_is_refused(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """A range that moves by itself is not the one that was asked for."""
    meter.answers["SENS:VOLT:DC:RANG:AUTO?"] = "1"
    with pytest.raises(InstrumentRefused, match="autorange stayed on"):
        perform(adapter.configure(), meter)


def test_an_error_that_configuring_left_is_refused(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """A message the instrument objects to without changing what is read back still stops the run."""
    left = iter(['0,"No error"', '-221,"Settings conflict"', '+0,"No error"'])
    meter.answers["SYST:ERR?"] = lambda _: next(left)
    with pytest.raises(InstrumentRefused, match="-221"):
        perform(adapter.configure(), meter)


def test_a_standing_error_neither_loops_nor_blames(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """Row B8: An instrument that reports one error again and again is drained 64 entries deep, twice, and then
    configured."""
    meter.answers["SYST:ERR?"] = '514,"Calibration due"'
    perform(adapter.configure(), meter)
    assert meter.sent.count(b"SYST:ERR?") == 2 * MOST_ERRORS == 128


@pytest.mark.parametrize("text", ["No error", "", '"",0', "****"])
def test_an_entry_without_a_number_is_garbled(adapter: ScpiMultimeter, meter: Scripted, text: str) -> None:
    """An error queue is only believed to be empty when it says 0."""
    meter.answers["SYST:ERR?"] = text
    with pytest.raises(LinkGarbled):
        perform(adapter.configure(), meter)


@pytest.mark.parametrize("text", ["0", "+0,", '0,"No error"', "0,“No error”"])
def test_the_spellings_of_an_empty_queue(adapter: ScpiMultimeter, meter: Scripted, text: str) -> None:
    """A bare integer, a sign, no quotes and curly quotes (as UTF-8 bytes) were all seen on instruments."""
    meter.answers["SYST:ERR?"] = text.encode("utf-8").decode("latin-1")
    perform(adapter.configure(), meter)
    assert meter.settings["SENS:VOLT:DC:APER"] == "0.2"


# The broken period


def wave_mean(duty: float, periods: float, phase: float) -> float:
    """Mean of a unit wave (high for `duty` of each period) over `periods` of it from `phase`: the integral, exactly."""

    def area(to: float) -> float:
        return math.floor(to) * duty + min(to - math.floor(to), duty)

    return (area(phase + periods) - area(phase)) / periods


@pytest.mark.parametrize(
    ("aperture_s", "pwm_hz", "duty", "worst"),
    [
        # largest errors of a unit wave over all phases: a formula derived apart from this code (independent method)
        (0.020, 1037.0, 0.30, 8.775e-3),
        (0.1, 987.6, 0.50, 1.215e-3),
        (1.0 / 60.0, 1234.5, 0.25, 6.987e-3),
        (0.020, 30.0, 0.50, 0.3333),
    ],
)
def test_the_bound_holds_for_the_worst_phases_known(
    aperture_s: float, pwm_hz: float, duty: float, worst: float
) -> None:
    """The bound covers the largest error over the phase, and the integral used here reproduces that error."""
    found = max(abs(wave_mean(duty, aperture_s * pwm_hz, step / 5000.0) - duty) for step in range(5000))
    assert found == pytest.approx(worst, rel=2e-3)
    assert worst <= broken_period(aperture_s, pwm_hz)


def test_the_bound_is_zero_for_whole_periods_and_reached_otherwise() -> None:
    """Whole periods cost nothing; at half a period over, duty 50 % reaches the bound (exact integral)."""
    assert broken_period(0.2, 1000.0) == 0.0
    reached = max(abs(wave_mean(0.5, 20.5, step / 1000.0) - 0.5) for step in range(1000))
    assert reached == pytest.approx(broken_period(0.0205, 1000.0), rel=1e-9)


def test_u_covers_the_broken_period_of_any_wave(setups: dict[str, AdapterSetup], meter: Scripted) -> None:
    """Over seeded random waves from 0 to 14 V the reading's error never exceeds √3·u, without any accuracy statement.

    A bound, so there is no false alarm to allow for."""
    adapter = ScpiMultimeter(replace(setups["meter"], accuracy={}))
    draw = random.Random(11)
    for _ in range(2000):
        volts, duty, pwm_hz = draw.uniform(1.0, 14.0), draw.random(), 10.0 ** draw.uniform(0.0, 4.5)
        meter.answers["READ?"] = repr(volts * wave_mean(duty, 0.2 * pwm_hz, draw.random()))
        reading = perform(adapter.measure(Window(0.2, pwm_hz)), meter)["volts"]
        assert reading.value is not None
        assert abs(reading.value - volts * duty) <= math.sqrt(3.0) * reading.u + 1e-12


def test_a_broken_period_is_flagged_and_widens_u(adapter: ScpiMultimeter, meter: Scripted) -> None:
    """At 37 Hz an aperture of 0.2 s is 7.4 periods: flagged, and u grows; at 1 kHz it is whole: neither."""
    broken = perform(adapter.measure(Window(0.2, 37.0)), meter)["volts"]
    whole = perform(adapter.measure(Window(0.2, 1000.0)), meter)["volts"]
    assert (broken.flags, whole.flags) == (("aperture_not_whole_periods",), ())
    # 5 V over 7.4 periods: |m|/(fT − 1) = 0.78125 V as a half-width (independent arithmetic), and 4 mV by the statement
    assert broken.u == pytest.approx(math.hypot(0.78125, 4e-3) / math.sqrt(3.0), rel=1e-9)
    assert whole.u == pytest.approx(4e-3 / math.sqrt(3.0), rel=1e-9)


def test_check_window_refuses_what_measure_would_flag(adapter: ScpiMultimeter) -> None:
    """The refusal names the periods found and an aperture that would be whole."""
    adapter.check_window(Window(1.0, 1000.0))
    adapter.check_window(Window(1.0))
    with pytest.raises(ConfigError) as caught:
        adapter.check_window(Window(1.0, 37.0))
    assert "7.4 periods" in str(caught.value)
    assert "0.189189 s" in str(caught.value)
    assert broken_period(0.2, 37.0) > BROKEN_PERIOD_TOLERANCE


@pytest.mark.parametrize("window", [Window(0.0), Window(-1.0), Window(math.nan), Window(601.0), Window(1.0, 0.0)])
def test_check_window_refuses_nonsense(adapter: ScpiMultimeter, window: Window) -> None:
    """A window is a positive time of at most ten minutes."""
    with pytest.raises(ConfigError, match="cannot average over this window"):
        adapter.check_window(window)


@pytest.mark.parametrize(
    ("options", "text"),
    [
        ({"range": "100 V"}, "meter: the option 'aperture' is missing (allowed: 100 us to 10 s)"),
        ({"range": "100 V", "aperture": "20 V"}, "has the unit 'V' where s is wanted"),
        ({"range": "100 V", "aperture": 0.2}, "the option 'aperture' is not a text with a unit: 0.2"),
        ({"range": "5 kV", "aperture": "0.2 s"}, "the option 'range' is out of range: '5 kV' (allowed: 1 mV to 1 kV)"),
        (
            {"range": "9 V", "aperture": "1 s", "filter": 1},
            "option 'filter' is not known: 1 (allowed: function, range, aperture, averaging, remote)",
        ),
    ],
)
def test_bad_options_are_refused(setups: dict[str, AdapterSetup], options: dict[str, object], text: str) -> None:
    """The error names instrument, option, value and what is allowed."""
    with pytest.raises(ConfigError) as caught:
        ScpiMultimeter(replace(setups["meter"], options=options))
    assert text in str(caught.value)
    assert caught.value.remedy


def test_an_accuracy_for_an_unknown_quantity_is_refused(setups: dict[str, AdapterSetup]) -> None:
    """A misspelt quantity would leave the real one without an uncertainty."""
    with pytest.raises(ConfigError, match="does not have: volt "):
        ScpiMultimeter(replace(setups["meter"], accuracy={"volt": Accuracy(0.02)}))


def test_only_offered_apertures(setups: dict[str, AdapterSetup]) -> None:
    """A dialect that lists its family's apertures has any other refused, with the list and the nearest; one that is
    listed is taken."""
    setup = setups["meter"]
    offers = replace(setup, dialect={**setup.dialect, "apertures": [0.02, 0.2, 1]})
    assert ScpiMultimeter(offers).channels == {"volts": "V"}
    with pytest.raises(ConfigError, match=r"does not offer this aperture.*0.02 s, 0.2 s, 1 s") as caught:
        ScpiMultimeter(replace(offers, options={**setup.options, "aperture": "0.3 s"}))
    assert "aperture to '0.2 s'" in str(caught.value)


@pytest.mark.parametrize("wrong", ["0.2", [0.2, 0], [True], [2000.0]])
def test_apertures_are_times(setups: dict[str, AdapterSetup], wrong: object) -> None:
    """What is no list of times above zero and up to a thousand seconds is the dialect's fault, and is said so."""
    setup = setups["meter"]
    with pytest.raises(ConfigError, match="apertures"):
        ScpiMultimeter(replace(setup, dialect={**setup.dialect, "apertures": wrong}))
