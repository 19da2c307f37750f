"""A TOML text as data plus an index: for every key and every array item, the line on which it stands.

The values are the standard library's; the scanner here only finds places, and only in texts that the library took.
"""

from __future__ import annotations

import bisect
import re
import stat
import tomllib
from dataclasses import dataclass
from pathlib import Path

from sweeprig.errors import ConfigError, Where

LARGEST_FILE = 1_000_000
"""Bytes. A job file is a page or two; more is a wrong file, and would only be read to be refused."""

MOST_PLACES = 5_000
"""Keys and array items of one file. Each may be a problem with a sentence of its own; no job has a tenth of it."""

MOST_PARTS = 32
"""Parts of one dotted key. Every part is a table within the last one: thousands of them fill the memory."""

LARGEST_INTEGER = 2**63 - 1
"""TOML 1.0 promises no more than 64 bits; longer ones cannot even be shown in an error text."""

KeyPath = tuple[str | int, ...]
"""Keys and array positions (from 0) from the top of a file down to a value: ("pwm", 1)."""

_BLANK = re.compile(r"(?:[ \t\r\n]+|#[^\n]*)*")
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_STRING = re.compile(
    r'"""(?:[^\\]|\\.)*?"""(?:"{0,2})' r"|'''.*?''''{0,2}" r'|"(?:[^"\\]|\\.)*"' r"|'[^']*'", re.DOTALL
)
_OTHER_VALUE = re.compile(r"[^,\]}\n#]*")
_AT_LINE = re.compile(r"\(at line (\d+), column (\d+)\)")
_PART = r"(?:[A-Za-z0-9_-]++|\"[^\"\n]*+\"|'[^'\n]*+')"
_LONG_KEY = re.compile(rf"(?<![A-Za-z0-9_.-]){_PART}(?:[ \t]*+\.[ \t]*+{_PART}){{{MOST_PARTS}}}")
_SHOWN_KEY = 70


@dataclass(frozen=True, slots=True)
class Source:
    """One parsed text: `file` as a person would open it, its data, and the line (from 1) of every key path."""

    file: str
    data: dict[str, object]
    lines: dict[KeyPath, int]

    def line(self, path: KeyPath) -> int | None:
        """Line of `path`, or of the nearest table around it; None where not even that is written in the file."""
        for length in range(len(path), 0, -1):
            if path[:length] in self.lines:
                return self.lines[path[:length]]
        return None

    def where(self, path: KeyPath) -> Where:
        return Where(self.file, self.line(path), dotted(path) or None)


def dotted(path: KeyPath) -> str:
    """`("duty", "high")` → "duty.high"; `("pwm", 1)` → "pwm, item 2": people count from one."""
    text = ""
    for part in path:
        if isinstance(part, int):
            text += f", item {part + 1}"
        else:
            text += f".{_shown_key(part)}" if text else _shown_key(part)
    return text


def read(path: Path, named_by: Where | None = None) -> Source:
    """Parse the file at `path`. `named_by`: the place in another file that names this one.

    ConfigError when there is no such file (with what lies in its folder), it is larger than `LARGEST_FILE`, no text
    in UTF-8, or no TOML (with the line).
    """
    try:
        if not stat.S_ISREG(path.stat().st_mode):  # a pipe or a device might never end, or never begin
            raise IsADirectoryError(0, "it is no ordinary file")
        with path.open("rb") as stream:
            raw = stream.read(LARGEST_FILE + 1)
    except (OSError, ValueError) as error:  # ValueError: a NUL in the path
        raise _unreadable(path, named_by, error) from error
    if len(raw) > LARGEST_FILE:
        size = f"more than {LARGEST_FILE:,} bytes"
        what, remedy = "the file is too large for a job file", "Check that the path names the file that is meant"
        raise ConfigError(
            what, value=size, allowed=f"up to {LARGEST_FILE:,} bytes", where=Where(str(path)), remedy=remedy
        )
    try:
        text = raw.decode("utf-8-sig")  # some editors put a mark at the head
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        what, value = "the file is not text in UTF-8", f"byte 0x{raw[error.start]:02X}"
        raise ConfigError(what, value=value, where=Where(str(path), line), remedy="Save it as UTF-8") from error
    return parse(text, str(path))


