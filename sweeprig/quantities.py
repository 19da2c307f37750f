"""Readings and units: what a number from an instrument is, and how text becomes one.

SI units, and rpm, percent and degC. No files, no clocks, no instruments here.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

NO_DATA_MAGNITUDE = 9.0e37
"""Any magnitude from here up is an instrument saying "no value" (SCPI-1999 vol. 1, 7.2.1: 9.9E37, 9.91E37)."""

UNITS = ("Hz", "V", "A", "ohm", "s", "%", "rpm", "degC", "W", "1")
_PREFIXES = {"": 1.0, "u": 1e-6, "m": 1e-3, "k": 1e3, "M": 1e6}
_NO_PREFIX = ("%", "rpm", "degC", "1")
_TIMES = {"min": 60.0, "h": 3600.0}
# One way to match each digit: two would let a long text of digits be tried in as many ways as its length squared.
_NUMBER_TEXT = r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
_QUANTITY = re.compile(rf"({_NUMBER_TEXT})\s*([A-Za-z%µ]*)")
_NUMBER = re.compile(_NUMBER_TEXT)
_QUOTED = 60


@dataclass(frozen=True, slots=True)
class Reading:
    """One value of one channel.

    value    in `unit`; None when the instrument gave no value (then `flags` says why, `no_data:…`)
    u        standard uncertainty from the instrument's accuracy statement, same unit (0.0: none stated)
    at       run clock, s: the end of the window that was averaged
    channel  `instrument.quantity`, for example `meter.volts`
    raw      the instrument's own text, for the record
    """

    value: float | None
    u: float
    unit: str
    at: float
    channel: str
    flags: tuple[str, ...] = ()
    raw: str = ""

    @property
    def has_data(self) -> bool:
        return self.value is not None


@dataclass(frozen=True, slots=True)
class Accuracy:
    """An accuracy statement: ± (percent of reading + a fixed amount), taken as a rectangle's half-width."""

    percent_of_reading: float = 0.0
    plus: float = 0.0

    def u(self, value: float) -> float:
        """Standard uncertainty of `value`, same unit: half-width / √3 (JCGM 100:2008, 4.3.7)."""
        return (abs(value) * self.percent_of_reading / 100.0 + self.plus) / math.sqrt(3.0)


def parse_quantity(text: str, unit: str) -> float:
    """The number in `text` in base `unit`: `parse_quantity("1.5 kHz", "Hz") == 1500.0`.

    Prefixes u (or µ), m, k, M on Hz, V, A, ohm, s, W; also min and h for times. A wrong or missing unit is a
    ValueError that names what was found and what is wanted. The unit "1" takes a bare number.
    """
    match = _QUANTITY.fullmatch(text.strip())
    if match is None:
        raise ValueError(f"{_quoted(text)} is not a number with a unit; write for example '{_example(unit)}'")
    number, found = float(match.group(1)), match.group(2).replace("µ", "u")
    if unit == "1":
        scale = 1.0 if found == "" else None
    elif unit == "s" and found in _TIMES:
        scale = _TIMES[found]
    else:
        scale = _scale(found, unit)
    if scale is None:
        named = f"the unit {_quoted(found)}" if found else "no unit"
        raise ValueError(
            f"{_quoted(text)} has {named} where {_wanted(unit)} is wanted; write for example '{_example(unit)}'"
        )
    return number * scale


def _quoted(text: str) -> str:
    """`text` for an error text: escaped, and not longer than a line."""
    return repr(text) if len(text) <= _QUOTED else f"{text[:_QUOTED]!r}…"


def _scale(found: str, unit: str) -> float | None:
    if not found.endswith(unit):
        return None
    prefix = found[: len(found) - len(unit)]
    if prefix and unit in _NO_PREFIX:
        return None
    return _PREFIXES.get(prefix)


def _wanted(unit: str) -> str:
    return "a bare number" if unit == "1" else unit


def _example(unit: str) -> str:
    return {"Hz": "1 kHz", "V": "12 V", "A": "500 mA", "s": "20 s", "%": "30 %", "rpm": "1500 rpm", "1": "2"}.get(
        unit, f"1 {unit}"
    )


def show_quantity(value: float, unit: str) -> str:
    """`value` as a person writes it: 25000 Hz → '25 kHz', 0.0005 s → '500 us', 30 % → '30 %'. Four digits."""
    if unit in _NO_PREFIX or value == 0:
        return f"{value:.4g} {unit}" if unit != "1" else f"{value:.4g}"
    for prefix, scale in (("M", 1e6), ("k", 1e3), ("", 1.0), ("m", 1e-3), ("u", 1e-6)):
        if abs(value) >= scale or prefix == "u":
            if unit == "s" and prefix in ("M", "k"):
                continue
            return f"{value / scale:.4g} {prefix}{unit}"
    raise AssertionError("unreachable")


def parse_number(text: str, no_value: tuple[str, ...] = ()) -> tuple[float | None, str]:
    """One NR1, NR2 or NR3 number as an instrument writes it → (value, "") or (None, reason).

    Takes leading +, lower-case e and blanks (IEEE 488.2, 8.7.2 to 8.7.4). Magnitudes ≥ 9.0E37, empty text and the
    markers in `no_value` are no data, with the reason. Anything else is a ValueError.
    """
    stripped = text.strip()
    if not stripped:
        return None, "no_data:empty"
    if stripped in no_value:
        return None, "no_data:marker"
    if _NUMBER.fullmatch(stripped) is None:
        raise ValueError(f"{_quoted(text)} is not a number")
    value = float(stripped)
    if abs(value) >= NO_DATA_MAGNITUDE:
        return None, "no_data:overload"
    return value, ""
