"""Job, rig, motor and sweep files from a stranger: bombs of every kind end as a ConfigError, soon, in little memory.

A file names others and is only data: nothing in it runs, and nothing it names is read without a bound.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import load
from sweeprig.job.toml_source import LARGEST_FILE, MOST_PLACES, parse
from sweeprig.logbook import run_folder

PARTS = {"job": "job.toml", "rig": "shelter-bench.toml", "motor": "aspirator-fan.toml", "sweep": "short.toml"}
BOMBS = {
    "arrays in arrays": "zz = " + "[" * 100_000 + "]" * 100_000,
    "tables in tables": "zz = " + "{a=" * 3_000 + "1" + "}" * 3_000,
    "a key of thousands of parts": ".".join(["a"] * 20_000) + " = 1",
    "quoted parts": ".".join(['"a b"', "'c'"] * 10_000) + " = 1",
    "a header of thousands of parts": "[" + " . ".join(["a"] * 20_000) + "]",
    "headers that share their parts": "\n".join("[" + ".".join(["a"] * length) + "]" for length in range(1, 900)),
    "keys by the ten thousand": "\n".join(f"k{number} = 1" for number in range(60_000)),
    "tables by the ten thousand": "\n".join(f"[t{number}]" for number in range(60_000)),
    "items by the hundred thousand": "zz = [" + "1," * 400_000 + "]",
    "an integer of thousands of digits": "zz = " + "9" * 5_000,
    "a hexadecimal integer without end": "zz = 0x" + "f" * 9_000,
    "a key of half a megabyte": "k" * 500_000 + " = 1",
    "a key that clears the screen": '"\\u001b[2J<script>" = 1',
    "a text of most of a megabyte": 'zz = "' + "x" * 900_000 + '"',
}


def spoil(file: Path, bomb: str) -> None:
    """Headers at the end, all else at the head, so that the file stays what it was besides."""
    text = file.read_text("utf-8")
    file.write_text(f"{text}\n{bomb}" if bomb.startswith("[") else f"{bomb}\n{text}", "utf-8")


@pytest.mark.parametrize("part", PARTS)
@pytest.mark.parametrize("bomb", BOMBS.values(), ids=BOMBS)
def test_a_bomb_is_refused_in_a_sentence(short_job: Path, part: str, bomb: str) -> None:
    """In each kind of file each bomb is a ConfigError of some hundred characters, without a control character."""
    spoil(short_job.with_name(PARTS[part]), bomb)
    with pytest.raises(ConfigError) as caught:
        load(short_job)
    text = str(caught.value)
    assert len(text) < 1_500
    assert text.isprintable()
    assert PARTS[part] in text


@pytest.mark.parametrize("value", ["0x" + "f" * 9_000, "9" * 5_000, "1e999", "nan", "-1", str(2**63)])
def test_a_number_that_is_none_is_refused_where_a_number_belongs(short_job: Path, value: str) -> None:
    """A seed of thousands of digits, in either notation, infinite or no number: a ConfigError at its line."""
    sweep = short_job.with_name(PARTS["sweep"])
    sweep.write_text(sweep.read_text("utf-8").replace("seed = 3", f"seed = {value}"), "utf-8")
    with pytest.raises(ConfigError, match=r"short\.toml") as caught:
        load(short_job)
    assert len(str(caught.value)) < 500


@pytest.mark.skipif(sys.platform != "linux", reason="address space is limited by a Linux call")
@pytest.mark.parametrize("bomb", ["quoted parts", "a header of thousands of parts", "items by the hundred thousand"])
def test_a_bomb_fills_no_memory(short_job: Path, limited: Callable[..., str], bomb: str) -> None:
    """In a process that may have 400 MB each is a ConfigError; without its bound the first takes some gigabytes."""
    spoil(short_job, BOMBS[bomb])
    assert limited(400_000_000, "from sweeprig.job import load; load(given[0])", short_job).startswith("ConfigError")


def test_the_bounds_leave_room(short_job: Path) -> None:
    """Just below the bounds on size and places a text is read, just above it is not."""
    assert len(parse("\n".join(f"k{number} = 1" for number in range(MOST_PLACES)), "f").data) == MOST_PLACES
    with pytest.raises(ConfigError, match="too much in this file"):
        parse("\n".join(f"k{number} = 1" for number in range(MOST_PLACES + 1)), "f")
    text = short_job.read_text("utf-8")
    short_job.write_text(text + "#" * (LARGEST_FILE - len(text.encode())), "utf-8")
    assert load(short_job).title == "short"
    short_job.write_text(text + "#" * (LARGEST_FILE + 1 - len(text.encode())), "utf-8")
    with pytest.raises(ConfigError, match="too large for a job file"):
        load(short_job)


@pytest.mark.skipif(sys.platform == "win32", reason="there are no such pipes and devices")
@pytest.mark.parametrize("named", ["pipe", "/dev/zero", "/dev/tty", "a\\u0000b", ".", "/proc/self/mem"])
def test_a_file_named_is_an_ordinary_one(short_job: Path, named: str) -> None:
    """A rig that is a pipe nobody writes to, a device without end, a folder or no name at all: refused at once."""
    os.mkfifo(short_job.with_name("pipe"))
    short_job.write_text(short_job.read_text("utf-8").replace("shelter-bench.toml", named), "utf-8")
    with pytest.raises(ConfigError, match="file"):
        load(short_job)


@pytest.mark.parametrize("name", ["../../evil", "/etc/passwd", "a\\u0000b", "..", "CON", "x" * 60, "\\u202eexe"])
def test_a_motors_name_leads_nowhere(short_job: Path, tmp_path: Path, name: str) -> None:
    """Whatever a motor is called, its run folder lies in the folder of runs, under a name of plain letters."""
    motor = short_job.with_name(PARTS["motor"])
    lines = [f'name = "{name}"' if line.startswith("name") else line for line in motor.read_text("utf-8").splitlines()]
    motor.write_text("\n".join(lines), "utf-8")
    try:
        called = load(short_job).motor.name
    except ConfigError:
        called = name
    runs = tmp_path / "runs"
    folder = run_folder.create_run_folder(runs, called, 1_772_470_800.0, "")
    assert folder.parent == runs
    assert folder.resolve().parent == runs.resolve()
    assert set(folder.name) <= set("abcdefghijklmnopqrstuvwxyz0123456789-")


def test_a_job_is_data(short_job: Path, tmp_path: Path) -> None:
    """Names of modules, templates and shell commands in every text field of a job run nothing: no file appears."""
    mark = tmp_path / "ran"
    for payload in (
        f"__import__('os').mknod('{mark}')",
        f"{{{{ cycler.__init__.__globals__.os.mknod('{mark}') }}}}",
        f"$(touch {mark})",
    ):
        rig = short_job.with_name(PARTS["rig"])
        kept = rig.read_text("utf-8")
        rig.write_text(kept.replace('adapter = "board"', f'adapter = "{payload}"'), "utf-8")
        short_job.write_text(
            f'title = "{payload}"\n' + "\n".join(short_job.read_text("utf-8").splitlines()[1:]), "utf-8"
        )
        with suppress(ConfigError):
            load(short_job)
        rig.write_text(kept, "utf-8")
    assert not mark.exists()
