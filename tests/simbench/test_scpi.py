"""The message parser: headers, paths, parameters, numbers, channel lists. Values from SCPI-1999 (from memory)."""

from __future__ import annotations

import pytest

from sweeprig.simbench.scpi import (
    CommandTree,
    Handler,
    Refused,
    boolean,
    channel_list,
    error_answer,
    event_bit,
    integer,
    nr3,
    number,
    parse_message,
    split_outside,
)


@pytest.fixture
def said() -> list[str]:
    return []


@pytest.fixture
def tree(said: list[str]) -> CommandTree:
    made = CommandTree()

    def says(word: str, answer: str | None = None) -> Handler:
        def handler(parameters: tuple[str, ...]) -> str | None:
            said.append(" ".join((word, *parameters)))
            return answer

        return handler

    for header, least, most in (
        ("[SOURce]:VOLTage[:LEVel]", 1, 1),
        ("[SOURce]:VOLTage[:LEVel]?", 0, 0),
        ("[SOURce]:CURRent", 1, 1),
        ("SENSe:VOLTage:DC:RANGe", 1, 1),
        ("SENSe:VOLTage:DC:APERture", 1, 1),
        ("MEASure:FREQuency?", 1, 1),
        ("*CLS", 0, 0),
    ):
        made.add(header, says(header), least, most)
    made.add("*IDN?", says("*IDN?", "a,b,c,d"), indefinite=True)
    return made


def run(tree: CommandTree, message: bytes) -> int:
    """Run all units of a message; the number of the error it ends in, 0 without one."""
    for unit in parse_message(message, tree):
        try:
            unit.handler(unit.parameters)
        except Refused as refused:
            return refused.number
    return 0


@pytest.mark.parametrize(
    "message",
    [
        b"SOUR:VOLT 5", b"source:voltage 5", b":Sour:Voltage:Level 5", b"VOLT 5", b"volt:lev 5", b"VOLTAGE\t5",
        b"  VOLT   5  ",
    ],
)  # fmt: skip
def test_short_and_long_forms_in_any_case_reach_the_same_command(
    tree: CommandTree, said: list[str], message: bytes
) -> None:
    """Short form, long form, any case, default nodes given or left out: one command."""
    assert run(tree, message) == 0
    assert said == ["[SOURce]:VOLTage[:LEVel] 5"]


@pytest.mark.parametrize("message", [b"SOURC:VOLT 5", b"SOUR:VOLTA 5", b"SOU:VOLT 5", b"FOO", b"VOLT:FOO?", b"*FOO?"])
def test_anything_between_short_and_long_form_is_an_undefined_header(
    tree: CommandTree, said: list[str], message: bytes
) -> None:
    """A mnemonic that is neither short nor long form, or unknown, is -113 and does nothing."""
    assert run(tree, message) == -113
    assert said == []


def test_a_later_unit_starts_from_the_path_of_the_one_before(tree: CommandTree, said: list[str]) -> None:
    """`SENS:VOLT:DC:RANG 10;APER 0.1` sets both; a common command in between leaves the path alone."""
    assert run(tree, b"SENS:VOLT:DC:RANG 10;*CLS;APER 0.1") == 0
    assert said == ["SENSe:VOLTage:DC:RANGe 10", "*CLS", "SENSe:VOLTage:DC:APERture 0.1"]


def test_a_leading_colon_returns_to_the_root(tree: CommandTree, said: list[str]) -> None:
    """After `;:` the header is read from the root; without the colon the same header is undefined there."""
    assert run(tree, b"SENS:VOLT:DC:RANG 10;:SOUR:CURR 1") == 0
    assert run(tree, b"SENS:VOLT:DC:RANG 10;SOUR:CURR 1") == -113
    assert said[-2:] == ["[SOURce]:CURRent 1", "SENSe:VOLTage:DC:RANGe 10"]


@pytest.mark.parametrize(
    ("message", "code"),
    [
        (b"SOUR:VOLT", -109), (b"SOUR:VOLT 1,", -108), (b"SOUR:VOLT 1,2", -108), (b"VOLT? 1", -108),
        (b"VOLT 1;;CURR 1", -102), (b"VOLT 1;", -102), (b"MEAS::FREQ? (@1)", -102), (b"MEAS!FREQ", -101),
        (b"V\xb5LT 1", -101), (b"ABCDEFGHIJKLM 1", -112), (b"*IDN?;VOLT?", -440), (b"MEAS:FREQ", -113),
    ],
)  # fmt: skip
def test_a_wrong_message_gets_its_standard_number(tree: CommandTree, message: bytes, code: int) -> None:
    """Each kind of wrong message ends in the error number that the standard gives it."""
    assert run(tree, message) == code


