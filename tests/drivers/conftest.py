"""Scripted instruments and adapter setups for the driver tests; no link and no clock anywhere."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from sweeprig.conformance import Scripted
from sweeprig.dialects import find_dialect
from sweeprig.quantities import Accuracy
from sweeprig.roles import AdapterSetup

CLOCK_HZ = 16_000_000
GATE_S = 0.25


def _counts(pulse_hz: float) -> Callable[[float], str]:
    """A tachometer that has always turned evenly: the last gate's counts as drivers/firmware/README.md defines them."""
    period = round(CLOCK_HZ / pulse_hz)
    gate = round(GATE_S * CLOCK_HZ)

    def answer(now: float) -> str:
        ticks = round(now * CLOCK_HZ) + 100 * gate
        number = ticks // gate
        last, before = number * gate // period, (number - 1) * gate // period
        edges = last - before
        return f"{number},{edges},{edges * period},{CLOCK_HZ},{ticks % period}"

    return answer


def new_meter() -> Scripted:
    settings = {"SENS:VOLT:DC:RANG": "1000", "SENS:VOLT:DC:RANG:AUTO": "0", "SENS:VOLT:DC:APER": "0.02"}
    return Scripted({"READ?": "+5.0000E+00"}, settings, {"CONF:VOLT:DC": "SENS:VOLT:DC:RANG"})


def new_scope() -> Scripted:
    return Scripted({"MEAS:FREQ? (@1)": "1.0E+03", "MEAS:PDUT? (@1)": "30.5", "MEAS:VOLT:DC? (@2)": "3.66"})


def new_supply() -> Scripted:
    answers = {"MEAS:VOLT?": "12.001", "MEAS:CURR?": "0.2500", "STAT:QUES:COND?": "0"}
    return Scripted(answers, {"SOUR:VOLT": "0", "SOUR:CURR": "0.1", "OUTP": "0"})


def new_board() -> Scripted:
    settings = {
        "SOUR:FREQ": "500", "SOUR:PULS:DCYC": "0", "SOUR:RES:TAP": "0", "OUTP": "0",
        "SENS:FREQ:APER": "1.0", "SYST:COMM:TIM": "1000",
    }  # fmt: skip
    return Scripted({"FETC:COUN?": _counts(100.0)}, settings)


@pytest.fixture
def meter() -> Scripted:
    return new_meter()


@pytest.fixture
def scope() -> Scripted:
    return new_scope()


@pytest.fixture
def supply() -> Scripted:
    return new_supply()


@pytest.fixture
def board() -> Scripted:
    """100 tachometer pulses a second."""
    return new_board()


@pytest.fixture
def new_instrument() -> dict[str, Callable[[], Scripted]]:
    return {"meter": new_meter, "scope": new_scope, "supply": new_supply, "board": new_board}


@pytest.fixture
def setups() -> dict[str, AdapterSetup]:
    """As the demo's rig file has them, the scope with a voltage channel besides."""
    return {
        "meter": AdapterSetup(
            "meter",
            {"range": "100 V", "aperture": "0.2 s"},
            find_dialect("read-aperture", None),
            {"volts": Accuracy(0.02, 0.003)},
        ),
        "scope": AdapterSetup(
            "scope",
            {"channel": 1, "volts_channel": 2},
            find_dialect("measure-channel-list", None),
            {"duty": Accuracy(0.0, 0.05), "frequency": Accuracy(0.01)},
        ),
        "supply": AdapterSetup(
            "supply",
            {},
            find_dialect("source-and-measure", None),
            {"amps": Accuracy(0.2, 0.001), "volts": Accuracy(0.05, 0.005)},
        ),
        "board": AdapterSetup("board", {"heartbeat": "2 s", "gate": "0.25 s"}, {}, {"speed": Accuracy(0.01)}, 2.0),
    }
