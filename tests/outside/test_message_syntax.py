"""The simulated instruments against SCPI-1999 and IEEE 488.2.

Numbers in the docstrings are clauses of IEEE 488.2-1992 and SCPI-1999 as the project's notes on links give them; "seen"
means that the clause was read cited in a source, "from memory" that it was not.
"""

from __future__ import annotations

import math
import random
import re

import pytest

from sweeprig.quantities import NO_DATA_MAGNITUDE, parse_number
from sweeprig.simbench.bench import Bench
from sweeprig.simbench.board import Board
from sweeprig.simbench.chopper import Wave
from sweeprig.simbench.instrument import Instrument, Setup
from sweeprig.simbench.multimeter import Multimeter
from sweeprig.simbench.scope import Scope
from sweeprig.simbench.scpi import event_bit, short_form, spellings
from sweeprig.simbench.supply import Supply


class Still:
    """A motor at rest without supply."""

    supply_limited = False
    motor_volt_seconds = supply_volt_seconds = supply_amp_seconds = 0.0
    motor_amp_seconds = switch_amp_seconds = node_volt_seconds = 0.0
    edges = 0
    last_edge_at = -math.inf

    def __init__(self) -> None:
        self.now = 0.0

    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None: ...

    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None: ...

    def advance(self, to: float) -> None:
        self.now = to

    def wave(self) -> Wave | None:
        return None

    def pwm_phase_s(self) -> float:
        return 0.0


@pytest.fixture(params=[Multimeter, Supply, Scope, Board], ids=["multimeter", "supply", "scope", "board"])
def instrument(request: pytest.FixtureRequest) -> Instrument:
    kind: type[Instrument] = request.param
    return made(kind)


def made(kind: type[Instrument]) -> Instrument:
    """One instrument of this kind on a bench of its own, with a client on its port."""
    rng = random.Random(1)
    instrument = kind(Setup("one", "SIM1", rng, rng), Bench(Still()))
    instrument.port.open()
    return instrument


def ask(instrument: Instrument, message: str) -> str:
    """All that comes back within 2 s of bench time."""
    instrument.port.write(message.encode("ascii") + b"\n")
    instrument.bench.advance(instrument.bench.now + 2.0)
    return instrument.port.read().decode("ascii")


def test_row_1_the_identity_has_four_fields_in_at_most_72_characters(instrument: Instrument) -> None:
    """Maker, model, serial, firmware; printable, no comma or semicolon in a field (488.2 10.14, from memory)."""
    line = ask(instrument, "*IDN?").removesuffix("\n")
    fields = line.split(",")
    assert len(fields) == 4
    assert all(fields)
    assert len(line) <= 72
    assert re.fullmatch(r"[\x20-\x3A\x3C-\x7E]+", line)


def test_row_3_numbers_are_answered_as_nr1_nr2_or_nr3(instrument: Instrument) -> None:
    """One of the three forms, NR3 with capital E and signed exponent (488.2 8.7.2 to 8.7.4, from memory)."""
    queries = [header for header in instrument.tree.headers if header.endswith("?") and "IDN" not in header]
    form = re.compile(r"[+-]?\d+|[+-]?\d+\.\d+(E[+-]\d+)?")
    answers = {}
    for header in queries:
        plain = "".join(re.findall(r"[A-Z*:?]", re.sub(r"\[.*?\]", "", header))).lstrip(":")
        answers[header] = ask(instrument, plain + (" (@1)" if instrument.model == "scope" and "MEAS" in plain else ""))
    del answers["SYSTem:ERRor[:NEXT]?"]
    numbers = [field for text in answers.values() for field in text.strip().split(",") if text]
    assert len(numbers) >= 8
    assert [number for number in numbers if not form.fullmatch(number)] == []


@pytest.mark.parametrize(
    ("kind", "header"),
    [(Supply, "OUTP"), (Board, "OUTP"), (Multimeter, "SENS:VOLT:DC:RANG:AUTO")],
    ids=["supply", "board", "multimeter"],
)
@pytest.mark.parametrize(("word", "answer"), [("ON", "1"), ("off", "0"), ("1", "1"), ("0", "0")])
def test_row_6_booleans_are_answered_as_0_or_1(kind: type[Instrument], header: str, word: str, answer: str) -> None:
    """Whatever word set them, 0 and 1 come back (SCPI-1999 vol. 1 ch. 7, from memory)."""
    assert ask(made(kind), f"{header} {word};:{header}?") == answer + "\n"


def test_row_7_no_query_answers_with_a_block(instrument: Instrument) -> None:
    """None of the answers begins with `#`, so that a line reader is enough (488.2 8.7.9, from memory)."""
    for header in instrument.tree.headers:
        plain = "".join(re.findall(r"[A-Z*:?]", re.sub(r"\[.*?\]", "", header))).lstrip(":")
        assert "#" not in ask(instrument, plain)


def test_row_9_the_event_status_register_is_cleared_by_reading(instrument: Instrument) -> None:
    """Bit 7 at power-on, bit 5 for a command error, bit 0 by *OPC; each is gone after *ESR? (488.2 11.5.1, seen)."""
    assert ask(instrument, "*ESR?") == "128\n"
    assert ask(instrument, "*ESR?") == "0\n"
    ask(instrument, "NONSENSE")
    ask(instrument, "*OPC")
    assert ask(instrument, "*ESR?") == "33\n"
    assert ask(instrument, "*ESR?") == "0\n"


