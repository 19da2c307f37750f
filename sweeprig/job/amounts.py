"""The kinds of value a config file may hold: quantities with a unit, bare numbers, short texts; each with its range.

What stands here turns one value as written into one value in base units, or says why not. No files, no line numbers.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Callable
from dataclasses import dataclass

from pydantic import BaseModel, ConfigDict, GetCoreSchemaHandler, GetJsonSchemaHandler
from pydantic_core import PydanticCustomError, core_schema

from sweeprig.quantities import UNITS, parse_quantity, show_quantity

PROBLEM = "sweeprig"
"""Type of the errors raised here; their context holds `what`, `value`, `allowed` and `remedy` (each may be empty)."""

ANY_UNITS = (*UNITS, "dB", "Pa", "Nm")
_NOUNS = {
    "Hz": "a frequency", "V": "a voltage", "A": "a current", "ohm": "a resistance", "s": "a time",
    "%": "a percentage", "rpm": "a speed", "degC": "a temperature", "W": "a power", "1": "a number",
}  # fmt: skip
_EXAMPLES = {
    "Hz": "1 kHz", "V": "12 V", "A": "500 mA", "s": "20 s", "%": "30 %", "rpm": "1500 rpm", "degC": "80 degC",
}  # fmt: skip
_PREFIXED = {"Hz": "[kM]?Hz", "V": "[uµmkM]?V", "A": "[uµmkM]?A", "s": "([uµm]?s|min|h)", "ohm": "[mkM]?ohm"}
_ENDS_IN_UNIT = re.compile(r"^[\d\s.+eE-]*[\d.]\s*([A-Za-zµ%/]*)\s*$")
_LARGEST = 1e9
_NUMBER = r"^\s*[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?\s*"


class Strict(BaseModel):
    """Base of all config models: no key that is not known, no conversion behind one's back, no change afterwards."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True)


def as_written(value: object) -> str:
    """`value` as it would stand in the file, on one line, control characters escaped, at most 70 characters."""
    try:
        text = json.dumps(value, ensure_ascii=False)
    except (TypeError, ValueError):
        text = str(value)
    return text if len(text) <= 70 else f"{text[:66]} …"


def problem(what: str, value: object = None, allowed: str = "", remedy: str = "") -> PydanticCustomError:
    """The error of one value; `problems.py` adds file, line and key."""
    shown = "" if value is None else as_written(value)
    return PydanticCustomError(
        PROBLEM, "{what}: {value}", {"what": what, "value": shown, "allowed": allowed, "remedy": remedy}
    )


@dataclass(frozen=True, slots=True)
class Amount:
    """A quantity written with its unit, `"300 Hz"`, held as a float in the base unit.

    least, most   the range, both allowed values, except that `above` excludes `least` itself
    why           the reason for the range, one sentence without its full stop
    """

    unit: str
    least: float
    most: float
    why: str = ""
    above: bool = False

    @property
    def allowed(self) -> str:
        least, most = shown(self.least, self.unit), shown(self.most, self.unit)
        return f"above {least}, up to {most}" if self.above else f"{least} to {most}"

    @property
    def example(self) -> str:
        """A value in range, as it stands in a file."""
        common = (_EXAMPLES.get(self.unit, f"1 {self.unit}"), *(("24 h",) if self.unit == "s" else ()))
        inside = (text for text in common if self.least < parse_quantity(text, self.unit) <= self.most)
        return as_written(next(inside, exact_text(self.most, self.unit)))

    def read(self, value: object) -> float:
        """The number in base units; raises the problem of a missing or wrong unit or of a value out of range."""
        if not isinstance(value, str):
            raise problem(f"{_noun(self.unit)} is wanted, as text with its unit", value, self.allowed, self._write())
        try:
            number = parse_quantity(value, self.unit)
        except ValueError:
            what = f"{_noun(self.unit)} is wanted, and {_found(value)}"
            raise problem(what, value, self.allowed, self._write()) from None
        if not self._holds(number):
            raise problem("out of range", value, self.allowed, self.why)
        return number

    def _holds(self, number: float) -> bool:
        return self.least <= number <= self.most and not (self.above and number == self.least)

    def _write(self) -> str:
        return f"Write for example {self.example}"

    def __get_pydantic_core_schema__(self, source: object, handler: GetCoreSchemaHandler) -> core_schema.CoreSchema:
        return _plain(self.read, lambda value: exact_text(value, self.unit))

    def __get_pydantic_json_schema__(
        self, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, object]:
        about = f"{_noun(self.unit)}, {self.allowed}" + (f". {self.why}" if self.why else "")
        # `unit` is no word of JSON Schema and constrains nothing: it is for people and for writing the default
        return {"type": "string", "pattern": unit_pattern(self.unit), "unit": self.unit, "description": about}


@dataclass(frozen=True, slots=True)
class Number:
    """A bare number: a count, or a figure whose name carries its unit. `whole`: integers only."""

    least: float
    most: float
    why: str = ""
    above: bool = False
    whole: bool = False

    @property
    def allowed(self) -> str:
        least, most = f"{self.least:.15g}", f"{self.most:.15g}"
        kind = "whole numbers " if self.whole else ""
        return f"{kind}above {least}, up to {most}" if self.above else f"{kind}{least} to {most}"

    @property
    def example(self) -> str:
        return f"{min(max(self.least, 1.0), self.most):.15g}"

    def read(self, value: object) -> float:
        """The number itself; a bool, a text, infinity and NaN are refused like a number out of range."""
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise problem("a bare number is wanted", value, self.allowed, f"Write for example {self.example}")
        if self.whole and not isinstance(value, int):
            raise problem("a whole number is wanted", value, self.allowed, self.why)
        if not math.isfinite(value) or not self.least <= value <= self.most or (self.above and value == self.least):
            raise problem("out of range", value, self.allowed, self.why)
        return value if self.whole else float(value)

    def __get_pydantic_core_schema__(self, source: object, handler: GetCoreSchemaHandler) -> core_schema.CoreSchema:
        return _plain(self.read)

    def __get_pydantic_json_schema__(
        self, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, object]:
        lower = "exclusiveMinimum" if self.above else "minimum"
        made: dict[str, object] = {"type": "integer" if self.whole else "number", lower: self.least}
        return made | {"maximum": self.most} | ({"description": self.why} if self.why else {})


