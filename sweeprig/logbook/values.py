"""JSON for the shared values: Condition, Hold, Outcome, Reading; and the rows the logbook alone has.

Pure: dicts and text in, values out. No SQL and no files here. A number that is not finite is written as the text
"inf", "-inf" or "nan", because JSON has no such number.
"""

from __future__ import annotations

import dataclasses
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import Any, NamedTuple

from sweeprig.holds import Approach, AtTap, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.quantities import Reading
from sweeprig.roles import Identity

Json = dict[str, Any]


@dataclass(frozen=True, slots=True)
class Session:
    """One start or resume of a run. began: run clock, s; began_utc: UTC seconds."""

    number: int
    began: float
    began_utc: float
    info: Mapping[str, object] = field(default_factory=dict)


class Intent(NamedTuple):
    """A hold that was about to begin: written before the drive moves. began: run clock, s; began_utc: UTC seconds."""

    hold: Hold
    session: int
    began: float
    began_utc: float


@dataclass(frozen=True, slots=True)
class Event:
    """Something that happened beside the holds. at: run clock, s; utc: UTC seconds."""

    kind: str
    at: float
    utc: float
    data: Mapping[str, object] = field(default_factory=dict)
    session: int = 0


@dataclass(frozen=True, slots=True)
class InstrumentSeen:
    """Who answered under a name of the rig file in a session, and its settings at that moment (run clock, s)."""

    session: int
    name: str
    identity: Identity
    settings: Mapping[str, str]
    at: float


def dump(data: object) -> str:
    """`data` as compact JSON text, pure ASCII. An odd value is no error: what JSON lacks is written as text."""
    try:
        return json.dumps(data, separators=(",", ":"), allow_nan=False, default=_odd)
    except (ValueError, TypeError):  # somewhere inside a number that is not finite, or a key that is no text
        return json.dumps(_without_odd_numbers(data), separators=(",", ":"), default=_odd)


LARGEST_JSON = 1_000_000
"""Characters of one JSON text of the logbook; a hold has some three hundred, an outcome some thousand."""


def load(text: str) -> Any:
    """The reverse of `dump`. ValueError on text that is not JSON, is nested without end, or is far too long."""
    if not isinstance(text, str) or len(text) > LARGEST_JSON:
        raise ValueError(f"no JSON text of at most {LARGEST_JSON:,} characters")
    try:
        return json.loads(text, parse_constant=_no_constant)
    except RecursionError:
        raise ValueError("nested too deeply") from None


def _no_constant(name: str) -> Any:
    raise ValueError(f"{name} is no number of JSON")


def as_text(value: object) -> str:
    """`value`, which must be a text."""
    if not isinstance(value, str):
        raise TypeError(f"a text is wanted, not {type(value).__name__}")
    return value


def as_number(value: object) -> float:
    """`value`, a number or one of the texts "inf" and "-inf", as a float; never NaN."""
    number = (
        float(value) if isinstance(value, int | float) and not isinstance(value, bool) else _INFINITE.get(str(value))
    )
    if number is None or math.isnan(number):
        raise ValueError(f"a number is wanted, not {str(value)[:20]!r}")
    return number


def as_count(value: object) -> int:
    """`value`, which must be a whole number."""
    if not isinstance(value, int) or isinstance(value, bool):
        raise TypeError(f"a whole number is wanted, not {type(value).__name__}")
    return value


def as_table(value: object) -> Mapping[str, Any]:
    """`value`, which must be a JSON object."""
    if not isinstance(value, dict):
        raise TypeError(f"an object is wanted, not {type(value).__name__}")
    return value


def as_texts(value: object) -> tuple[str, ...]:
    """`value`, which must be a list of texts."""
    if not isinstance(value, list | tuple):
        raise TypeError(f"a list is wanted, not {type(value).__name__}")
    return tuple(as_text(entry) for entry in value)


_INFINITE = {"inf": math.inf, "-inf": -math.inf}