def parse(text: str, file: str) -> Source:
    """Parse a TOML text; `file` is what errors call it. ConfigError with the line where it is no TOML, or outsized."""
    if (long := _LONG_KEY.search(text)) is not None:
        line = text.count("\n", 0, long.start()) + 1
        raise _outsized("a key has too many parts", f"more than {MOST_PARTS}", f"up to {MOST_PARTS}", Where(file, line))
    try:
        data = tomllib.loads(text)
        lines = _Scanner(text).scan()
    except tomllib.TOMLDecodeError as error:
        raise _no_toml(text, file, str(error)) from error
    except RecursionError as error:
        remedy = "No job needs arrays or tables nested hundreds deep"
        raise ConfigError("the file is nested too deeply", where=Where(file), remedy=remedy) from error
    except ValueError as error:  # the interpreter's own bound on the digits of an integer
        raise _outsized("an integer has too many digits", None, "up to 19 digits", Where(file)) from error
    source = Source(file, data, lines)
    _refuse_outsized(source)
    return source


def _refuse_outsized(source: Source) -> None:
    if len(source.lines) > MOST_PLACES:
        found, allowed = f"{len(source.lines):,} keys and array items", f"up to {MOST_PLACES:,}"
        raise _outsized("there is too much in this file", found, allowed, Where(source.file))
    left: list[tuple[KeyPath, object]] = [((), source.data)]
    while left:
        path, value = left.pop()
        if isinstance(value, int) and abs(value) > LARGEST_INTEGER:
            raise _outsized("an integer is too large", None, "64 bits", source.where(path))
        if isinstance(value, dict | list):
            inner = value.items() if isinstance(value, dict) else enumerate(value)
            left += [((*path, key), each) for key, each in inner]


def _outsized(what: str, value: str | None, allowed: str, where: Where) -> ConfigError:
    remedy = "Check that this is the file that is meant"
    return ConfigError(what, value=value, allowed=allowed, where=where, remedy=remedy, topic="job-files")


def _no_toml(text: str, file: str, message: str) -> ConfigError:
    found = _AT_LINE.search(message)
    all_lines = text.split("\n")
    line = int(found.group(1)) if found else len(all_lines)
    reason = message.split(" (at ")[0]
    reason = reason[:1].lower() + reason[1:]
    shown = all_lines[line - 1].strip() if line <= len(all_lines) else ""
    remedy = 'Texts and quantities stand in quotes: key = "300 Hz"; see the line above it too'
    column = f", column {found.group(2)}" if found else " at the end of the file"
    value = (shown if len(shown) <= 70 else f"{shown[:66]} …") if found else None
    what = f"this is not TOML: {reason}{column}"
    return ConfigError(what, value=value, where=Where(file, line), remedy=remedy, topic="job-files")


def _unreadable(path: Path, named_by: Where | None, error: OSError | ValueError) -> ConfigError:
    if path.is_dir():
        what = "this is a folder where a file is wanted"
    elif isinstance(error, FileNotFoundError | NotADirectoryError | ValueError):
        what = "there is no such file"
    else:
        what = f"the file cannot be read ({error.strerror})"
    folder = path if path.is_dir() else path.parent
    return ConfigError(what, value=str(path), where=named_by, remedy=_what_lies_in(folder), topic="job-files")


def _what_lies_in(folder: Path) -> str:
    """What a person would look for next: the TOML files of the folder, at most a dozen."""
    if not folder.is_dir():
        return f"There is no folder {folder} either"
    try:
        names = sorted(entry.name for entry in folder.iterdir() if entry.suffix == ".toml")
    except OSError as error:
        return f"The folder {folder} cannot be listed ({error.strerror})"
    if not names:
        return f"No .toml file lies in {folder}"
    more = f" and {len(names) - 12} more" if len(names) > 12 else ""
    return f"In {folder} lie: {', '.join(names[:12])}{more}"


