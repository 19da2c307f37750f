"""Gathers what the page shows from a run into plain values. Reads the run, changes nothing, draws nothing.

Words and numbers leave here as plain text; escaping is the template's.
"""

from __future__ import annotations

import dataclasses
import hashlib
import json
import re
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from datetime import UTC, datetime
from typing import Any

from sweeprig.holds import Outcome, Purpose, Status
from sweeprig.quantities import show_quantity
from sweeprig.report import numbers
from sweeprig.report.catalogue import MEANINGS, flag_text, meaning
from sweeprig.report.tables import condition_label, entries

Json = Mapping[str, Any]
NOT_RECORDED = "not recorded"
_FIGURE = re.compile(r"\d+(?:\.\d+)?")
_UNIT_OF_QUANTITY = {"volts": "V", "amps": "A", "speed": "rpm", "duty": "%", "frequency": "Hz", "pwm_hz": "Hz"}
NO_MEANING = "This version of the report has no definition for it; the findings file names its method."
MOST_LISTED = 200
"""Rows of the list of holds that are no data; the rest is counted."""


def plain_value(thing: Any) -> Any:
    """A model, data class or namespace as a dict of plain values; other things as they are."""
    if hasattr(thing, "model_dump"):
        return thing.model_dump()
    if dataclasses.is_dataclass(thing) and not isinstance(thing, type):
        return dataclasses.asdict(thing)
    return dict(vars(thing)) if hasattr(thing, "__dict__") else thing


def said(thing: Any, name: str) -> str:
    """An optional text of the job: its value, or 'not recorded'."""
    value = getattr(thing, name, None)
    return str(value) if value not in (None, "") else NOT_RECORDED


def item(motor: Any) -> str:
    """What tells this motor from another: maker, part, serial, lot, attitude, and its life before the run."""
    named = (("maker", ""), ("part_number", "part "), ("serial", "serial "), ("lot", "lot "), ("attitude", ""))
    parts = [f"{words}{getattr(motor, key)}" for key, words in named if getattr(motor, key, None)]
    for key, words in (("hours_before", "hours before"), ("starts_before", "starts before")):
        if getattr(motor, key, None) is not None:
            parts.append(f"{numbers.plain(float(getattr(motor, key)))} {words}")
    return ", ".join(parts) or "no serial number is on record"


def utc_text(seconds: float) -> str:
    return datetime.fromtimestamp(seconds, UTC).strftime("%Y-%m-%d %H:%M UTC")


def when(outcomes: Sequence[Outcome]) -> str:
    if not outcomes:
        return "no hold was made"
    began, ended = utc_text(min(o.began_utc for o in outcomes)), utc_text(max(o.ended_utc for o in outcomes))
    return f"{began[:16]} to {ended[11:] if ended[:10] == began[:10] else ended}"


def outcomes_hash(outcomes: Iterable[Outcome]) -> str:
    """SHA-256, hex, of all outcomes as JSON with sorted keys: tells whether two reports rest on the same data."""
    text = json.dumps([dataclasses.asdict(o) for o in outcomes], sort_keys=True, default=dict)
    return hashlib.sha256(text.encode()).hexdigest()


def ambient(run: Any) -> str:
    """Lowest and highest ambient temperature that was read, or that none was."""
    channel = run.plan.roles.get("ambient")
    read = [r.value for o in run.outcomes if (r := o.means.get(channel or "")) is not None and r.value is not None]
    if not read:
        return "not measured by this rig"
    return f"{min(read):.1f} °C to {max(read):.1f} °C, from {channel}"


