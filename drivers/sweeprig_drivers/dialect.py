"""The checking of a dialect, the table that says how one family of instruments spells its commands.

Finding and reading the file is not done here (`sweeprig.dialects`): an adapter gets the loaded table and checks it with
`Dialect`. Whatever goes out to an instrument, from a file or a setting, passes through `refusal` and `number_text`.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass

from sweeprig.errors import ConfigError

LONGEST_COMMAND = 255
_SHOWN = 70
_PLACE = re.compile(r"\{([a-z_]+)\}")
LONGEST_APERTURE_S = 1000.0
_TOP_KEYS = ("kind", "about", "reply", "no_value", "apertures", "commands", "values", "texts")


@dataclass(frozen=True, slots=True)
class Form:
    """What one command of a dialect must look like.

    places    names that stand in braces in it, each exactly once: `SOUR:VOLT {volts}`
    query     it asks for a reply (its header ends in `?`)
    optional  a dialect may leave it out
    """

    places: tuple[str, ...] = ()
    query: bool = False
    optional: bool = False


IDENTITY, CLEAR, ERROR = Form(query=True), Form(), Form(query=True)
EVENT_STATUS = Form(query=True, optional=True)
REMOTE = Form(optional=True)


def refusal(text: str) -> str:
    """Why `text` must not go to an instrument, or "" when it may.

    Refused: nothing at all, more than 255 characters, control characters, non-ASCII, `;` (it would begin another
    command) and `#` (it begins a block, IEEE 488.2, 7.7.6 and 8.7.9: the instrument would swallow what follows).
    """
    if not text.strip():
        return "is empty"
    if len(text) > LONGEST_COMMAND:
        return f"is longer than {LONGEST_COMMAND} characters"
    if not text.isascii():
        return "has a character that is not ASCII"
    if not text.isprintable():
        return "has a control character"
    for bad, meaning in ((";", "begins another command"), ("#", "begins a block")):
        if bad in text:
            return f"has a '{bad}', which {meaning}"
    return ""


def number_text(value: float) -> str:
    """`value` as it goes to an instrument: nine significant digits, NR1 to NR3. A ValueError unless finite."""
    if not math.isfinite(value):
        raise ValueError(f"{value} is not a finite number")
    return f"{value:.9g}"


def _shown(value: object) -> str:
    """`value` for an error text: escaped, on one line, cut short."""
    try:
        text = repr(value)
    except (ValueError, RecursionError):  # an integer of thousands of digits, or tables in tables without end
        text = f"a {type(value).__name__} too large to be shown"
    return text if len(text) <= _SHOWN else f"{text[: _SHOWN - 4]} …"


class Dialect:
    """A checked dialect. `command(key, …)` gives the bytes of a message; `no_value` the markers for "no value";
    `apertures` what the instrument offers (s; empty: any).

    kind      what the table must be written for: "multimeter", "supply", "scope"
    commands  the commands it must (or may) have, each with its Form
    values    numbers it must have, each with its least and greatest value
    texts     texts it must have that are never sent: patterns, units

    Every fault is a ConfigError that names the instrument and the key.
    """

    def __init__(
        self,
        name: str,
        table: Mapping[str, object],
        kind: str,
        commands: Mapping[str, Form],
        values: Mapping[str, tuple[float, float]] | None = None,
        texts: tuple[str, ...] = (),
    ) -> None:
        self._name = name
        self._check_top(table, kind)
        self.no_value = self._markers(table.get("no_value", []))
        self.apertures = self._seconds(table.get("apertures", []))
        self._commands = self._checked(self._table(table, "commands"), commands)
        self._values = self._numbers(self._table(table, "values"), values or {})
        self._texts = self._words(self._table(table, "texts"), texts)

    def has(self, key: str) -> bool:
        return key in self._commands

    def value(self, key: str) -> float:
        return self._values[key]

    def text(self, key: str) -> str:
        return self._texts[key]

    def command(self, key: str, **filled: str) -> bytes:
        """The message for `key` with its places filled in.

        A ConfigError when a value has what must not go to an instrument."""
        text = self._commands[key]
        for place, value in filled.items():
            why = refusal(value) or ("has a brace" if "{" in value or "}" in value else "")
            if why:
                raise ConfigError(
                    f"{self._name}: the value for '{place}' {why}",
                    value=_shown(value),
                    allowed="printable ASCII without ; # { }",
                    remedy="correct the value in the rig file",
                    topic="dialects",
                )
            text = text.replace("{" + place + "}", value)
        return text.encode("ascii")

    def _wrong(self, key: str, why: str, value: object = None, allowed: str | None = None) -> ConfigError:
        return ConfigError(
            f"{self._name}: the dialect's {_shown(key)} {why}",
            value=None if value is None else _shown(value),
            allowed=allowed,
            remedy="correct the dialect file",
            topic="dialects",
        )

    def _check_top(self, table: Mapping[str, object], kind: str) -> None:
        if not table:
            raise ConfigError(
                f"{self._name}: this adapter needs a dialect for a {kind} and got none",
                remedy='name one in the rig file: dialect = "…"',
                topic="dialects",
            )
        for key in table:
            if key not in _TOP_KEYS:
                raise self._wrong(key, "is not known", allowed=", ".join(_TOP_KEYS))
        if table.get("kind") != kind:
            raise self._wrong("kind", "is for another kind of instrument", table.get("kind"), kind)
        if table.get("reply", "line") != "line":
            raise self._wrong("reply", "is a shape this adapter does not read", table.get("reply"), "line")

    def _table(self, table: Mapping[str, object], key: str) -> Mapping[str, object]:
        found = table.get(key, {})
        if not isinstance(found, Mapping):
            raise self._wrong(key, "is not a table", found)
        return found

    def _markers(self, found: object) -> tuple[str, ...]:
        if not isinstance(found, list) or not all(isinstance(marker, str) and marker.strip() for marker in found):
            raise self._wrong("no_value", "is not a list of texts", found)
        return tuple(str(marker) for marker in found)

    def _seconds(self, found: object) -> tuple[float, ...]:
        """Times above 0 that the instrument offers; none: any within its limits."""
        if not isinstance(found, list):
            raise self._wrong("apertures", "is not a list of seconds", found)
        for each in found:
            if isinstance(each, bool) or not isinstance(each, int | float) or not 0.0 < each <= LONGEST_APERTURE_S:
                raise self._wrong(
                    "apertures", "has what is no time", each, f"above 0 s, up to {LONGEST_APERTURE_S:g} s"
                )
        return tuple(float(each) for each in found)

    def _checked(self, found: Mapping[str, object], wanted: Mapping[str, Form]) -> dict[str, str]:
        for key in found:
            if key not in wanted:
                raise self._wrong(f"commands.{key}", "is not known", allowed=", ".join(wanted))
        checked = {}
        for key, form in wanted.items():
            if key in found:
                checked[key] = self._command(f"commands.{key}", found[key], form)
            elif not form.optional:
                raise self._wrong(f"commands.{key}", "is missing")
        return checked

    def _command(self, key: str, text: object, form: Form) -> str:
        if not isinstance(text, str):
            raise self._wrong(key, "is not a text", text)
        if why := refusal(text):
            raise self._wrong(key, why, text)
        if sorted(_PLACE.findall(text)) != sorted(form.places) or set("{}") & set(_PLACE.sub("", text)):
            wanted = " ".join(f"{{{place}}}" for place in form.places) or "no braces"
            raise self._wrong(key, "has other places to fill in than this command takes", text, wanted)
        if text.split(" ", 1)[0].endswith("?") is not form.query:
            kind = "a query: its header ends in ?" if form.query else "a command: its header does not end in ?"
            raise self._wrong(key, "is of the wrong kind", text, kind)
        return text

    def _words(self, found: Mapping[str, object], wanted: tuple[str, ...]) -> dict[str, str]:
        for key in found:
            if key not in wanted:
                raise self._wrong(f"texts.{key}", "is not known", allowed=", ".join(wanted) or "none")
        checked = {}
        for key in wanted:
            text = found.get(key)
            if not isinstance(text, str) or not text or len(text) > LONGEST_COMMAND:
                raise self._wrong(f"texts.{key}", "is missing or no text", text, f"1 to {LONGEST_COMMAND} characters")
            checked[key] = text
        return checked

    def _numbers(self, found: Mapping[str, object], wanted: Mapping[str, tuple[float, float]]) -> dict[str, float]:
        for key in found:
            if key not in wanted:
                raise self._wrong(f"values.{key}", "is not known", allowed=", ".join(wanted) or "none")
        checked = {}
        for key, (low, high) in wanted.items():
            value = found.get(key)
            if isinstance(value, bool) or not isinstance(value, int | float) or not low <= value <= high:
                raise self._wrong(f"values.{key}", "is missing or out of range", value, f"{low:g} to {high:g}")
            checked[key] = float(value)
        return checked