@dataclass(frozen=True, slots=True)
class Words:
    """A short text or a name: 1 to `most` printable characters; `ascii_only` for what goes to instruments."""

    most: int = 200
    ascii_only: bool = False

    @property
    def allowed(self) -> str:
        return f"1 to {self.most} printable {'ASCII ' if self.ascii_only else ''}characters"

    @property
    def example(self) -> str:
        return '"…"'

    def read(self, value: object) -> str:
        """The text, blanks at its ends removed."""
        if not isinstance(value, str):
            raise problem("a text in quotes is wanted", value, self.allowed, "Put it in quotes")
        text = value.strip()
        if not text:
            raise problem("the text is empty", value, self.allowed, "Write what a person would call it")
        if len(text) > self.most:
            raise problem(f"a text of {len(text)} characters is too long", value, self.allowed, "Shorten it")
        if not text.isprintable() or (self.ascii_only and not text.isascii()):
            what = "the text has characters that are not allowed here"
            raise problem(what, value, self.allowed, f"Take out {_first_odd(text, self.ascii_only)}")
        return text

    def __get_pydantic_core_schema__(self, source: object, handler: GetCoreSchemaHandler) -> core_schema.CoreSchema:
        return _plain(self.read)

    def __get_pydantic_json_schema__(
        self, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, object]:
        return {"type": "string", "minLength": 1, "maxLength": self.most}


class Measure(float):
    """A float that remembers the base unit it is in: the fixed part of an accuracy statement, whose unit is free."""

    unit: str

    def __new__(cls, value: float, unit: str) -> Measure:
        made = super().__new__(cls, value)
        made.unit = unit
        return made

    def __getnewargs__(self) -> tuple[float, str]:  # type: ignore[override]  # float's takes no unit; this is what pickles it
        return float(self), self.unit


def read_measure(value: object) -> Measure:
    """A quantity in any unit that is known here; a bare number has the unit "1"."""
    allowed = f"a number with one of the units {', '.join(unit for unit in ANY_UNITS if unit != '1')}"
    if isinstance(value, int | float) and not isinstance(value, bool):
        return Measure(Number(-_LARGEST, _LARGEST).read(value), "1")
    if not isinstance(value, str):
        raise problem("a quantity is wanted, as text with its unit", value, allowed, 'Write for example "3 mV"')
    for unit in ANY_UNITS:
        try:
            number = parse_quantity(value, unit)
        except ValueError:
            continue
        if not -_LARGEST <= number <= _LARGEST:
            raise problem("out of range", value, allowed)
        return Measure(number, unit)
    raise problem("a quantity with a known unit is wanted", value, allowed, 'Write for example "3 mV"')


def write_measure(value: Measure) -> str | float:
    """The text (or bare number) that `read_measure` reads back to an equal one."""
    return float(value) if value.unit == "1" else exact_text(value, value.unit)


def shown(value: float, unit: str) -> str:
    """`value` for people, never in powers of ten: "24 h", "100000 rpm"."""
    if unit == "s" and value >= 7200.0 and value % 3600.0 == 0.0:
        return f"{value / 3600.0:.10g} h"
    text = show_quantity(value, unit)
    return f"{value:.10g} {unit}" if "e" in text.split()[0] else text


def exact_text(value: float, unit: str) -> str:
    """`value` as text that `parse_quantity` reads back to the very same float; short where that is exact."""
    short = show_quantity(value, unit)
    if parse_quantity(short, unit) == value:
        return short
    return repr(float(value)) if unit == "1" else f"{float(value)!r} {unit}"


def unit_pattern(unit: str) -> str:
    """A regular expression for quantities in `unit` (for the JSON Schema)."""
    if unit == "1":
        return f"{_NUMBER}$"
    return f"{_NUMBER}{_PREFIXED.get(unit, unit)}\\s*$"


def _first_odd(text: str, ascii_only: bool) -> str:
    """The first character that is not allowed, by its number: it may not be one that can be shown."""
    odd = next(char for char in text if not char.isprintable() or (ascii_only and not char.isascii()))
    return f"U+{ord(odd):04X}"


def _found(text: str) -> str:
    """What a refused text has instead of the wanted unit."""
    match = _ENDS_IN_UNIT.search(text)
    if match is None:
        return "this is no number with a unit"
    return f"the unit here is {match.group(1)[:20]}" if match.group(1) else "this has no unit"


def _noun(unit: str) -> str:
    name = _NOUNS.get(unit, "a quantity")
    return name if unit == "1" else f"{name} in {unit}"


def _plain(read: Callable[[object], object], write: Callable[[float], object] | None = None) -> core_schema.CoreSchema:
    serialise = None if write is None else core_schema.plain_serializer_function_ser_schema(write)
    return core_schema.no_info_plain_validator_function(read, serialization=serialise)
