"""The line index: texts written with their lines counted while writing, against the scanner that only reads.

The writer below shares no code with the scanner: it is the independent method.
"""

from __future__ import annotations

import json
import re
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from sweeprig.errors import ConfigError
from sweeprig.job.toml_source import dotted, parse

Path = tuple[str | int, ...]

KEYS = st.one_of(
    st.from_regex(r"[A-Za-z0-9_-]{1,6}", fullmatch=True), st.text("ab .\"'#=[]{},é\\\t", min_size=1, max_size=5)
)
TEXTS = st.text("xy \"'#=[]{},\\\n\té", max_size=8)
SCALARS = st.one_of(st.integers(-99, 99), st.booleans(), TEXTS)
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(KEYS, inner, max_size=3)),
    max_leaves=6,
)
TABLES = st.recursive(
    st.dictionaries(KEYS, VALUES, max_size=3),
    lambda inner: st.dictionaries(KEYS, st.one_of(VALUES, inner, st.lists(inner, min_size=1, max_size=2)), max_size=3),
    max_leaves=6,
)


class Writer:
    """Writes TOML in many styles and notes on which line each key and item begins."""

    def __init__(self, draw: Any) -> None:
        self.draw = draw
        self.text = ""
        self.lines: dict[Path, int] = {}

    def put(self, text: str) -> None:
        self.text += text

    def here(self, path: Path) -> None:
        self.lines.setdefault(path, 1 + self.text.count("\n"))

    def one_of(self, *choices: str) -> str:
        chosen: str = self.draw(st.sampled_from(choices))
        return chosen

    def key(self, key: str) -> str:
        if re.fullmatch("[A-Za-z0-9_-]+", key):
            return self.one_of(key, f'"{key}"', f"'{key}'")
        return json.dumps(key, ensure_ascii=False)

    def table(self, path: Path, table: dict[str, Any], names: list[str]) -> None:
        """Plain values first, then the tables under their own headers."""
        later = []
        for key, value in table.items():
            kind = self.one_of("inline", "header") if isinstance(value, dict) else "inline"
            if isinstance(value, list) and value and all(isinstance(entry, dict) for entry in value):
                kind = self.one_of("inline", "headers")
            if kind == "inline":
                self.put(self.one_of("", "\n", "# [no] = {table}\n", "  ", "\t"))
                self.pair(path, key, value)
                self.put(self.one_of("\n", ' # "note\n', "\n\n"))
            else:
                later.append((key, value))
        for key, value in later:
            written, members = self.key(key), value if isinstance(value, list) else [value]
            for position, member in enumerate(members):
                many = isinstance(value, list)
                self.put(self.one_of("", "\n", "# - \n"))
                self.here((*path, key))
                inner: Path = (*path, key, position) if many else (*path, key)
                self.here(inner)
                header = self.one_of(".", " . ", ".").join([*names, written])
                self.put(f"[[ {header} ]]\n" if many else f"[{header}] # x\n")
                self.table(inner, member, [*names, written])

    def pair(self, path: Path, key: str, value: Any) -> None:
        self.here((*path, key))
        if isinstance(value, dict) and len(value) == 1 and self.draw(st.booleans()):
            self.put(self.key(key) + self.one_of(".", " . "))
            ((inner, held),) = value.items()
            self.pair((*path, key), inner, held)
        else:
            self.put(self.key(key) + self.one_of("=", " = ", "\t=\t"))
            self.value((*path, key), value)

    def value(self, path: Path, value: Any) -> None:
        if isinstance(value, str):
            self.string(value)
        elif isinstance(value, list):
            self.put("[")
            for position, entry in enumerate(value):
                self.put(self.one_of("", " ", "\n", " # ]\n\n"))
                self.here((*path, position))
                self.value((*path, position), entry)
                self.put(
                    self.one_of(",", " ,", "\n,", ",\n") if position < len(value) - 1 else self.one_of("", ",", "\n")
                )
            self.put("]")
        elif isinstance(value, dict):
            self.put("{ ")
            for position, (key, entry) in enumerate(value.items()):
                self.put(", " if position else "")
                self.pair(path, key, entry)
            self.put(" }")
        else:
            self.put(json.dumps(value))

    def string(self, value: str) -> None:
        escaped = json.dumps(value, ensure_ascii=False)
        multi = escaped[1:-1].replace("\\n", "\n") if "\\" not in value else escaped[1:-1]
        choices = [escaped, f'"""\n{multi}"""']
        if not value.startswith("\n"):  # the first line break after the quotes does not count
            choices.append(f'"""{multi}"""')
        if value.strip() == value:  # a backslash at a line's end swallows the blanks that follow
            choices.append(f'"""\\\n   {escaped[1:-1]}"""')
        if "'" not in value and "\n" not in value:
            choices.append(f"'{value}'")
        if "'''" not in value:
            choices.append(f"'''\n{value}'''")
        self.put(self.one_of(*choices))