def condition_to_json(condition: Condition) -> Json:
    return {
        "pwm_hz": number_to_json(condition.pwm_hz),
        "supply_v": number_to_json(condition.supply_v),
        "direction": condition.direction,
        "load": condition.load,
        "thermal": condition.thermal,
        "freewheel": condition.freewheel,
    }


def condition_from_json(data: Mapping[str, Any]) -> Condition:
    """KeyError or ValueError where `data` is no condition. Equal conditions are one object: the schedule looks them up
    by the thousand, and an object that it has met costs it next to nothing."""
    return _shared(
        as_number(data["pwm_hz"]),
        as_number(data["supply_v"]),
        as_text(data["direction"]),
        as_text(data["load"]),
        as_text(data["thermal"]),
        as_text(data["freewheel"]),
    )


@lru_cache(maxsize=256)
def _shared(pwm_hz: float, supply_v: float, direction: str, load: str, thermal: str, freewheel: str) -> Condition:
    return Condition(pwm_hz, supply_v, direction, load, thermal, freewheel)


def hold_to_json(hold: Hold) -> Json:
    """The hold as plain data. `taps` stands only where there are some: other holds read as they did before taps."""
    data: Json = {
        "number": hold.number,
        "purpose": hold.purpose.value,
        "approach": hold.approach.value,
        "condition": condition_to_json(hold.condition),
        "duty_percent": number_to_json(hold.duty_percent),
        "least_s": number_to_json(hold.least_s),
        "most_s": number_to_json(hold.most_s),
        "ends_when": hold.ends_when.value,
        "roles": list(hold.roles),
        "why": hold.why,
        "lead": [[number_to_json(duty), number_to_json(seconds)] for duty, seconds in hold.lead],
        "tap": hold.tap,
    }
    if hold.taps:
        data["taps"] = [
            {"tap": one.tap} | {name: number_to_json(getattr(one, name)) for name in _AT_TAP} for one in hold.taps
        ]
    return data


_AT_TAP = tuple(each.name for each in dataclasses.fields(AtTap) if each.name != "tap")


def _at_tap(data: object) -> AtTap:
    table = as_table(data)
    return AtTap(tap=as_count(table["tap"]), **{name: as_number(table[name]) for name in _AT_TAP})


def hold_from_json(data: Mapping[str, Any]) -> Hold:
    """KeyError, TypeError or ValueError where `data` is no hold."""
    data = as_table(data)
    return Hold(
        number=as_count(data["number"]),
        purpose=Purpose(data["purpose"]),
        approach=Approach(data["approach"]),
        condition=condition_from_json(as_table(data["condition"])),
        duty_percent=as_number(data["duty_percent"]),
        least_s=as_number(data["least_s"]),
        most_s=as_number(data["most_s"]),
        ends_when=EndsWhen(data["ends_when"]),
        roles=as_texts(data["roles"]),
        why=as_text(data["why"]),
        lead=tuple((as_number(duty), as_number(seconds)) for duty, seconds in data.get("lead", ())),
        tap=None if data.get("tap") is None else as_count(data["tap"]),
        taps=tuple(_at_tap(one) for one in data.get("taps", ())),
    )


def reading_to_json(reading: Reading) -> Json:
    sure = sound(reading)
    return {
        "value": sure.value,
        "u": number_to_json(sure.u),
        "unit": sure.unit,
        "at": number_to_json(sure.at),
        "channel": sure.channel,
        "flags": list(sure.flags),
        "raw": sure.raw,
    }


def reading_from_json(data: Mapping[str, Any]) -> Reading:
    """KeyError, TypeError or ValueError where `data` is no reading. A value that is not finite is no data."""
    data = as_table(data)
    value = data["value"]
    read = Reading(
        value=None if value is None else as_number(value),
        u=as_number(data["u"]),
        unit=as_text(data["unit"]),
        at=as_number(data["at"]),
        channel=as_text(data["channel"]),
        flags=as_texts(data.get("flags", ())),
        raw=as_text(data.get("raw", "")),
    )
    return sound(read)


