"""Inputs for whatever reads bytes or texts that we did not write, and what must come of each: right or a typed error.

Used by test_fuzz.py with some hundred seeded inputs a reader, and by tests/figures/fuzz.py with many. Each check takes
one input and raises AssertionError, or whatever escaped, where the reader is at fault. Nothing here runs by itself.
"""

# ruff: noqa: PT017 - an error of ours is one of the two right outcomes, and no test expects it

from __future__ import annotations

import json
import math
import re
import tempfile
import tomllib
from collections.abc import Callable
from decimal import Decimal
from pathlib import Path
from typing import Any

import tomli_w
from hypothesis import strategies as st
from sweeprig_drivers import common

from sweeprig.conduct import messages
from sweeprig.conduct.states import EVENTS, Ending, Event, State
from sweeprig.dialects import find_dialect
from sweeprig.errors import LinkGarbled, SweeprigError
from sweeprig.job.toml_source import parse
from sweeprig.link.framing import parse_block, parse_line, show, still_owed
from sweeprig.logbook import values
from sweeprig.quantities import parse_number, parse_quantity
from sweeprig.roles import Reply

Check = Callable[[Any], None]

LARGEST = 64
BYTES = st.binary(max_size=100) | st.lists(
    st.sampled_from([b"\r", b"\n", b"#", b"0", b"9", b"15", b"hello", b"1.5", b"\xff", b"#0", b"#3", b"-113,", b";"]),
    max_size=14,
).map(b"".join)
DATA = st.binary(max_size=60)
NOISE = st.binary(max_size=8)
NUMBERS = st.floats(allow_nan=False, allow_infinity=False)
SCRAPS = st.lists(
    st.sampled_from(["1", "23", ".", "e", "E", "+", "-", " ", "9.91E37", "OL", "****", "inf", "nan", "_", "x", "٣"]),
    max_size=8,
).map("".join)
UNITS = st.sampled_from(["Hz", "V", "A", "ohm", "s", "%", "rpm", "degC", "W", "1"])
LEAVES = st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=12)
JSON = st.recursive(
    LEAVES, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4)
)
KEYS = st.text(st.sampled_from("ab-_.\"' é\\\n"), max_size=6)
TABLES = st.dictionaries(
    KEYS,
    st.recursive(
        st.booleans()
        | st.integers(-(2**63) + 1, 2**63 - 1)
        | NUMBERS
        | st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
        | st.dates(),
        lambda inner: st.lists(inner, max_size=3) | st.dictionaries(KEYS, inner, max_size=3),
    ),
    max_size=4,
)
TOML_SCRAPS = st.lists(
    st.sampled_from(
        [
            "a",
            "b.c",
            "[",
            "]",
            "[[",
            "]]",
            "{",
            "}",
            "=",
            "\n",
            '"',
            "'",
            '"""',
            "'''",
            "\\",
            ",",
            "#",
            " ",
            "1",
            "1e9",
            "0x",
            "inf",
            "nan",
            "2026-03-02",
            "T07:00:00",
            "true",
            "\r\n",
            "\t",
            "\0",
            "é",
            "_",
        ]
    ),
    max_size=30,
).map("".join) | st.text(max_size=40)


def line(buffer: bytes) -> None:
    """Any bytes: the first line as the definition says it, found here by a regular expression; or garbled."""
    found = re.match(rb"([^\r\n]*)(\r\n|\r|\n)", buffer)
    body = found.group(1) if found else buffer
    try:
        used, message = parse_line(buffer, LARGEST)
    except LinkGarbled as error:
        assert len(body) > LARGEST
        assert len(str(error)) < 400
        return
    assert len(body) <= LARGEST
    assert (used, message) == ((found.end(), body) if found else (0, None))
    if message is not None:
        assert still_owed(Reply.LINE, buffer, used, message) in (b"", b"\n")


def block(buffer: bytes) -> None:
    """Any bytes: a whole block with exactly the bytes announced, not yet, or garbled; a beginning never says more."""
    try:
        used, message = parse_block(buffer, LARGEST)
    except LinkGarbled as error:
        assert len(str(error)) < 400
        return
    if message is None:
        assert used == 0
        return
    digits = buffer[1] - ord("0")
    assert len(message) == int(buffer[2 : 2 + digits])
    assert buffer[2 + digits :].startswith(message)
    assert buffer[2 + digits + len(message) : used] in (b"", b"\r\n", b"\r", b"\n")
    for length in range(2 + digits + len(message)):
        assert parse_block(buffer[:length], LARGEST) == (0, None)


