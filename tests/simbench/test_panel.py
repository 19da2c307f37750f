"""Remote and local as commands: settings are refused with -203 while local, queries answered (SCPI-1999, memory)."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import load
from sweeprig.job.fault_models import SimulatedFault
from sweeprig.simbench import build
from sweeprig.simbench.generator import Generator
from sweeprig.simbench.instrument import Instrument
from sweeprig.simbench.sound_meter import SoundMeter
from sweeprig.simbench.tachometer import LineTachometer
from sweeprig.simbench.thermometer import Thermometer

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

PROTECTED = '-203,"Command protected;local"'
NONE = '0,"No error"'
MAKERS: dict[str, Callable[[Bed], Instrument]] = {
    "supply": lambda bed: bed.bench_supply(),
    "multimeter": lambda bed: bed.multimeter(),
    "scope": lambda bed: bed.scope(),
    "generator": lambda bed: bed.add(Generator),
    "sound_meter": lambda bed: bed.add(SoundMeter),
    "thermometer": lambda bed: bed.add(Thermometer),
}
SETTINGS = {
    "supply": ("SOUR:VOLT 5", "SOUR:VOLT?"),
    "multimeter": ("CONF:VOLT:DC 100", "SENS:VOLT:DC:RANG?"),
    "scope": ("SENS:LEV 1.8", "SENS:LEV?"),
    "generator": ("SOUR:FREQ 25 KHZ", "SOUR:FREQ?"),
    "sound_meter": ("SENS:WEIG C", "SENS:WEIG?"),
    "thermometer": ("*RST", "*IDN?"),
}
"""A setting that changes something (of a thermometer: that may be refused), and what asks for it."""


@pytest.fixture(params=MAKERS)
def instrument(request: pytest.FixtureRequest, bed: Bed) -> Instrument:
    return MAKERS[request.param](bed)


def state(bed: Bed, instrument: Instrument) -> str:
    return bed.ask(instrument, "SYST:REM?;:SYST:LOC?;:SYST:RWL?")


def test_the_state_is_set_and_asked(bed: Bed, instrument: Instrument) -> None:
    """Remote after power-on; local, remote with a dead key, remote: each as commanded, and *RST leaves it alone."""
    assert state(bed, instrument) == "1;0;0"
    for command, said in (("SYSTEM:LOCAL", "0;1;0"), ("SYST:RWL", "1;0;1"), ("*RST", "1;0;1"), ("SYST:REM", "1;0;0")):
        bed.tell(instrument, command)
        assert state(bed, instrument) == said
    assert bed.ask(instrument, "SYST:ERR?") == NONE


def test_settings_are_refused_while_local(bed: Bed, instrument: Instrument) -> None:
    """A setting sent in local is -203 with the execution bit, changes nothing and is not counted as a change; in remote
    again it is obeyed."""
    setting, query = SETTINGS[instrument.model]
    bed.tell(instrument, "*CLS", "SYST:LOC")
    before, changes = bed.ask(instrument, query), instrument.changes
    bed.tell(instrument, setting)
    assert bed.ask(instrument, query) == before
    assert instrument.changes == changes
    assert bed.ask(instrument, "SYST:ERR?") == PROTECTED
    assert bed.ask(instrument, "*ESR?") == "16"
    bed.tell(instrument, "SYST:REM", setting)
    assert bed.ask(instrument, "SYST:ERR?") == NONE
    assert instrument.changes == changes + 2


def test_the_state_holds_within_a_message(bed: Bed) -> None:
    """Units after `SYST:LOC` in one message are refused, and obeyed after `SYST:REM`, also when it was sent before."""
    supply = bed.bench_supply()
    for _ in range(2):
        bed.tell(supply, "SOUR:VOLT 1;:SYST:LOC;:SOUR:VOLT 2")
        assert bed.ask(supply, "SOUR:VOLT?;:SYST:ERR?") == f"1.00000E+00;{PROTECTED}"
        bed.tell(supply, "SOUR:VOLT 3;:SYST:REM;:SOUR:VOLT 4")
        assert bed.ask(supply, "SOUR:VOLT?;:SYST:ERR?") == f"4.00000E+00;{PROTECTED}"


def test_status_is_set_in_local_too(bed: Bed) -> None:
    """Masks, *CLS and *OPC belong to whoever listens, not to the panel; an unknown header stays -113."""
    supply = bed.bench_supply()
    bed.tell(supply, "SYST:LOC", "*CLS", "*ESE 60", "*SRE 32", "*OPC")
    assert bed.ask(supply, "*ESE?;*SRE?;*ESR?;:SYST:ERR?") == f"60;32;1;{NONE}"
    bed.tell(supply, "FOO 1")
    assert bed.ask(supply, "SYST:ERR?").startswith("-113,")


def test_an_output_cannot_be_switched_in_local(bed: Bed) -> None:
    """A supply that is on stays on when it is told off in local, and says why: off has to be proved, not believed."""
    supply = bed.bench_supply()
    bed.tell(supply, "OUTP ON", "SYST:LOC", "OUTP OFF")
    assert bed.ask(supply, "OUTP?;:SYST:ERR?") == f"1;{PROTECTED}"
    assert bed.plant.supply[2] is True


def test_some_want_to_be_told_remote_first(bed: Bed) -> None:
    """With `local_at_power_on` an instrument begins in local, and is there again after a restart."""
    supply = bed.bench_supply(errors={"local_at_power_on": 1.0})
    for _ in range(2):
        assert state(bed, supply) == "0;1;0"
        bed.tell(supply, "SYST:REM")
        assert state(bed, supply) == "1;0;0"
        supply.power_on()


@pytest.mark.parametrize("make", [lambda bed: bed.board(), lambda bed: bed.add(LineTachometer)])
def test_what_has_no_panel_has_no_local(bed: Bed, make: Callable[[Bed], Instrument]) -> None:
    """Board and line tachometer know no such command, and the key is refused for them."""
    instrument = make(bed)
    bed.tell(instrument, "SYST:LOC")
    assert instrument.panel is None
    assert [code for code, _ in instrument._errors] == [-113]
    with pytest.raises(ConfigError, match="local_at_power_on"):
        bed.add(type(instrument), errors={"local_at_power_on": 1.0})


def test_a_locked_key_keeps_the_person_out(short_job: Path) -> None:
    """The fault `local_mode` is a person at the panel: after `SYST:RWL` it does nothing, after `SYST:REM` it does."""
    job = load(short_job)
    spec = SimulatedFault.model_validate({"kind": "local_mode", "instrument": "supply", "start": "5 s"})
    bench = build(job.model_copy(update={"rig": job.rig.model_copy(update={"simulated_faults": (spec,)})}))
    port = bench.ports["supply"]
    port.open()

    def ask(message: bytes) -> bytes:
        port.write(message + b"\n")
        bench.advance(bench.now + 0.1)
        return port.read()

    ask(b"SYST:RWL")
    bench.advance(6.0)
    ask(b"SOUR:VOLT 5")
    assert (ask(b"SOUR:VOLT?"), bench.struck) == (b"5.00000E+00\n", [])
    ask(b"SYST:REM")
    ask(b"SOUR:VOLT 7")
    assert (ask(b"SOUR:VOLT?"), [one.kind for one in bench.struck]) == (b"5.00000E+00\n", ["local_mode"])