def test_units_before_an_error_are_done_and_those_behind_it_dropped(tree: CommandTree, said: list[str]) -> None:
    """The parser resets at a command error: what came before it was obeyed, what follows is not."""
    assert run(tree, b"VOLT 1;FOO 2;CURR 3") == -113
    assert said == ["[SOURce]:VOLTage[:LEVel] 1"]


def test_an_empty_message_is_no_error(tree: CommandTree) -> None:
    """A lone terminator, or blanks, does nothing."""
    assert parse_message(b"  \t ", tree) == ()


def test_separators_inside_quotes_and_parentheses_do_not_separate() -> None:
    """`(@1,3)` is one parameter and a `;` in quotes is text."""
    assert split_outside("(@1,3),4", ",") == ["(@1,3)", "4"]
    assert split_outside('"a;b" ;\'c;"\'', ";") == ['"a;b"', "'c;\"'"]


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("5", "V", 5.0), ("+5.0E0", "V", 5.0), ("5 mV", "V", 0.005), ("5MV", "V", 0.005), (".5 kV", "V", 500.0),
        ("1.5E+3", "HZ", 1500.0), ("2 KHZ", "HZ", 2000.0), ("1 MHz", "HZ", 1e6), ("20 us", "S", 20e-6),
        ("2 s", "MS", 2000.0), ("2000", "MS", 2000.0), ("30 PCT", "%", 30.0), ("30%", "%", 30.0), ("1 E 2", "V", 100.0),
        ("MIN", "V", 0.0), ("maximum", "V", 1e6),
    ],
)  # fmt: skip
def test_numbers_are_read_in_all_forms_and_with_suffixes(text: str, unit: str, value: float) -> None:
    """NR1, NR2, NR3 and the SCPI suffixes, where M is milli except before HZ."""
    assert number(text, unit, 0.0, 1e6) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    ("text", "code"),
    [("abc", -104), ("1,5", -104), ("5 A", -131), ("5 xV", -131), ("11", -222), ("-1", -222), ("1E999", -222)],
)  # fmt: skip
def test_a_wrong_number_is_refused_with_its_standard_code(text: str, code: int) -> None:
    """No number is -104, a wrong suffix -131, out of range -222."""
    with pytest.raises(Refused) as refused:
        number(text, "V", 0.0, 10.0)
    assert refused.value.number == code


def test_whole_numbers_are_rounded_and_bounded() -> None:
    """12.6 is 13 where an integer is wanted, and 256 is out of 0 to 255."""
    assert integer("12.6", 0, 255) == 13
    with pytest.raises(Refused, match="-222"):
        integer("256", 0, 255)


@pytest.mark.parametrize(
    ("text", "value"), [("ON", True), ("off", False), ("1", True), ("0", False), ("0.4", False), ("2", True)]
)
def test_booleans_are_words_or_rounded_numbers(text: str, value: bool) -> None:
    """ON, OFF or a number that is rounded."""
    assert boolean(text) is value


def test_a_word_that_is_no_boolean_is_an_illegal_value() -> None:
    """YES is -224."""
    with pytest.raises(Refused, match="-224"):
        boolean("YES")


@pytest.mark.parametrize(
    ("text", "channels"), [("(@1)", [1]), ("(@1,3)", [1, 3]), ("(@2:4)", [2, 3, 4]), ("(@ 1 , 2)", [1, 2])]
)
def test_channel_lists_are_read(text: str, channels: list[int]) -> None:
    """One channel, several, a span."""
    assert channel_list(text, 4) == channels


@pytest.mark.parametrize(
    ("text", "code"),
    [("1", -104), ("(@5)", -222), ("(@0)", -222), ("(@x)", -224), ("(@1:)", -224), ("(@2:1)", -222)],
)
def test_wrong_channel_lists_are_refused(text: str, code: int) -> None:
    """No list -104, no such channel -222, no number -224."""
    with pytest.raises(Refused) as refused:
        channel_list(text, 4)
    assert refused.value.number == code


def test_error_answers_carry_number_text_and_detail() -> None:
    """`number,"text;detail"`, the text at most 255 characters and without a quote inside."""
    assert error_answer((0, "")) == '0,"No error"'
    assert error_answer((-222, "99")) == '-222,"Data out of range;99"'
    long = error_answer((-113, 'x"' * 300))
    assert len(long) == len('-113,""') + 255
    assert long.count('"') == 2


def test_every_error_class_sets_its_event_bit() -> None:
    """Command errors bit 5, execution 4, device 3, query 2 (SCPI-1999 21.8; read in a standard's extract)."""
    assert [event_bit(code) for code in (-113, -222, -350, -410, 7)] == [32, 16, 8, 4, 8]


def test_nr3_has_a_point_and_a_signed_exponent() -> None:
    """Answers are strict NR3."""
    assert nr3(0.2, 3) == "2.000E-01"
