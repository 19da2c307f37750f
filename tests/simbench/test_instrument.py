"""What all simulated instruments share: common commands, status registers, error queue, interrupted queries."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

from sweeprig.errors import ConfigError
from sweeprig.quantities import Accuracy
from sweeprig.simbench.instrument import Instrument

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

EVERY_KIND = ["board", "multimeter", "bench_supply", "scope"]


@pytest.fixture(params=EVERY_KIND)
def instrument(request: pytest.FixtureRequest, bed: Bed) -> Instrument:
    made: Instrument = getattr(bed, request.param)()
    return made


def test_the_identity_has_four_fields_and_says_simulated(bed: Bed, instrument: Instrument) -> None:
    """*IDN? answers maker, model, serial, firmware, and the maker is SIMULATED."""
    assert bed.ask(instrument, "*IDN?").split(",") == ["SIMULATED", instrument.model, "SIM1", "1.0"]


def test_the_power_on_bit_is_set_once(bed: Bed, instrument: Instrument) -> None:
    """The first *ESR? shows bit 7 and clears it; after a power cycle it is there again."""
    assert bed.ask(instrument, "*ESR?") == "128"
    assert bed.ask(instrument, "*ESR?") == "0"
    instrument.power_on()
    assert bed.ask(instrument, "*ESR?") == "128"


def test_an_unknown_header_is_queued_and_gets_no_answer(bed: Bed, instrument: Instrument) -> None:
    """FOO? gives no answer, -113 in the queue, the command error bit, and an empty queue after that."""
    bed.tell(instrument, "*CLS")
    assert bed.ask(instrument, "FOO?", within_s=2.0) == ""
    assert bed.ask(instrument, "SYST:ERR?") == '-113,"Undefined header;FOO?"'
    assert bed.ask(instrument, "SYSTEM:ERROR:NEXT?") == '0,"No error"'
    assert bed.ask(instrument, "*ESR?") == "32"


def test_answers_of_one_message_are_joined(bed: Bed, instrument: Instrument) -> None:
    """Several queries in one message give one line, joined by `;`."""
    assert bed.ask(instrument, "*CLS;*ESR?;*OPC?;SYST:ERR?") == '0;1;0,"No error"'


def test_a_query_after_the_identity_is_refused(bed: Bed, instrument: Instrument) -> None:
    """*IDN? has an indefinite answer: a query behind it is -440 and only the identity comes."""
    assert bed.ask(instrument, "*IDN?;*OPC?").startswith("SIMULATED,")
    assert bed.ask(instrument, "SYST:ERR?").startswith("-440,")


def test_the_error_queue_overflows_into_its_newest_entry(bed: Bed, instrument: Instrument) -> None:
    """With the queue full the newest entry becomes -350 and older ones stay, first in, first out."""
    bed.tell(instrument, *(f"BAD{number}" for number in range(20)))
    errors = [bed.ask(instrument, "SYST:ERR?") for _ in range(17)]
    assert errors[:15] == [f'-113,"Undefined header;BAD{number}"' for number in range(15)]
    assert errors[15:] == ['-350,"Queue overflow"', '0,"No error"']


def test_reset_keeps_and_clear_empties_the_error_queue(bed: Bed, instrument: Instrument) -> None:
    """*RST leaves queue and masks alone; *CLS empties queue and event register and leaves the masks."""
    bed.tell(instrument, "*ESE 60", "*SRE 36", "BAD", "*RST")
    assert bed.ask(instrument, "*STB?") == str(4 + 32 + 64)
    bed.tell(instrument, "*CLS")
    assert bed.ask(instrument, "*STB?;*ESE?;*SRE?") == "0;60;36"
    assert bed.ask(instrument, "SYST:ERR?") == '0,"No error"'


def test_the_status_byte_shows_an_answer_that_is_there(bed: Bed, instrument: Instrument) -> None:
    """Behind another query in one message *STB? has the message-available bit."""
    assert bed.ask(instrument, "*OPC?;*STB?") == "1;16"


def test_operation_complete_sets_its_bit_and_the_query_does_not(bed: Bed, instrument: Instrument) -> None:
    """*OPC? answers 1 and leaves bit 0 alone; *OPC sets bit 0 and answers nothing."""
    bed.tell(instrument, "*CLS")
    assert bed.ask(instrument, "*OPC?") == "1"
    assert bed.ask(instrument, "*ESR?") == "0"
    bed.tell(instrument, "*OPC")
    assert bed.ask(instrument, "*ESR?") == "1"


def test_an_overlong_line_is_an_input_overrun(bed: Bed, instrument: Instrument) -> None:
    """A line longer than the input buffer is dropped whole, -363, and the next one is understood."""
    instrument.port.write(b"*IDN?;" * 2000)
    instrument.port.write(b"*IDN?\n")
    bed.bench.advance(bed.bench.now + 2.0)
    assert instrument.port.read() == b""
    assert bed.ask(instrument, "SYST:ERR?") == '-363,"Input buffer overrun"'


def test_queries_change_nothing_and_settings_are_counted(bed: Bed, instrument: Instrument) -> None:
    """The bench counts state-changing units of each instrument; queries and refused units do not count."""
    for query in ("*IDN?", "*ESR?", "SYST:ERR?", "*TST?", "FOO?"):
        bed.ask(instrument, query, within_s=0.5)
    assert bed.bench.state_changes == {instrument.name: 0}
    bed.tell(instrument, "*RST;*CLS", "FOO 1", "*ESE 999")
    assert bed.bench.state_changes == {instrument.name: 2}


def test_a_line_may_come_in_pieces_and_with_carriage_return(bed: Bed, instrument: Instrument) -> None:
    """A message is whole at its LF, however its bytes came; a CR before it is no part of it."""
    for piece in (b"*O", b"PC", b"?\r", b"\n*ES", b"E?\n"):
        instrument.port.write(piece)
    bed.bench.advance(bed.bench.now + 0.1)
    assert instrument.port.read() == b"1\n0\n"


def test_opening_the_port_flushes_what_was_left(bed: Bed, instrument: Instrument) -> None:
    """An unread answer and a half line of an earlier client are gone after open."""
    instrument.port.write(b"*OPC?\n*ES")
    bed.bench.advance(bed.bench.now + 0.1)
    instrument.port.open()
    assert instrument.port.next_ready() == float("inf")
    assert bed.ask(instrument, "*OPC?") == "1"


def test_a_message_before_the_answer_is_formed_interrupts_the_query(bed: Bed) -> None:
    """Row B4: A reading under way is dropped, -410 is queued, and the new message is answered."""
    meter = bed.multimeter()
    meter.port.write(b"READ?\n")
    assert bed.ask(meter, "*OPC?") == "1"
    assert bed.ask(meter, "SYST:ERR?").startswith("-410,")
    assert bed.ask(meter, "*ESR?") == str(128 + 4)


def test_switching_off_is_not_held_up_by_a_reading_under_way(bed: Bed) -> None:
    """OUTP OFF in the middle of a current measurement acts at once."""
    supply = bed.bench_supply()
    bed.tell(supply, "OUTP ON")
    supply.port.write(b"MEAS:CURR?\n")
    supply.port.write(b"OUTP OFF\n")
    assert bed.plant.supply[2] is False


def test_an_error_key_that_would_be_ignored_is_refused(bed: Bed) -> None:
    """A misspelt key in [simulated.NAME] is an error that names the known ones."""
    with pytest.raises(ConfigError) as refused:
        bed.multimeter(errors={"volts_gain_eror_percent": 1.0})
    text = str(refused.value)
    assert "volts_gain_eror_percent" in text
    assert "volts_gain_error_percent" in text
    assert "[simulated.multimeter]" in text


def test_a_place_that_cannot_be_measured_is_refused(bed: Bed) -> None:
    """A multimeter on the drive signal is refused with the places it could be at."""
    with pytest.raises(ConfigError) as refused:
        bed.multimeter(connected_to="drive_signal")
    assert "drive_signal" in str(refused.value)
    assert "across_motor" in str(refused.value)


def test_drawn_errors_stay_within_the_accuracy_statement(bed: Bed) -> None:
    """Gain and offset error of an instrument lie in the rectangle of its statement and are not zero."""
    meter = bed.multimeter(accuracy={"volts": Accuracy(0.5, 0.1)})
    scale = meter._scale
    assert 0.0 < abs(scale.gain - 1.0) <= 0.005
    assert 0.0 < abs(scale.offset) <= 0.1