def block_comes_back(case: tuple[bytes, bytes, bytes, int]) -> None:
    """Written as a block of any number of length digits, then garbage: the data back, whole, halved, byte by byte."""
    data, end, behind, digits = case
    written = b"#%d%0*d%s%s" % (digits, digits, len(data), data, end)
    assert parse_block(written + behind)[1] == data
    held = bytearray()
    for byte in written:
        held.append(byte)
        used, message = parse_block(held)
        if message is not None:
            break
    assert message == data
    assert written[used:] in (b"", b"\n", end)
    half = len(written) // 2
    early = parse_block(written[:half])
    assert early == (0, None) or early[1] == data


def garbage_before(case: tuple[bytes, bytes]) -> None:
    """Garbage and then a block: never data from the middle; and as lines, every byte of both is handed out once."""
    noise, data = case
    if noise[:1] not in (b"", b"#"):
        try:
            parse_block(noise + b"#15hello")
        except LinkGarbled as error:
            assert "instead of '#'" in str(error)
        else:
            raise AssertionError(f"taken: {show(noise)}")
    stream, lines = noise + b"\n" + data + b"\n", []
    rest = stream
    while rest:
        used, message = parse_line(rest)
        assert message is not None
        lines.append(message)
        rest = rest[used:]
    assert b"".join(lines) == stream.replace(b"\r", b"").replace(b"\n", b"")


def indefinite(data: bytes) -> None:
    """A block of indefinite length is garbled at once, whatever follows: its end does not travel on these links."""
    for buffer in (b"#0", b"#0" + data, b"#0" + data + b"\n"):
        try:
            parse_block(buffer)
        except LinkGarbled:
            continue
        raise AssertionError(f"taken: {show(buffer)}")


def number(text: str) -> None:
    """Any text: as decimal arithmetic reads it, no data with a reason, or a ValueError."""
    try:
        value, reason = parse_number(text, ("OL", "****"))
    except ValueError as error:
        assert len(str(error)) < 300
        return
    if value is None:
        assert reason in ("no_data:empty", "no_data:marker", "no_data:overload")
        return
    assert math.isfinite(value)
    assert text.strip().isascii()
    assert abs(value) < 9.0e37
    assert value == float(Decimal(text.strip()))


def number_refuses_nothing(value: float) -> None:
    """Every way in which instruments write a number gives that number back (NR1, NR2, NR3; IEEE 488.2, 8.7)."""
    for text in (repr(value), f"{value:+.17E}", f" {value:.17e} ", f"{value:.3f}", f"{value:.0f}"):
        read, reason = parse_number(text)
        expected = float(text)
        assert (read, reason) == ((expected, "") if abs(expected) < 9.0e37 else (None, "no_data:overload"))


def quantity(case: tuple[str, str]) -> None:
    """Any text in any unit: a finite or infinite number, never NaN, or a ValueError of one line."""
    text, unit = case
    try:
        assert not math.isnan(parse_quantity(text, unit))
    except ValueError as error:
        assert len(str(error)) < 400


def replies(raw: bytes) -> None:
    """What adapters read in every reply (numbers, identities, error queue): a value or LinkGarbled with the bytes."""
    readers: tuple[Callable[[bytes], object], ...] = (
        lambda data: common.number("meter", data, ()),
        lambda data: common.parse_identity("meter", data),
    )
    for read in readers:
        try:
            read(raw)
        except LinkGarbled as error:
            assert error.partial == raw


def toml(text: str) -> None:
    """Any text: the standard reader's data and a line for every key, or a ConfigError of a sentence."""
    try:
        source = parse(text, "f")
    except SweeprigError as error:
        assert len(str(error)) < 1_500
        return
    assert repr(source.data) == repr(tomllib.loads(text))
    last = text.count("\n") + 1
    assert all(1 <= at <= last for at in source.lines.values())
    assert all((key,) in source.lines for key in source.data)


def toml_comes_back(table: dict[str, Any]) -> None:
    """A table written by another library is read as that table, and each of its keys has its line."""
    text = tomli_w.dumps(table)
    source = parse(text, "f")
    assert source.data == table
    assert all((key,) in source.lines for key in table)