def test_row_10_clear_empties_queue_and_events_but_not_masks_and_reset_neither(instrument: Instrument) -> None:
    """*CLS empties both, *RST neither; masks stay (488.2 10.3, 10.32 from memory, 11.4.3.4 seen)."""
    ask(instrument, "*ESE 60;*SRE 32;NONSENSE")
    ask(instrument, "*RST")
    assert ask(instrument, "*ESE?;*SRE?") == "60;32\n"
    assert ask(instrument, "SYST:ERR?").startswith("-113,")
    ask(instrument, "NONSENSE")
    ask(instrument, "*CLS")
    assert ask(instrument, "*ESR?;*ESE?;*SRE?;SYST:ERR?") == '0;60;32;0,"No error"\n'


def test_row_11_operation_complete(instrument: Instrument) -> None:
    """*OPC? answers 1 and sets no bit; *OPC sets bit 0, answers nothing; nor does *WAI (488.2 12.5.2 seen)."""
    ask(instrument, "*CLS")
    assert ask(instrument, "*OPC?") == "1\n"
    assert ask(instrument, "*ESR?") == "0\n"
    assert ask(instrument, "*OPC") == ""
    assert ask(instrument, "*WAI") == ""
    assert ask(instrument, "*ESR?") == "1\n"


def test_row_12_the_error_query_answers_number_and_quoted_text(instrument: Instrument) -> None:
    """`number,"text"`, at most 255 characters of text, empty `0,"No error"` (SCPI-1999 vol. 2 21.8.2, seen)."""
    assert ask(instrument, "SYST:ERR?") == '0,"No error"\n'
    ask(instrument, "NONSENSE" * 10)
    ask(instrument, "*ESE abc")
    for number in (-112, -104):
        found = re.fullmatch(r'(-?\d+),"([^"]{1,255})"\n', ask(instrument, "SYST:ERR?"))
        assert found is not None
        assert int(found.group(1)) == number


def test_row_13_the_queue_is_first_in_first_out_and_overflows_at_its_end(instrument: Instrument) -> None:
    """On overflow the newest entry is replaced by -350 and later ones are lost (SCPI-1999 21.8, from memory)."""
    for number in range(40):
        ask(instrument, f"WRONG{number}")
    errors = []
    while not (answer := ask(instrument, "SYST:ERR?")).startswith("0,"):
        errors.append(answer.split(",")[1])
    assert errors[0] == '"Undefined header;WRONG0"\n'
    assert errors[-2] == f'"Undefined header;WRONG{len(errors) - 2}"\n'
    assert errors[-1] == '"Queue overflow"\n'


@pytest.mark.parametrize(
    ("code", "bit"),
    [
        (-100, 5), (-199, 5), (-200, 4), (-299, 4), (-300, 3), (-399, 3), (-400, 2), (-499, 2), (1, 3), (32767, 3),
    ],
)  # fmt: skip
def test_row_14_each_class_of_errors_has_its_event_bit(code: int, bit: int) -> None:
    """Command bit 5, execution 4, device (also positive) 3, query 2 (SCPI-1999 21.8; 488.2 11.5.1, seen)."""
    assert event_bit(code) == 1 << bit


def test_row_17_special_numbers_are_no_data_to_a_reader() -> None:
    """Nothing to measure is 9.91E37; a reader takes it as no data (SCPI-1999 vol. 1 7.2.1, chapter seen)."""
    rng = random.Random(1)
    bench = Bench(Still())
    scope, board = Scope(Setup("scope", "S", rng, rng, "drive_signal"), bench), Board(Setup("b", "B", rng, rng), bench)
    scope.port.open()
    board.port.open()
    for text in (ask(scope, "MEAS:FREQ? (@1)"), ask(board, "MEAS:FREQ?")):
        assert float(text) == 9.91e37
        assert float(text) >= NO_DATA_MAGNITUDE
        assert parse_number(text) == (None, "no_data:overload")


def test_row_20_short_forms_follow_the_rule(instrument: Instrument) -> None:
    """Short form: four letters, three when the fourth is a vowel (SCPI-1999 vol. 1 ch. 6, from memory).

    Common commands have one form only.
    """
    mnemonics = {
        word for header in instrument.tree.headers if header[0] != "*" for word in re.findall("[A-Za-z]+", header)
    }
    assert len(mnemonics) >= 5
    for mnemonic in mnemonics:
        assert spellings(mnemonic)[0] == short_form(mnemonic), mnemonic


def test_row_20_a_leading_colon_returns_to_the_root(instrument: Instrument) -> None:
    """After `;` the path is kept, `;:` returns to the root (SCPI-1999 vol. 1 ch. 6, from memory)."""
    assert ask(instrument, "SYST:ERR?;ERR?") == '0,"No error";0,"No error"\n'
    assert ask(instrument, "system:error:next?;:syst:Err?") == '0,"No error";0,"No error"\n'
    ask(instrument, "*CLS;:SYST:ERR?;SYST:ERR?")
    assert ask(instrument, "SYST:ERR?").startswith("-113,")