def outcome_to_json(outcome: Outcome, *, with_hold: bool = True) -> Json:
    """The outcome as plain data. `with_hold=False` leaves its hold out, where that stands beside it anyway."""
    after, before = outcome.event_between_s
    data: Json = {
        "number": outcome.number,
        "session": outcome.session,
        "status": outcome.status.value,
        "verdict": outcome.verdict.value,
        "began": number_to_json(outcome.began),
        "ended": number_to_json(outcome.ended),
        "began_utc": number_to_json(outcome.began_utc),
        "ended_utc": number_to_json(outcome.ended_utc),
        "exposed_s": number_to_json(outcome.exposed_s),
        "event_between_s": [number_to_json(after), None if before is None else number_to_json(before)],
        "restarts": outcome.restarts,
        "means": {channel: reading_to_json(mean) for channel, mean in outcome.means.items()},
        "flags": list(outcome.flags),
        "reason": outcome.reason,
    }
    if with_hold:
        data["hold"] = hold_to_json(outcome.hold)
    return data


def outcome_from_json(data: Mapping[str, Any], hold: Hold | None = None) -> Outcome:
    """`hold` where the data were written without it. KeyError, TypeError or ValueError where `data` is no
    outcome."""
    data = as_table(data)
    after, before = data.get("event_between_s", (0.0, None))
    return Outcome(
        number=as_count(data["number"]),
        hold=hold_from_json(data["hold"]) if hold is None else hold,
        session=as_count(data["session"]),
        status=Status(data["status"]),
        verdict=Verdict(data["verdict"]),
        began=as_number(data["began"]),
        ended=as_number(data["ended"]),
        began_utc=as_number(data["began_utc"]),
        ended_utc=as_number(data["ended_utc"]),
        exposed_s=as_number(data.get("exposed_s", 0.0)),
        event_between_s=(as_number(after), None if before is None else as_number(before)),
        restarts=as_count(data.get("restarts", 0)),
        means={channel: reading_from_json(mean) for channel, mean in as_table(data.get("means", {})).items()},
        flags=as_texts(data.get("flags", ())),
        reason=as_text(data.get("reason", "")),
    )


def sound(reading: Reading) -> Reading:
    """The reading as it may be kept: a value that is not finite is no data, a u that is NaN is unbounded (inf).

    An adapter must never hand these out; the record stays honest where one does.
    """
    if reading.value is not None and not math.isfinite(reading.value):
        flags = (*reading.flags, "no_data:not_finite")
        reading = dataclasses.replace(reading, value=None, flags=flags)
    if math.isnan(reading.u):
        reading = dataclasses.replace(reading, u=math.inf)
    return reading


def number_to_json(number: float) -> float | str:
    return number if math.isfinite(number) else str(float(number))


def _odd(value: object) -> object:
    """What the JSON encoder cannot write by itself."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {entry.name: getattr(value, entry.name) for entry in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): entry for key, entry in value.items()}
    if isinstance(value, (set, frozenset)):
        return sorted(value, key=str)
    if isinstance(value, (bytes, bytearray)):
        return bytes(value).decode("ascii", "backslashreplace")
    if isinstance(value, Path):
        return value.as_posix()
    to_list = getattr(value, "tolist", None)  # an array, or an array library's scalar
    return to_list() if callable(to_list) else str(value)


def _without_odd_numbers(data: object) -> object:
    if isinstance(data, float):
        return number_to_json(data)
    if dataclasses.is_dataclass(data) and not isinstance(data, type):
        return _without_odd_numbers(_odd(data))
    if isinstance(data, Mapping):
        return {str(key): _without_odd_numbers(entry) for key, entry in data.items()}
    if isinstance(data, (list, tuple, set, frozenset)):
        return [_without_odd_numbers(entry) for entry in data]
    return data