def dialect(text: str) -> None:
    """Any text in a dialect file: a table, or a ConfigError that names the file."""
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "dialects").mkdir()
        (Path(folder) / "dialects" / "mine.toml").write_bytes(text.encode("utf-8", "surrogatepass"))
        try:
            table = find_dialect("mine", Path(folder), ())
        except SweeprigError as error:
            assert "mine.toml" in str(error)
            return
        assert repr(table) == repr(tomllib.loads(text))


def logbook_json(text: str) -> None:
    """Any text in a cell of the logbook: JSON as the standard reader gives it, or a ValueError."""
    try:
        read = values.load(text)
    except ValueError:
        return
    assert repr(read) == repr(json.loads(text))


def logbook_values(value: Any) -> None:
    """Any JSON value as hold, outcome, reading or condition: such a value, or one of the four errors of a bad row."""
    for read in (values.hold_from_json, values.outcome_from_json, values.reading_from_json, values.condition_from_json):
        try:
            read(value)
        except (KeyError, TypeError, ValueError, OverflowError):
            continue


def said(raw: bytes) -> None:
    """Any line from the process that performs holds: one of the known things, of the right kind, or nothing."""
    told = messages.understood(raw)
    assert told is None or isinstance(told, messages.Hello | Event | Ending | messages.Failed)
    if isinstance(told, Event):
        assert told.kind in EVENTS


def said_comes_back(case: tuple[str, float, dict[str, Any], str, bool]) -> None:
    """What one process says is what the other understands: hello, every kind of event, the end, an error."""
    kind, at, data, reason, again = case
    for told in (
        messages.Hello(7), Event(kind, at, data), Ending(State.FINISHED, reason, again),
        messages.Failed("RunError", {"what": reason, "value": None, "allowed": None, "remedy": None, "topic": None}, 3),
    ):  # fmt: skip
        raw = messages.line_of(told)
        assert raw.endswith(b"\n")
        assert raw.count(b"\n") == 1
        assert messages.understood(raw) == told


SAID = (
    st.binary(max_size=60)
    | JSON.map(lambda value: json.dumps(value).encode())
    | st.dictionaries(
        st.sampled_from(["hello", "kind", "at", "data", "ended", "reason", "again", "failed", "parts", "exit_code"]),
        JSON | st.sampled_from([*EVENTS, *(state.name for state in State), "RunError"]),
    ).map(lambda v: json.dumps(v).encode())
    | st.sampled_from(
        [b"[" * 50_000, b'{"hello": ' + b"9" * 5_000 + b"}", b'{"hello": 1e999}', b'{"kind": ["hold_began"]}']
    )
)
PLAIN = st.dictionaries(
    st.text(max_size=6), st.integers(-(2**53), 2**53) | st.text(max_size=6) | st.booleans(), max_size=3
)

READERS: dict[str, tuple[st.SearchStrategy[Any], Check]] = {
    "line": (BYTES, line),
    "block": (BYTES | DATA.map(lambda data: b"#2%02d%s" % (len(data), data)), block),
    "block comes back": (
        st.tuples(DATA, st.sampled_from([b"", b"\n", b"\r\n"]), NOISE.map(lambda raw: b"x" + raw), st.integers(2, 9)),
        block_comes_back,
    ),
    "garbage before": (st.tuples(NOISE, DATA), garbage_before),
    "indefinite block": (DATA, indefinite),
    "number": (st.text(max_size=20) | SCRAPS, number),
    "number comes back": (NUMBERS, number_refuses_nothing),
    "quantity": (st.tuples(st.text(max_size=20) | SCRAPS | st.tuples(SCRAPS, UNITS).map("".join), UNITS), quantity),
    "reply": (BYTES, replies),
    "toml": (TOML_SCRAPS, toml),
    "toml comes back": (TABLES, toml_comes_back),
    "dialect": (TOML_SCRAPS, dialect),
    "logbook JSON": (st.text(max_size=40) | JSON.map(json.dumps), logbook_json),
    "logbook values": (JSON, logbook_values),
    "said": (SAID, said),
    "said comes back": (
        st.tuples(st.sampled_from(sorted(EVENTS)), st.floats(-1e12, 1e12), PLAIN, st.text(max_size=20), st.booleans()),
        said_comes_back,
    ),
}
"""Name of a reader → where its inputs come from, and the check of one input."""
