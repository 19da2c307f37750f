"""Messages as the simulated instruments understand them: headers, paths, parameters, answers, error texts. PURE.

Written from SCPI-1999 and IEEE 488.2, never from a dialect. No clock, port or instrument here.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import NamedTuple

NOT_A_NUMBER = "9.91E+37"
"""SCPI-1999 vol. 1, 7.2.1: there is nothing to measure."""
OVERLOAD = "9.90E+37"
"""The same, 7.2.1: more than the range holds (infinity)."""

ERROR_TEXTS: Mapping[int, str] = {
    0: "No error",
    -101: "Invalid character",
    -102: "Syntax error",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -112: "Program mnemonic too long",
    -113: "Undefined header",
    -131: "Invalid suffix",
    -203: "Command protected",
    -213: "Init ignored",
    -221: "Settings conflict",
    -222: "Data out of range",
    -224: "Illegal parameter value",
    -230: "Data corrupt or stale",
    -240: "Hardware error",
    -350: "Queue overflow",
    -361: "Parity error in program message",
    -363: "Input buffer overrun",
    -365: "Time out error",
    -410: "Query INTERRUPTED",
    -440: "Query UNTERMINATED after indefinite response",
}
"""SCPI-1999 vol. 2, 21.8; -160 block errors and the like are not reachable with these command tables."""

LONGEST_ERROR_TEXT = 255
LONGEST_MNEMONIC = 12
_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:\s*[eE]\s*[+-]?\d+)?)\s*([A-Za-z%]*)")
_HEADER = re.compile(r"\*[A-Za-z]+\??|:?[A-Za-z][A-Za-z0-9_]*(?::[A-Za-z][A-Za-z0-9_]*)*\??")
_HEADER_CHARACTERS = re.compile(r"[A-Za-z0-9_:*?]+")
_SUFFIXES: Mapping[str, Mapping[str, float]] = {
    "V": {"": 1.0, "UV": 1e-6, "MV": 1e-3, "V": 1.0, "KV": 1e3},
    "A": {"": 1.0, "UA": 1e-6, "MA": 1e-3, "A": 1.0},
    "S": {"": 1.0, "US": 1e-6, "MS": 1e-3, "S": 1.0},
    "MS": {"": 1.0, "US": 1e-3, "MS": 1.0, "S": 1e3},
    "HZ": {"": 1.0, "HZ": 1.0, "KHZ": 1e3, "MHZ": 1e6},
    "%": {"": 1.0, "PCT": 1.0, "%": 1.0},
    "": {"": 1.0},
}


class Refused(Exception):
    """A message unit that an instrument will not do. It becomes an entry of the error queue, never more."""

    def __init__(self, number: int, detail: str = "") -> None:
        super().__init__(number, detail)
        self.number = number
        self.detail = detail


Finish = Callable[[], "str | None"]


@dataclass(slots=True)
class Later:
    """An answer that is only there at `at` (bench time, s): `finish()` is called then and gives it, or None."""

    at: float
    finish: Finish


Handler = Callable[[tuple[str, ...]], "str | Later | None"]


class Unit(NamedTuple):
    """One message unit, ready to run."""

    handler: Handler
    parameters: tuple[str, ...]
    query: bool


@dataclass(slots=True)
class Command:
    """What one header does, with least and most parameters. `indefinite`: its answer may hold anything (*IDN?)."""

    handler: Handler
    least: int = 0
    most: int = 0
    indefinite: bool = False


@dataclass(slots=True)
class _Node:
    children: dict[str, _Node] = field(default_factory=dict)
    setting: Command | None = None
    query: Command | None = None


def spellings(mnemonic: str) -> tuple[str, str]:
    """Short and long form of a mnemonic written as in the standard, `VOLTage` → ("VOLT", "VOLTAGE")."""
    short = "".join(letter for letter in mnemonic if not letter.islower())
    return short, mnemonic.upper()


def short_form(mnemonic: str) -> str:
    """The short form by the rule of SCPI-1999 vol. 1, 6.2.1: four letters, three where the fourth is a vowel.

    A word of up to four letters is its own short form.
    """
    word = mnemonic.upper()
    if len(word) <= 4:
        return word
    return word[:3] if word[3] in "AEIOU" else word[:4]


def _paths(header: str) -> list[list[str]]:
    """`[SOURce]:VOLTage[:LEVel]` → every way to write it, default nodes left out or not."""
    paths: list[list[str]] = [[]]
    for optional, plain in re.findall(r"\[:?([A-Za-z]+):?\]|:?([A-Za-z]+)", header):
        longer = [[*path, optional or plain] for path in paths]
        paths = longer + paths if optional else longer
    return paths


class CommandTree:
    """All headers of one instrument. Mnemonics are found in short or long form, in any case, nothing in between."""

    def __init__(self) -> None:
        self._root = _Node()
        self._common: dict[str, Command] = {}
        self.headers: list[str] = []

    def add(self, header: str, handler: Handler, least: int = 0, most: int = 0, indefinite: bool = False) -> None:
        """`header` as the standard prints it: `[SOURce]:VOLTage?`; default nodes in brackets; `?` for the query."""
        command = Command(handler, least, most, indefinite)
        self.headers.append(header)
        if header.startswith("*"):
            self._common[header] = command
            return
        query = header.endswith("?")
        for path in _paths(header.rstrip("?")):
            node = self._root
            for mnemonic in path:
                short, long = spellings(mnemonic)
                child = node.children.get(long)
                if child is None:
                    child = node.children[short] = node.children[long] = _Node()
                node = child
            if query:
                node.query = command
            else:
                node.setting = command

    def find(self, header: str, path: tuple[str, ...]) -> tuple[Command, tuple[str, ...]]:
        """The command for `header` and the path that the next unit starts from. Raises Refused (-113, -112)."""
        query = header.endswith("?")
        name = header.upper().rstrip("?")
        if name.startswith("*"):
            common = self._common.get(header.upper())
            if common is None:
                raise Refused(-113, header)
            return common, path
        words = tuple(name.lstrip(":").split(":"))
        if max(map(len, words)) > LONGEST_MNEMONIC:
            raise Refused(-112, header)
        if not name.startswith(":"):
            words = path + words
        node: _Node | None = self._root
        for word in words:
            node = None if node is None else node.children.get(word)
        command = None if node is None else node.query if query else node.setting
        if command is None:
            raise Refused(-113, header)
        return command, words[:-1]


def split_outside(text: str, separator: str) -> list[str]:
    """`text` cut at `separator`, except inside quotes and parentheses; parts are stripped of blanks."""
    if '"' not in text and "'" not in text and "(" not in text:
        return [part.strip() for part in text.split(separator)]
    parts: list[str] = []
    current: list[str] = []
    quote, depth = "", 0
    for letter in text:
        if quote:
            quote = "" if letter == quote else quote
        elif letter in "\"'":
            quote = letter
        elif letter in "()":
            depth += 1 if letter == "(" else -1
        elif letter == separator and depth <= 0:
            parts.append("".join(current).strip())
            current = []
            continue
        current.append(letter)
    parts.append("".join(current).strip())
    return parts


def _refusing(number: int, detail: str) -> Unit:
    def refuse(_: tuple[str, ...]) -> None:
        raise Refused(number, detail)

    return Unit(refuse, (), True)


def parse_message(line: bytes, tree: CommandTree) -> tuple[Unit, ...]:
    """One message without terminator → its units in order. Never raises: what is wrong becomes a unit that refuses.

    After a unit in error the rest of the message is dropped (IEEE 488.2, 6.1.8: the parser resets).
    """
    try:
        text = line.decode("ascii")
    except UnicodeDecodeError:
        return (_refusing(-101, ""),)
    if not text.strip():
        return ()
    units: list[Unit] = []
    path: tuple[str, ...] = ()
    indefinite = False
    for part in split_outside(text, ";"):
        try:
            unit, path, unit_indefinite = _parse_unit(part, path, tree)
            if indefinite and unit.query:
                raise Refused(-440)
        except Refused as refused:
            units.append(_refusing(refused.number, refused.detail))
            break
        indefinite = indefinite or unit_indefinite
        units.append(unit)
    return tuple(units)


def _parse_unit(part: str, path: tuple[str, ...], tree: CommandTree) -> tuple[Unit, tuple[str, ...], bool]:
    header, _, rest = part.partition(" ") if "\t" not in part else part.replace("\t", " ").partition(" ")
    if not header:
        raise Refused(-102)
    if _HEADER.fullmatch(header) is None:
        raise Refused(-102 if _HEADER_CHARACTERS.fullmatch(header) else -101)
    command, path = tree.find(header, path)
    rest = rest.strip()
    parameters = tuple(split_outside(rest, ",")) if rest else ()
    if len(parameters) > command.most:
        raise Refused(-108, header)
    if len(parameters) < command.least or "" in parameters:
        raise Refused(-109, header)
    return Unit(command.handler, parameters, header.endswith("?")), path, command.indefinite


def number(text: str, unit: str, low: float, high: float) -> float:
    """A decimal number with an optional suffix, in `unit`; MIN and MAX are the ends. Refused: -104, -131, -222."""
    word = text.upper()
    if word in ("MIN", "MINIMUM"):
        return low
    if word in ("MAX", "MAXIMUM"):
        return high
    match = _NUMBER.fullmatch(text)
    if match is None:
        raise Refused(-104, text)
    scale = _SUFFIXES[unit].get(match.group(2).upper())
    if scale is None:
        raise Refused(-131, text)
    value = float(match.group(1).replace(" ", "").replace("\t", "")) * scale
    if not low <= value <= high:
        raise Refused(-222, text)
    return value


def integer(text: str, low: int, high: int) -> int:
    """A whole number; other numbers are rounded (IEEE 488.2, 7.7.2.4: NRf)."""
    return round(number(text, "", low, high))


def boolean(text: str) -> bool:
    """ON, OFF or a number, which is rounded and is ON unless 0 (SCPI-1999 vol. 1, 7.3). Refused: -224."""
    word = text.upper()
    if word in ("ON", "OFF"):
        return word == "ON"
    match = _NUMBER.fullmatch(text)
    if match is None or match.group(2):
        raise Refused(-224, text)
    return round(float(match.group(1))) != 0


def channel_list(text: str, highest: int) -> list[int]:
    """`(@1)`, `(@1,3)` or `(@1:3)` → the channel numbers (SCPI-1999 vol. 1, 8.3.2). Refused: -104, -222, -224."""
    if not (text.startswith("(@") and text.endswith(")")):
        raise Refused(-104, text)
    channels: list[int] = []
    for part in text[2:-1].split(","):
        first, colon, last = part.strip().partition(":")
        if not first.isdigit() or (colon and not last.isdigit()):
            raise Refused(-224, text)
        channels.extend(range(int(first), int(last or first) + 1))
    if not channels or not all(1 <= channel <= highest for channel in channels):
        raise Refused(-222, text)
    return channels


def nr1(value: int) -> str:
    """An integer answer (IEEE 488.2, 8.7.2); a boolean answers 0 or 1."""
    return str(int(value))


def nr3(value: float, digits: int = 8) -> str:
    """A number with point and signed exponent (IEEE 488.2, 8.7.4), `digits` after the point."""
    return f"{value:.{digits}E}"


def block(data: bytes) -> str:
    """A definite-length block, `#nL…L<data>` (IEEE 488.2, 8.7.9), each byte as the Latin-1 letter of its number."""
    length = str(len(data))
    return f"#{len(length)}{length}{data.decode('latin-1')}"


def error_answer(error: tuple[int, str]) -> str:
    """`number,"text"`, the detail after a `;`, at most 255 characters of text (SCPI-1999 vol. 2, 21.8.2)."""
    code, detail = error
    text = ERROR_TEXTS[code] if not detail else f"{ERROR_TEXTS[code]};{detail}"
    return f'{code},"{text[:LONGEST_ERROR_TEXT].replace(chr(34), chr(39))}"'


def event_bit(code: int) -> int:
    """The event status bit that an error of this number sets (SCPI-1999 vol. 2, 21.8; IEEE 488.2, 11.5.1)."""
    if -199 <= code <= -100:
        return 32
    if -299 <= code <= -200:
        return 16
    if -499 <= code <= -400:
        return 4
    return 8
