"""The answer as rows of text, the same for the page and the terminal. Pure: from the findings' JSON shape, no files.

A finding that could not be made keeps its row, with the reason in it.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

from sweeprig.characterise.findings import NOT_ASKED
from sweeprig.quantities import show_quantity
from sweeprig.report import numbers
from sweeprig.report.catalogue import CONDITION_FIELDS, MEANINGS, TIMES, flag_text, meaning

Json = Mapping[str, Any]
NOT_FOUND = "not found"
_UNIT_OF_FIELD = {"pwm_hz": "Hz", "supply_v": "V"}


@dataclass(frozen=True, slots=True)
class Row:
    """One line of an answer table.

    finding    full name in findings.json (`usable_range.high_duty_percent`)
    value      '12.34 ± 0.15', '≤ 14.2' or 'not found', without unit
    interval   '12.21 to 12.62', or what kind of bound it is
    k          coverage factor, for a two-sided interval
    holds      number of holds it rests on
    remarks    flags in plain words; the reason where nothing was found
    condition  label of the condition it belongs to
    """

    finding: str
    name: str
    value: str
    interval: str
    unit: str
    k: str
    holds: str
    remarks: tuple[str, ...]
    found: bool
    condition: str


def condition_label(condition: Json, fields: Sequence[str] = CONDITION_FIELDS[:-1]) -> str:
    """'300 Hz, 12 V, forward, free air, warm', of a condition's entry in findings.json; only the fields asked for."""
    parts = []
    for field in fields:
        value = condition.get(field)
        if isinstance(value, int | float):
            parts.append(
                show_quantity(float(value), _UNIT_OF_FIELD[field]) if field in _UNIT_OF_FIELD else f"{value:g}"
            )
        elif value is not None:
            parts.append(str(value).replace("_", " "))
    return ", ".join(parts)


def telling_fields(conditions: Sequence[Json]) -> list[str]:
    """The condition fields that differ among these conditions; the PWM frequency where none does."""
    differ = [field for field in CONDITION_FIELDS if len({str(entry.get(field)) for entry in conditions}) > 1]
    return differ or ["pwm_hz"]


def entries(condition: Json) -> Iterator[tuple[str, Json]]:
    """(full name, F) of every finding of a condition: listed ones in the order of the catalogue, then the others.

    What nobody asked for is left out: findings.json keeps its name, a page of thirty such rows would hide the others.
    """
    flat: dict[str, Json] = {}
    for key, value in condition.items():
        if isinstance(value, Mapping) and "value" in value and not _not_asked(value):
            flat[key] = value
        elif key == "usable_range" and isinstance(value, Mapping):
            flat.update({f"{key}.{part}": f for part, f in value.items() if isinstance(f, Mapping)})
    for key in MEANINGS:
        if key in flat:
            yield key, flat.pop(key)
    yield from flat.items()


def _not_asked(finding: Json) -> bool:
    return finding["value"] is None and str(finding.get("reason", "")).startswith(NOT_ASKED)


def times(condition: Json) -> dict[str, float]:
    """The hold, start and rest times a condition's findings belong to, those that are numbers."""
    return {key: float(condition[key]) for key in TIMES if isinstance(condition.get(key), int | float)}


def row(key: str, finding: Json, label: str) -> Row:
    """One finding as a row. `finding` is F of findings.json; missing keys count as null."""
    about = meaning(key)
    remarks = tuple(flag_text(str(flag)) for flag in finding.get("flags") or ())
    if finding.get("value") is None:
        reason = str(finding.get("reason") or "no reason is on record")
        return Row(key, about.name, NOT_FOUND, "–", about.unit, "–", "–", (reason, *remarks), False, label)
    value, shown = _written(finding)
    return Row(key, about.name, value, shown, about.unit, *_sure(finding), remarks, True, label)


def rows(condition: Json) -> list[Row]:
    """Every finding of one condition."""
    label = condition_label(condition)
    return [row(key, finding, label) for key, finding in entries(condition)]


def worst_rows(findings: Json) -> list[Row]:
    """For every finding with a worse side: the worst value over all conditions, and where it was found.

    Findings missing under some conditions say so; found under none, they keep their row with the first reason.
    """
    conditions: Sequence[Json] = findings.get("conditions") or ()
    fields = telling_fields(conditions)
    gathered: dict[str, list[tuple[Json, str]]] = {}
    for condition in conditions:
        for key, finding in entries(condition):
            gathered.setdefault(key, []).append((finding, condition_label(condition, fields)))
    order = [key for key in MEANINGS if key in gathered]
    return [_worst(key, gathered[key]) for key in order if meaning(key).worse]


def _worst(key: str, found: Sequence[tuple[Json, str]]) -> Row:
    there = [(finding, label) for finding, label in found if finding.get("value") is not None]
    if not there:
        finding, label = found[0]
        return row(key, finding, "all" if len(found) > 1 else label)
    pick = max if meaning(key).worse == "high" else min
    worst = row(key, *pick(there, key=lambda pair: float(pair[0]["value"])))
    missing = len(found) - len(there)
    if not missing:
        return worst
    note = f"not found under {missing} of {len(found)} conditions"
    return replace(worst, remarks=(*worst.remarks, note))


def _written(finding: Json) -> tuple[str, str]:
    value, u, k = float(finding["value"]), finding.get("u"), finding.get("coverage_factor")
    low, high = finding.get("low"), finding.get("high")
    kind, sure = finding.get("bound") or "two_sided", coverage_percent(finding)
    if kind == "upper":
        return numbers.at_most(value, u), f"one-sided {sure}".strip()
    if kind == "lower":
        return numbers.at_least(value, u), f"one-sided {sure}".strip()
    expanded = float(u) * float(k) if u and k else None
    # a figure that is only counted has no interval: its two ends are one
    shown = "–" if low is None or high is None or low == high else numbers.interval(low, high, expanded)
    if expanded is not None and numbers.symmetric(value, low, high, expanded):
        return numbers.value_and_u(value, expanded), shown
    spread = expanded if expanded is not None else (None if low is None or high is None else (high - low) / 2.0)
    return numbers.at_place(value, numbers.place_for(value, spread)), shown


def coverage_percent(finding: Json) -> str:
    """'95 %', or nothing where the finding does not say. Takes 0.95 and 95 for the same."""
    p = finding.get("coverage_probability")
    if p is None:
        return ""
    return f"{numbers.plain(float(p) * 100.0 if p <= 1.0 else float(p))} %"


def _sure(finding: Json) -> tuple[str, str]:
    k, holds = finding.get("coverage_factor"), finding.get("holds")
    count = len(holds) if isinstance(holds, list | tuple) else holds
    two_sided = (finding.get("bound") or "two_sided") == "two_sided"
    return f"{float(k):.1f}" if k and two_sided else "–", "–" if count is None else str(count)


def as_lines(findings: Json) -> list[str]:
    """The worst case over conditions as plain lines for a terminal, columns aligned; no colour, no markup."""
    table = [
        (
            r.name,
            f"{r.value} {r.unit}".strip() if r.unit != "1" and r.found else r.value,
            r.condition,
            "; ".join(r.remarks),
        )
        for r in worst_rows(findings)
    ]
    widths = [max((len(line[i]) for line in table), default=0) for i in range(3)]
    return [
        "  ".join((*(cell.ljust(w) for cell, w in zip(line, widths, strict=False)), line[3])).rstrip() for line in table
    ]
