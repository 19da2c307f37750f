"""All that `conduct.host` asks of the operating system, and the one dataclass through which it does so.

Fakes of `System` stand in tests for Windows, macOS and machines without a login manager. Nothing is decided here.
"""

from __future__ import annotations

import ctypes
import importlib
import os
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS

_MOST_LOOKED_AT = 1000
"""Files of a folder whose times are looked at."""


class Child(Protocol):
    """A process that was started: what is used of `subprocess.Popen`."""

    pid: int

    def poll(self) -> int | None: ...


@dataclass(frozen=True, slots=True)
class Facts:
    """Open descriptors and resident memory (bytes) of a process; None where the system does not tell."""

    descriptors: int | None
    rss_bytes: int | None


def process_facts(pid: int | None = None) -> Facts:
    """Of this process, or of another one of the same user (Linux only). Elsewhere: descriptors where /dev/fd is."""
    root = Path("/proc") / ("self" if pid is None else str(pid))
    descriptors = rss = None
    with suppress(OSError, ValueError, IndexError, AttributeError):
        own = 1 if pid in (None, os.getpid()) else 0  # the listing itself
        descriptors = len(os.listdir(root / "fd")) - own  # noqa: PTH208 - one descriptor, and at once
        rss = int((root / "statm").read_text("ascii").split()[1]) * os.sysconf("SC_PAGE_SIZE")
    if descriptors is None and pid is None:
        with suppress(OSError):
            descriptors = len(os.listdir("/dev/fd")) - 1  # noqa: PTH208
    return Facts(descriptors, rss)


@contextmanager
def spawned(command: list[str]) -> Iterator[Child]:
    """In a session of its own: Ctrl-C is ours alone, and nobody is asked for a password on the terminal."""
    null, pipe = subprocess.DEVNULL, subprocess.PIPE
    process = subprocess.Popen(command, stdin=pipe, stdout=null, stderr=null, start_new_session=True)
    try:
        yield process
    finally:
        if process.stdin is not None:
            process.stdin.close()  # the child reads to its end and ends; its inhibitor with it
        process.terminate()
        try:
            process.wait(BOUNDS["kill_s"])
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def asked(command: list[str]) -> tuple[int, str]:
    wide = {**os.environ, "COLUMNS": "400", "LC_ALL": "C"}  # lists are cut to the width of the terminal
    try:
        done = subprocess.run(
            command, env=wide, stdin=subprocess.DEVNULL, capture_output=True, timeout=BOUNDS["ask_s"], check=False
        )
    except (OSError, subprocess.TimeoutExpired) as error:
        return -1, f"{command[0]}: {type(error).__name__}"
    said = done.stdout if done.returncode == 0 else done.stdout + done.stderr
    return done.returncode, said.decode("utf-8", "replace")


def wait(seconds: float) -> None:
    clock = SystemClock()
    clock.wait(clock.now() + seconds)


def wakepy() -> AbstractContextManager[tuple[bool, str]] | None:
    try:
        keep = importlib.import_module("wakepy").keep
    except ImportError:
        return None

    @contextmanager
    def held() -> Iterator[tuple[bool, str]]:
        with keep.running(on_fail="pass") as mode:
            yield bool(mode.active), str(getattr(mode.method, "name", mode.method) or "wakepy")

    return held()


def execution_state(flags: int) -> int:
    call = ctypes.windll.kernel32.SetThreadExecutionState  # type: ignore[attr-defined,unused-ignore]  # Windows only
    call.argtypes, call.restype = [ctypes.c_uint], ctypes.c_uint
    return int(call(flags))


def may_write(folder: Path) -> str:
    """ "" after a file could be made, filled, and removed; else why not."""
    try:
        with tempfile.NamedTemporaryFile(dir=folder, prefix=".sweeprig-", buffering=0) as file:
            file.write(b"?")
    except OSError as error:
        return error.strerror or str(error)
    return ""


def newest(folder: Path) -> tuple[str, float] | None:
    found: list[tuple[float, str]] = []
    with suppress(OSError):
        for _, entry in zip(range(_MOST_LOOKED_AT), folder.iterdir(), strict=False):
            with suppress(OSError):
                found.append((entry.lstat().st_mtime, entry.name))
    return (max(found)[1], max(found)[0]) if found else None


def most_descriptors() -> int | None:
    try:
        import resource
    except ImportError:
        return None  # Windows
    soft, _ = resource.getrlimit(resource.RLIMIT_NOFILE)
    return None if soft == resource.RLIM_INFINITY else soft


@dataclass(frozen=True)
class System:
    """Every call to the operating system, exchangeable one by one.

    spawn            command → context of a child in a session of its own, whose standard input stays open meanwhile
    ask              command → (exit code, what it printed); (-1, reason) where it cannot be run or does not answer
    wakepy           → context that yields (active, by what), or None where the extra is not installed
    execution_state  Windows' SetThreadExecutionState: flags → flags before, 0 when it failed
    """

    platform: str = sys.platform
    pid: int = os.getpid()
    which: Callable[[str], str | None] = shutil.which
    spawn: Callable[[list[str]], AbstractContextManager[Child]] = spawned
    ask: Callable[[list[str]], tuple[int, str]] = asked
    wait: Callable[[float], None] = wait
    wakepy: Callable[[], AbstractContextManager[tuple[bool, str]] | None] = wakepy
    execution_state: Callable[[int], int] = execution_state
    utc: Callable[[], float] = SystemClock().utc
    free_bytes: Callable[[Path], int] = lambda folder: shutil.disk_usage(folder).free
    may_write: Callable[[Path], str] = may_write
    newest: Callable[[Path], tuple[str, float] | None] = newest
    most_descriptors: Callable[[], int | None] = most_descriptors
    open_descriptors: Callable[[], int | None] = lambda: process_facts().descriptors
    mounts: str | None = None


SYSTEM = System()
