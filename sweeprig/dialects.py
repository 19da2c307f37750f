"""Finding a dialect by its name and reading its file. What must stand in it, the adapter that uses it checks.

A user's own lie in `dialects/` beside the rig file; installed packages name theirs in the entry-point group
`sweeprig.dialects`. A name that is there twice is an error: nothing replaces anything silently.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterable, Iterator
from importlib.metadata import EntryPoint, entry_points
from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path

from sweeprig.errors import ConfigError, UnknownAdapter, Where

GROUP = "sweeprig.dialects"
LARGEST_FILE = 65_536
MOST_PARTS = 32
"""Parts of one dotted key: each is a table within the last one, and thousands of them are no dialect but a bomb."""
_NAME = re.compile(r"[a-z0-9]+(?:-[a-z0-9]+)*")
_PART = r"(?:[A-Za-z0-9_-]++|\"[^\"\n]*+\"|'[^'\n]*+')"
_LONG_KEY = re.compile(rf"(?<![A-Za-z0-9_.-]){_PART}(?:[ \t]*+\.[ \t]*+{_PART}){{{MOST_PARTS}}}")


def find_dialect(name: str, beside: Path | None, entries: Iterable[EntryPoint] | None = None) -> dict[str, object]:
    """The table of the dialect `name`.

    beside   folder of the rig file; its `dialects/` is looked into, if it is there
    entries  the installed packages' entry points (for tests; the installed ones otherwise). Each names a package
             whose folder holds the files, or that has a folder `dialects` with them

    Raises UnknownAdapter, listing the known ones, when there is none; ConfigError when there are two of that name, or
    when the file cannot be read.
    """
    folders, broken = _folders(beside, entry_points(group=GROUP) if entries is None else entries)
    found = [(place, file) for place, folder in folders for file in _dialects_in(folder) if _name_of(file) == name]
    if not found:
        raise _unknown(name, folders, broken)
    if len(found) > 1:
        raise ConfigError(
            f"the dialect '{name}' is there more than once",
            value=", ".join(place for place, _ in found),
            allowed="each name once",
            remedy="rename one of the files",
            topic="dialects",
        )
    place, file = found[0]
    return _load(f"{place}/{file.name}", file)


def known_dialects(beside: Path | None, entries: Iterable[EntryPoint] | None = None) -> dict[str, str]:
    """Name → where it lies, for every dialect that can be found; of two with one name the later is shown."""
    folders, _ = _folders(beside, entry_points(group=GROUP) if entries is None else entries)
    return {_name_of(file): place for place, folder in folders for file in _dialects_in(folder)}


def _folders(
    beside: Path | None, entries: Iterable[EntryPoint]
) -> tuple[list[tuple[str, Traversable]], list[tuple[str, str]]]:
    """Folders to look into, in order, each with the text that names it; and packages that cannot be imported, why."""
    folders: list[tuple[str, Traversable]] = []
    broken: list[tuple[str, str]] = []
    if beside is not None and (beside / "dialects").is_dir():
        folders.append((str(beside / "dialects"), beside / "dialects"))
    for package in sorted({entry.value for entry in entries}):
        try:
            folder = files(package)
        except Exception as fault:  # noqa: BLE001 - importing a stranger's package may raise anything; it is reported
            broken.append((package, f"{type(fault).__name__}: {fault}"))
            continue
        folders.append((package, folder))
        inner = folder.joinpath("dialects")
        if inner.is_dir():
            folders.append((f"{package}/dialects", inner))
    return folders, broken


def _dialects_in(folder: Traversable) -> Iterator[Traversable]:
    files_here = [file for file in folder.iterdir() if file.is_file()]
    for file in sorted(files_here, key=lambda each: each.name):
        if file.name.endswith(".toml") and _NAME.fullmatch(_name_of(file)):
            yield file


def _name_of(file: Traversable) -> str:
    return file.name.removesuffix(".toml")


def _unknown(name: str, folders: list[tuple[str, Traversable]], broken: list[tuple[str, str]]) -> UnknownAdapter:
    known = sorted({_name_of(file) for _, folder in folders for file in _dialects_in(folder)})
    remedy = f"write dialects/{name}.toml beside the rig file, or correct the name"
    if not _NAME.fullmatch(name):
        remedy = "correct the name: small letters, digits and single hyphens"
    for package, why in broken:
        remedy += f"; {package} could not be imported ({why})"
    return UnknownAdapter(
        "no dialect has this name",
        value=repr(name),
        allowed=", ".join(known) or "none is installed",
        remedy=remedy,
        topic="dialects",
    )


def _load(place: str, file: Traversable) -> dict[str, object]:
    with file.open("rb") as stream:
        data = stream.read(LARGEST_FILE + 1)
    if len(data) > LARGEST_FILE:
        raise ConfigError(
            "the dialect file is too large",
            value=f"more than {LARGEST_FILE} bytes",
            allowed=f"up to {LARGEST_FILE} bytes",
            where=Where(place),
            remedy="name the right file",
            topic="dialects",
        )
    try:
        text = data.decode("utf-8")
        if _LONG_KEY.search(text):
            raise ValueError(f"a key has more than {MOST_PARTS} parts")
        return tomllib.loads(text)
    except (ValueError, RecursionError) as fault:  # no TOML, no UTF-8, an integer too long, nested too deeply
        raise ConfigError(
            "the dialect file is not TOML",
            value=str(fault),
            where=Where(place, _line_of(fault, data)),
            remedy="correct the file",
            topic="dialects",
        ) from fault


def _line_of(fault: Exception, data: bytes) -> int | None:
    """The line that the TOML reader names in its text; None where it names none."""
    if "at end of document" in str(fault):
        return data.rstrip(b"\n").count(b"\n") + 1
    line = re.search(r"at line (\d+)", str(fault))
    return int(line.group(1)) if line else None
