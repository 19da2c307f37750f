"""The answer in plain words: a few sentences from the worst cases. Pure: the findings' JSON shape in, text out.

What could not be found is said with its reason, never left out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from sweeprig.quantities import show_quantity
from sweeprig.report import numbers
from sweeprig.report.tables import Row, times, worst_rows

Json = Mapping[str, Any]
_LOW = "usable_range.low_duty_percent"
_REST = "usable_range.low_duty_from_rest_percent"
_HIGH = "usable_range.high_duty_percent"
_LOW_SPEED = "usable_range.low_speed_rpm"
_HIGH_SPEED = "usable_range.high_speed_rpm"
_TURNDOWN = "usable_range.turndown"


def sentences(findings: Json, motor: str, saturation_percent: float = 2.0) -> list[str]:
    """What the run says about this motor, most wanted first. One string a sentence."""
    conditions: Sequence[Json] = findings.get("conditions") or ()
    if not conditions:
        return [f"Nothing can be said about {motor}: no condition has findings."]
    found = {row.finding: row for row in worst_rows(findings)}
    said = [_keeps_turning(found, motor, conditions), _starts(found, conditions), _upper(found, saturation_percent)]
    said.append(_speeds(found))
    said.append(_scope(len(conditions)))
    return [text for text in said if text]


def _short(row: Row) -> str:
    """A row's number with its unit, without U and without the sign of a bound: '14.2 %'."""
    number = row.value.removeprefix("≤ ").removeprefix("≥ ").split(" ± ")[0]
    return number if row.unit in ("", "1") else f"{number} {row.unit}"


def _at_least(row: Row) -> str:
    return f"at least {_short(row)}" if _above(row) else _short(row)


def _above(row: Row) -> bool:
    """Only a lower bound is known: the value lies beyond what was tried."""
    return row.value.startswith("≥")


def _time(conditions: Sequence[Json], key: str) -> str:
    known = sorted({value for entry in conditions if (value := times(entry).get(key)) is not None})
    if not known:
        return "the hold time" if key == "hold_time_s" else "the start time"
    shown = [show_quantity(value, "s") for value in known]
    return shown[0] if len(shown) == 1 else f"{shown[0]} to {shown[-1]}"


def _keeps_turning(found: Mapping[str, Row], motor: str, conditions: Sequence[Json]) -> str:
    row = found.get(_LOW)
    if row is None:
        return ""
    if not row.found:
        return f"No lowest reliable duty can be given for {motor}: {row.remarks[0]}."
    if _above(row):
        return f"The duty at which {motor} keeps turning reliably lies above {_short(row)}, beyond what was tried."
    hold = _time(conditions, "hold_time_s")
    return (
        f"Once it turns, {motor} keeps turning at {_short(row)} duty and above: at least 99 of 100 holds of {hold} "
        f"are survived."
    )


def _starts(found: Mapping[str, Row], conditions: Sequence[Json]) -> str:
    row = found.get(_REST)
    if row is None:
        return ""
    if not row.found:
        return f"From rest, no reliable duty can be given: {row.remarks[0]}."
    if _above(row):
        return f"The duty at which it starts reliably from rest lies above {_short(row)}, beyond what was tried."
    start = _time(conditions, "start_time_s")
    return f"From rest it starts at {_short(row)} duty and above: at least 99 of 100 trials of {start} succeed."


def _upper(found: Mapping[str, Row], saturation_percent: float) -> str:
    row = found.get(_HIGH)
    if row is None:
        return ""
    if not row.found:
        return f"The upper end of the usable range was not found: {row.remarks[0]}."
    return f"Above {_short(row)} duty, no more than {numbers.plain(saturation_percent)} % of speed is to be gained."


def _speeds(found: Mapping[str, Row]) -> str:
    low, high, down = found.get(_LOW_SPEED), found.get(_HIGH_SPEED), found.get(_TURNDOWN)
    if low is None or high is None or not (low.found and high.found):
        return ""
    ratio = f", a turndown of {_at_least(down)}" if down is not None and down.found else ""
    return f"The speed range that is really usable runs from {_short(low)} to {_short(high)}{ratio}."


def _scope(count: int) -> str:
    under = (
        f"Each figure is the worst of the {count} conditions measured" if count > 1 else "One condition was measured"
    )
    return f"{under}; the two lowest duties are one-sided bounds with 95 % confidence."