def _shown_key(key: str) -> str:
    key = key if len(key) <= _SHOWN_KEY else f"{key[: _SHOWN_KEY - 4]} …"
    return key if _BARE_KEY.fullmatch(key) else f'"{key if key.isprintable() else ascii(key)[1:-1]}"'


class _Scanner:
    """Walks over a text that is known to be valid TOML and notes where each key and array item begins."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.lines: dict[KeyPath, int] = {}
        self.members: dict[KeyPath, int] = {}  # arrays of tables: how many there are so far
        self.breaks = [match.start() for match in re.finditer("\n", text)]

    def scan(self) -> dict[KeyPath, int]:
        table: KeyPath = ()
        self.skip_blank()
        while self.at < len(self.text):
            if self.text.startswith("[", self.at):
                table = self.header()
            else:
                self.pair(table)
            self.skip_blank()
        return self.lines

    def skip_blank(self) -> None:
        match = _BLANK.match(self.text, self.at)
        self.at = match.end() if match else self.at

    def line(self) -> int:
        return bisect.bisect_left(self.breaks, self.at) + 1

    def note(self, path: KeyPath, line: int) -> None:
        self.lines.setdefault(path, line)

    def header(self) -> KeyPath:
        """`[a.b]` or `[[a.b]]` → the path of the table that begins; a table's own header outdoes an earlier mention."""
        line, many = self.line(), self.text.startswith("[[", self.at)
        self.at += 2 if many else 1
        keys = self.key()
        self.at = self.text.index("]", self.at) + (2 if many else 1)
        path: KeyPath = ()
        for position, key in enumerate(keys):
            path = (*path, key)
            self.note(path, line)
            if many and position == len(keys) - 1:
                self.members[path] = self.members.get(path, 0) + 1
            if path in self.members:
                path = (*path, self.members[path] - 1)
                self.note(path, line)
        if not many:
            self.lines[path] = line
        return path

    def pair(self, table: KeyPath) -> None:
        """`a.b = value`, in `table`."""
        line, path = self.line(), table
        for key in self.key():
            path = (*path, key)
            self.note(path, line)
        self.at = self.text.index("=", self.at) + 1
        self.value(path)

    def key(self) -> list[str]:
        """A key, dotted or not, as its parts; stands behind it afterwards."""
        keys: list[str] = []
        while True:
            self.skip_blank()
            bare = _BARE_KEY.match(self.text, self.at)
            if bare:
                keys.append(bare.group())
                self.at = bare.end()
            else:
                quoted = self.string()
                keys.append(str(tomllib.loads(f"key = {quoted}")["key"]))
            self.skip_blank()
            if not self.text.startswith(".", self.at):
                return keys
            self.at += 1

    def string(self) -> str:
        match = _STRING.match(self.text, self.at)
        if match is None:
            raise AssertionError(f"no string at {self.at}: the scanner has lost its way in a valid text")
        self.at = match.end()
        return match.group()

    def value(self, path: KeyPath) -> None:
        self.skip_blank()
        first = self.text[self.at]
        if first in "\"'":
            self.string()
        elif first == "[":
            self.array(path)
        elif first == "{":
            self.inline_table(path)
        else:
            match = _OTHER_VALUE.match(self.text, self.at)
            self.at = match.end() if match else self.at

    def array(self, path: KeyPath) -> None:
        self.at += 1
        position = 0
        while not self.closes("]"):
            self.note((*path, position), self.line())
            self.value((*path, position))
            position += 1

    def inline_table(self, path: KeyPath) -> None:
        self.at += 1
        while not self.closes("}"):
            self.pair(path)

    def closes(self, bracket: str) -> bool:
        """Skip blanks and one comma; True, and behind it, when `bracket` is next."""
        self.skip_blank()
        if self.text.startswith(",", self.at):
            self.at += 1
            self.skip_blank()
        if self.text.startswith(bracket, self.at):
            self.at += 1
            return True
        return False
