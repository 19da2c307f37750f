"""How numbers are written: the digits that an uncertainty leaves, intervals, bounds. Pure text from plain floats.

Rule: the uncertainty keeps two significant digits, the value ends at the same place (JCGM 100:2008, 7.2.6).
No units are converted here and nothing is looked up.
"""

from __future__ import annotations

import math
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal

DIGITS_OF_UNCERTAINTY = 2
DIGITS_WITHOUT = 4
"""Significant digits of a value that carries no uncertainty."""
DIGITS_OF_BOUND = 3
"""Significant digits of a bound that carries no uncertainty of its own."""
MOST_DIGITS = 8
"""No value is written with more significant digits than this, however small its uncertainty."""
MINUS = "\N{MINUS SIGN}"
SYMMETRIC_WITHIN = 0.15
"""± is written only where both sides of the interval agree with k·u to this part of it; else the interval speaks."""


def last_place(spread: float) -> int:
    """The power of ten of the last digit that `spread` leaves: 0.1534 → -2, 27.3 → 0, 412 → 1. `spread` > 0."""
    exact = Decimal(repr(float(spread)))
    place = exact.adjusted() - (DIGITS_OF_UNCERTAINTY - 1)
    carried = exact.quantize(Decimal(1).scaleb(place), rounding=ROUND_HALF_EVEN)
    return place + 1 if carried.adjusted() > exact.adjusted() else place


def at_place(value: float, place: int, rounding: str = ROUND_HALF_EVEN) -> str:
    """`value` rounded to the digit of 10**place, written out in full: (4812.3, 1) → '4810'."""
    written = Decimal(repr(float(value))).quantize(Decimal(1).scaleb(place), rounding=rounding)
    text = format(abs(written), "f")
    return MINUS + text if written < 0 else text


def plain(value: float, digits: int = DIGITS_WITHOUT) -> str:
    """`value` to so many significant digits, trailing zeros dropped, never with an exponent: 12.50004 → '12.5'."""
    if value == 0 or not math.isfinite(value):
        return "0" if value == 0 else str(value)
    text = at_place(value, Decimal(repr(float(value))).adjusted() - digits + 1)
    return text.rstrip("0").rstrip(".") if "." in text else text


def place_for(value: float, spread: float | None, digits: int = DIGITS_WITHOUT) -> int:
    """Where a value with this uncertainty ends: two digits of the uncertainty, `digits` of the value without one."""
    adjusted = Decimal(repr(float(value))).adjusted() if value else 0
    if spread is None or not math.isfinite(spread) or spread <= 0:
        return adjusted - digits + 1
    return max(last_place(spread), adjusted - MOST_DIGITS + 1)


def value_and_u(value: float, expanded: float | None) -> str:
    """'12.34 ± 0.15': value and expanded uncertainty U in one unit; the value alone where there is no U."""
    place = place_for(value, expanded)
    if expanded is None or expanded <= 0:
        return plain(value)
    return f"{at_place(value, place)} ± {at_place(expanded, place)}"


def interval(low: float, high: float, spread: float | None) -> str:
    """'12.21 to 12.62', both ends written to the place that `spread` leaves."""
    width = spread if spread is not None and spread > 0 else (high - low) / 2.0
    place = place_for(max(abs(low), abs(high)), width)
    return f"{at_place(low, place)} to {at_place(high, place)}"


def at_most(value: float, spread: float | None) -> str:
    """'≤ 14.2': an upper bound, rounded up so that it stays one."""
    return f"≤ {at_place(value, place_for(value, spread, DIGITS_OF_BOUND), ROUND_CEILING)}"


def at_least(value: float, spread: float | None) -> str:
    """'≥ 14.2': a lower bound, rounded down so that it stays one."""
    return f"≥ {at_place(value, place_for(value, spread, DIGITS_OF_BOUND), ROUND_FLOOR)}"


def symmetric(value: float, low: float | None, high: float | None, expanded: float) -> bool:
    """Whether value ± expanded tells the same as low to high (also where no interval is given)."""
    if low is None or high is None:
        return True
    off = max(abs((value - low) - expanded), abs((high - value) - expanded))
    return off <= SYMMETRIC_WITHIN * expanded


def statement(
    value: float, u: float | None, k: float | None, unit: str, low: float | None = None, high: float | None = None
) -> str:
    """A result in one line: '(12.34 ± 0.15) % (k = 2.0)', or '12.34 % (12.29 to 12.62 %)' where it is lopsided.

    value, u, low, high in `unit`; u standard uncertainty, k coverage factor. The brackets keep "± 0.15 %" from being
    read as a part of the value (form of JCGM 100:2008, 7.2.4).
    """
    tail = "" if unit in ("", "1") else f" {unit}"
    if u is None or u <= 0:
        return f"{plain(value)}{tail}"
    expanded = (k if k is not None else 1.0) * u
    if k is not None and symmetric(value, low, high, expanded):
        return f"({value_and_u(value, expanded)}){tail} (k = {k:.1f})"
    written = at_place(value, place_for(value, expanded))
    if low is None or high is None:
        return f"{written}{tail} (u = {at_place(u, place_for(value, u))}{tail})"
    return f"{written}{tail} ({interval(low, high, expanded)}{tail})"
