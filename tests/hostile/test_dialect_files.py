"""A dialect file from a stranger: it is a table of texts, and none of them can say more than its command may.

What goes out to an instrument is looked at byte by byte by the tests themselves, not by the code under test.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from sweeprig_drivers.dialect import Dialect, Form

from sweeprig.dialects import LARGEST_FILE, find_dialect
from sweeprig.errors import ConfigError, SweeprigError

BOMBS = {
    "keys of thousands of parts": ".".join(["a"] * 20_000) + " = 1",
    "arrays in arrays": "zz = " + "[" * 30_000,
    "an integer of thousands of digits": "zz = " + "9" * 5_000,
    "an unclosed header": "[" * 60_000,
    "too large": "#" * (LARGEST_FILE + 1),
}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "dialects").mkdir()
    return tmp_path


@pytest.mark.parametrize("bomb", BOMBS.values(), ids=BOMBS)
def test_a_bomb_is_refused(folder: Path, bomb: str) -> None:
    """Each is a ConfigError of one sentence that names the file."""
    (folder / "dialects" / "mine.toml").write_text(bomb, "utf-8")
    with pytest.raises(ConfigError, match=r"mine\.toml") as caught:
        find_dialect("mine", folder)
    assert len(str(caught.value)) < 1_000


@pytest.mark.skipif(sys.platform != "linux", reason="address space is limited by a Linux call")
def test_a_file_of_a_gigabyte_is_not_read(folder: Path, limited: Callable[..., str]) -> None:
    """A file with a length of 1 GB (a sparse one) is refused in a process that may have 400 MB."""
    with (folder / "dialects" / "mine.toml").open("wb") as file:
        file.truncate(1_000_000_000)
    code = "from sweeprig.dialects import find_dialect; from pathlib import Path; find_dialect('mine', Path(given[0]))"
    assert "the dialect file is too large" in limited(400_000_000, code, folder)


@pytest.mark.skipif(sys.platform == "win32", reason="there are no such pipes")
def test_a_pipe_is_no_dialect(folder: Path) -> None:
    """A pipe under a dialect's name is not opened: the name is simply not known."""
    os.mkfifo(folder / "dialects" / "mine.toml")
    with pytest.raises(SweeprigError, match="no dialect has this name"):
        find_dialect("mine", folder)


@pytest.mark.parametrize("name", ["../secret", "..", "/etc/passwd", "a/b", "mine.toml", "\0", ""])
def test_a_name_is_no_path(folder: Path, name: str) -> None:
    """A dialect is found by a plain name in its folder and nowhere else, though a file of that path is there."""
    (folder / "secret.toml").write_text("kind = 'multimeter'", "utf-8")
    with pytest.raises(SweeprigError, match="no dialect has this name"):
        find_dialect(name, folder)


STRANGE = {
    "a huge integer": 10**5_000,
    "not a number": float("nan"),
    "infinity": float("inf"),
    "a long list": [[]] * 9_000,
    "a long text": "x" * 60_000,
    "tables": {"a": {}},
    "nothing": None,
}


@pytest.mark.parametrize("value", STRANGE.values(), ids=STRANGE)
@pytest.mark.parametrize("table", ["kind", "reply", "no_value", "commands", "values", "texts"])
def test_a_value_of_another_kind_is_refused_in_a_sentence(table: str, value: object) -> None:
    """Whatever stands where a text, a list or a table belongs is a ConfigError that a person can read."""
    whole: dict[str, object] = {"kind": "meter", "commands": {"read": "READ?"}, "values": {"v": 1}, "texts": {"t": "x"}}
    for spoilt in (whole | {table: value}, whole | {table: {"read": value, "v": value, "t": value}}):
        with pytest.raises(ConfigError, match="the dialect's") as caught:
            Dialect("meter", spoilt, "meter", {"read": Form(query=True)}, {"v": (0.0, 2.0)}, ("t",))
        assert len(str(caught.value)) < 500
        assert str(caught.value).isprintable()