@given(table=TABLES, data=st.data())
@settings(max_examples=100, deadline=None, suppress_health_check=[HealthCheck.too_slow])  # a busy machine is no error
def test_every_key_and_item_is_found_on_its_line(table: dict[str, Any], data: st.DataObject) -> None:
    """Any table, written in any style: the same data, and for every key and item the line it was written on."""
    writer = Writer(data.draw)
    writer.table((), table, [])
    source = parse(writer.text, "made.toml")
    assert source.data == table
    assert source.lines == writer.lines


SHAPES = """\
# comment
title = "x"

a.b.c = 1
a.b.d = [
  1, # one
  { e = 2, f = [3,
    4] },
]
[t.u]           # names t too
"quoted key" = '''
]] [not.a.table]
'''''
v = 1979-05-27 07:32:00
[t]
w = \"\"\"\\"\"\"\"\"
[[list]]
n = 1
[list.inner]
m = 2
[[list]]
[list.inner]
m = 3
"""


@pytest.mark.parametrize(
    ("path", "line"),
    [
        (("title",), 2), (("a",), 4), (("a", "b", "c"), 4), (("a", "b", "d"), 5), (("a", "b", "d", 0), 6),
        (("a", "b", "d", 1), 7), (("a", "b", "d", 1, "e"), 7), (("a", "b", "d", 1, "f", 0), 7),
        (("a", "b", "d", 1, "f", 1), 8), (("t",), 15), (("t", "u"), 10), (("t", "u", "quoted key"), 11),
        (("t", "u", "v"), 14), (("t", "w"), 16), (("list",), 17), (("list", 0), 17), (("list", 0, "n"), 18),
        (("list", 0, "inner", "m"), 20), (("list", 1), 21), (("list", 1, "inner"), 22), (("list", 1, "inner", "m"), 23),
    ],
)  # fmt: skip
def test_shapes_of_toml(path: Path, line: int) -> None:
    """Dotted keys, tables, arrays of tables, inline tables, multi-line arrays and strings; lines counted by hand."""
    assert parse(SHAPES, "shapes.toml").lines[path] == line


def test_place_of_what_is_not_written_is_that_of_its_table() -> None:
    """A key that is missing is looked for where its table stands; at the top of the file there is no such line."""
    source = parse(SHAPES, "shapes.toml")
    assert source.line(("t", "u", "missing", "deep")) == 10
    assert source.line(("nowhere",)) is None
    assert str(source.where(("t", "u", "quoted key"))) == 'shapes.toml:11, t.u."quoted key"'


@pytest.mark.parametrize(
    ("path", "text"),
    [
        (("duty", "high"), "duty.high"), (("pwm", 1), "pwm, item 2"), (("a", 0, "b"), "a, item 1.b"),
        (("two words",), '"two words"'), (("a", "\x1b[2J"), 'a."\\x1b[2J"'), ((), ""),
    ],
)  # fmt: skip
def test_paths_are_shown_as_dotted_keys(path: Path, text: str) -> None:
    """Keys that need quotes get them, control characters are escaped, items count from one."""
    assert dotted(path) == text


@given(st.text(max_size=40))
@settings(max_examples=150, deadline=None)
def test_any_text_is_parsed_or_refused(text: str) -> None:
    """No text whatever gives anything but data or a ConfigError with the file's name."""
    try:
        said = str(parse(text, "any.toml").file)
    except ConfigError as error:
        said = str(error)
    assert said.startswith("any.toml")
