"""What supervisor and runner say to each other: one JSON line each, bounded. Pure: bytes in, values out.

Runner to supervisor: `hello`, every event of the table in `states`, then `ended` or `failed`. Supervisor to runner: a
beat and the orders of `ORDERS`, each a word on a line.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import sweeprig.errors as errors
from sweeprig.conduct.states import EVENTS, Ending, Event, State
from sweeprig.errors import SweeprigError

MOST_LINE = 65_536
"""Bytes of one line, its end included; a longer one says nothing."""
_ROOM = MOST_LINE // 8
"""Characters that the texts of a too long line are cut to, all together: one may cost six bytes."""
_MOST_ENTRIES = 16

BEAT = b"beat\n"
ORDERS = ("finish", "off", "pause", "ready")
_PARTS = ("what", "value", "allowed", "remedy", "topic")


@dataclass(frozen=True, slots=True)
class Hello:
    """The runner lives: its process."""

    pid: int


@dataclass(frozen=True, slots=True)
class Failed:
    """The session ended with an error: the class's name, its parts, and the exit code that belongs to it."""

    error: str
    parts: Mapping[str, Any]
    exit_code: int

    def raised(self) -> SweeprigError:
        """The same error again, in the process that reads this. An unknown class becomes the base."""
        named = getattr(errors, self.error, None)
        kind: type[SweeprigError] = errors.RigError
        if isinstance(named, type) and issubclass(named, SweeprigError) and not issubclass(named, errors.LinkError):
            kind = named
        error = kind.__new__(kind)
        SweeprigError.__init__(error, str(self.parts.get("what")), **{p: self.parts.get(p) for p in _PARTS[1:]})
        error.exit_code = self.exit_code
        return error


Said = Hello | Event | Ending | Failed


def line_of(said: Said) -> bytes:
    """One line with its end. Values that JSON does not know are written as their text."""
    if isinstance(said, Hello):
        data: dict[str, Any] = {"hello": said.pid}
    elif isinstance(said, Event):
        data = {"kind": said.kind, "at": said.at, "data": dict(said.data)}
    elif isinstance(said, Ending):
        data = {"ended": said.state.name, "reason": said.reason, "again": said.again}
    else:
        data = {"failed": said.error, "parts": dict(said.parts), "exit_code": said.exit_code}
    line = json.dumps(data, default=str).encode() + b"\n"
    return line if len(line) <= MOST_LINE else json.dumps(_short(data, _ROOM)).encode() + b"\n"


def _short(value: Any, room: int) -> Any:
    """The same with its texts cut and only the first entries of a list: what an instrument or a library said may have
    no end, and the line that carries it must still arrive."""
    if isinstance(value, Mapping):
        kept = list(value.items())[:_MOST_ENTRIES]
        share = room // (2 * len(kept) or 1)
        return {str(key)[:share]: _short(one, share) for key, one in kept}
    if isinstance(value, list | tuple):
        return [_short(one, room // (len(value[:_MOST_ENTRIES]) or 1)) for one in value[:_MOST_ENTRIES]]
    if value is None or isinstance(value, bool | float):
        return value
    if isinstance(value, int) and abs(value) < 10**18:
        return value
    text = str(value)
    return text if len(text) <= room else f"{text[: max(room - 2, 0)]} …"


def failed(error: SweeprigError) -> Failed:
    parts = {part: getattr(error, part) for part in _PARTS}
    if error.where is not None:
        parts["what"] = f"{error.where}: {error.what}"
    return Failed(type(error).__name__, parts, error.exit_code)


def understood(line: bytes) -> Said | None:
    """What a line says; None for one that says nothing of ours (a library's stray print, a torn line)."""
    try:
        data = json.loads(line)
        if not isinstance(data, dict):
            return None
        if "hello" in data:
            return Hello(int(data["hello"]))
        if "kind" in data:
            return Event(data["kind"], float(data["at"]), dict(data["data"])) if data["kind"] in EVENTS else None
        if "ended" in data:
            return Ending(State[data["ended"]], str(data["reason"]), bool(data["again"]))
        return Failed(str(data["failed"]), dict(data["parts"]), int(data["exit_code"]))
    except (ValueError, KeyError, TypeError, OverflowError, RecursionError):
        return None