def definitions(run: Any) -> list[tuple[str, str, str]]:
    """(name, full name, sentence with this run's times put in) of every finding that occurs."""
    plan = run.plan
    filled = {
        "hold_time": show_quantity(plan.stall.hold_time_s, "s") if plan.stall else "the hold time",
        "start_time": show_quantity(plan.start.start_time_s, "s") if plan.start else "the start time",
        "rest_time": show_quantity(plan.start.rest_time_s, "s") if plan.start else "the rest time",
        "saturation": f"{numbers.plain(plan.saturation_percent)} %",
    }
    seen = {key for entry in run.findings.as_json().get("conditions") or () for key, _ in entries(entry)}
    known = [(m.name, key, m.says.format(**filled)) for key, m in MEANINGS.items() if key in seen]
    return known + [(meaning(key).name, key, NO_MEANING) for key in sorted(seen - set(MEANINGS))]


def methods(findings: Json) -> list[tuple[str, str, str]]:
    """(the findings so found, how, what it assumes), one line for each way.

    Ways that differ in their figures only are one line, with one of the texts and a note.
    """
    ways: dict[tuple[str, str], tuple[dict[str, None], set[tuple[str, str]]]] = {}
    for condition in findings.get("conditions") or ():
        for key, finding in entries(condition):
            if finding.get("value") is not None:
                way = (listed(finding.get("method")), listed(finding.get("assumes")))
                names, texts = ways.setdefault((_FIGURE.sub("#", way[0]), _FIGURE.sub("#", way[1])), ({}, set()))
                names[meaning(key).name] = None
                texts.add(way)
    return [(", ".join(names), *_one_of(texts)) for names, texts in ways.values()]


def _one_of(texts: set[tuple[str, str]]) -> tuple[str, str]:
    how, what = min(texts)
    return (how, what) if len(texts) == 1 else (f"{how} (the figures differ from condition to condition)", what)


def listed(value: Any) -> str:
    """Text, or a list of texts as one line; '–' for nothing."""
    if value in (None, "", [], ()):
        return "–"
    return "; ".join(str(part) for part in value) if isinstance(value, list | tuple) else str(value)


def counts(outcomes: Sequence[Outcome]) -> list[tuple[str, int, int, int, int, str]]:
    """(purpose, done, discarded, abandoned, tripped, time spent) for every purpose that occurs."""
    lines = []
    for purpose in Purpose:
        chosen = [o for o in outcomes if o.hold.purpose == purpose]
        if chosen:
            by = Counter(o.status for o in chosen)
            spent = sum(o.ended_utc - o.began_utc for o in chosen) / 60.0
            lines.append((
                purpose.value.replace("_", "-"), by[Status.DONE], by[Status.DISCARDED], by[Status.ABANDONED],
                by[Status.TRIPPED], f"{spent:.1f} min",
            ))  # fmt: skip
    return lines


def not_data(outcomes: Sequence[Outcome]) -> tuple[list[tuple[str, ...]], int]:
    """Holds that are no data: (number, purpose, condition, duty, status, reason), and how many more there are."""
    chosen = [o for o in outcomes if o.status is not Status.DONE]
    lines: list[tuple[str, ...]] = [
        (
            str(o.number), o.hold.purpose.value.replace("_", "-"), o.hold.condition.label(),
            f"{numbers.plain(o.hold.duty_percent)} %", o.status.value,
            o.reason or listed([flag_text(f) for f in o.flags]),
        )
        for o in chosen[:MOST_LISTED]
    ]  # fmt: skip
    return lines, len(chosen) - len(lines)


def flagged(outcomes: Sequence[Outcome]) -> list[tuple[str, int, str]]:
    """(flag in words, number of holds, the first of their numbers) of flags on holds that are data.

    A flag that carries a figure (`not_settled_to_tolerance:3.2%`) is one line, whatever the figures.
    """
    where: dict[str, list[int]] = {}
    for o in outcomes:
        for head in dict.fromkeys(flag.partition(":")[0] for flag in o.flags) if o.status is Status.DONE else ():
            where.setdefault(flag_text(head), []).append(o.number)
    return [(flag, len(n), ", ".join(map(str, n[:12])) + (" …" if len(n) > 12 else "")) for flag, n in where.items()]


def instruments(run: Any) -> list[dict[str, str]]:
    """Every instrument: role channels, adapter, identity as answered, accuracy, calibration. Missing is said."""
    rig = plain_value(run.job.rig)
    identities = _identities(run)
    lines = []
    for name, model in (rig.get("instruments") or {}).items():
        about = plain_value(model)
        roles = [r for r, c in run.plan.roles.items() if str(c).split(".")[0] == name]
        lines.append({
            "name": name,
            "roles": ", ".join(role.replace("_", " ") for role in roles) or "–",
            "identity": identities.get(name, NOT_RECORDED),
            "adapter": " / ".join(str(about[key]) for key in ("adapter", "dialect") if about.get(key)),
            "connected": str(about.get("connected_to") or "–").replace("_", " "),
            "accuracy": _accuracy(about.get("accuracy")),
            "calibration": _calibration(about.get("calibration")),
        })  # fmt: skip
    return lines


def _identities(run: Any) -> dict[str, str]:
    """Instrument name → 'maker model, serial …, firmware …' from the record; later sessions win."""
    frame = getattr(run, "instruments", None)
    found: dict[str, str] = {}
    for line in frame.to_dict("records") if frame is not None else ():
        name = line.get("name", line.get("instrument"))
        if name:
            maker = f"{line.get('maker', '')} {line.get('model', '')}".strip()
            found[str(name)] = f"{maker}, serial {line.get('serial') or '0'}, firmware {line.get('firmware') or '0'}"
    return found


def _accuracy(table: Any) -> str:
    parts = []
    for quantity, entry in (table or {}).items():
        statement = plain_value(entry)
        parts.append(
            f"{quantity} ± ({numbers.plain(float(statement.get('percent_of_reading', 0.0)))} % of reading "
            f"+ {_amount(statement.get('plus', 0.0), _UNIT_OF_QUANTITY.get(quantity, ''))})"
        )
    return "; ".join(parts) or "none stated"


def _amount(plus: Any, unit: str) -> str:
    if not isinstance(plus, int | float):
        return str(plus)
    return show_quantity(float(plus), unit) if unit else numbers.plain(float(plus))


def _calibration(table: Any) -> str:
    entry = plain_value(table) if table else None
    if not entry:
        return "none stated: not traceable"
    text = f"certificate {entry.get('certificate', NOT_RECORDED)}, {entry.get('date', NOT_RECORDED)}"
    return f"{text}, due {entry['due']}" if entry.get("due") else text


def conditions_named(findings: Json) -> list[tuple[str, Json]]:
    return [(condition_label(entry), entry) for entry in findings.get("conditions") or ()]


def shown(thing: Any) -> str:
    """A suspicion, an advice or other entry as one line, whether it is text or a small table."""
    if isinstance(thing, Mapping):
        return "; ".join(
            f"{str(key).replace('_', ' ')}: {shown(value)}" for key, value in thing.items() if value is not None
        )
    if isinstance(thing, list | tuple):
        return ", ".join(shown(part) for part in thing)
    return numbers.plain(thing) if isinstance(thing, float) else str(thing)


def limit_text(limit: Any, unit: str) -> str:
    """'at most 15 %' of {"at_most": 15.0}; text as it is."""
    if not isinstance(limit, Mapping):
        return shown(limit)
    tail = "" if unit in ("", "1") else f" {unit}"
    return ", ".join(
        f"{str(key).replace('_', ' ')} {shown(value)}{tail}" for key, value in limit.items() if value is not None
    )


def doubt(entry: Any) -> tuple[str, str]:
    """A suspicion as (what is doubted, the rest: evidence and rule)."""
    if not isinstance(entry, Mapping):
        return shown(entry), ""
    rest = dict(entry)
    for key in ("what", "text", "says"):
        if rest.get(key):
            return shown(rest.pop(key)), shown(rest)
    return shown(rest), ""
