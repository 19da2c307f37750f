"""One rig, one run: an operating system's lock for each instrument address, which ends with its process.

Two parts of an address can be held: `command` by whoever decides about the rig (a supervisor, `sweeprig off`), and
`link` by the one process that has the instrument open. Both name their holder. Locks lie in a folder of this machine,
so that two people, two folders and two job files that name the same instrument meet.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
import socket
import tempfile
from collections.abc import Iterable
from contextlib import suppress
from dataclasses import dataclass, replace
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.errors import RigInUse

if TYPE_CHECKING:
    from filelock import BaseFileLock

COMMAND, LINK = "command", "link"
FOLDER = "SWEEPRIG_LOCKS"
"""Environment variable that names another folder for the locks; every user of a bench must then have the same."""


@dataclass(frozen=True, slots=True)
class Holder:
    """Who has a lock: process, its machine, what it is doing, and the run folder where it works on one."""

    pid: int
    host: str
    what: str
    run: str = ""

    def __str__(self) -> str:
        return f"process {self.pid} on {self.host}, {self.what}{f' {self.run}' if self.run else ''}"


class AddressLock:
    """One part of one address: had at once, or RigInUse with the holder; it ends with its process at the latest."""

    def __init__(self, address: str, part: str, what: str, run: str = "", folder: Path | None = None) -> None:
        self.address, self.part = address, part
        place = folder or lock_folder()
        name = f"{hashlib.sha256(canonical(address).encode()).hexdigest()[:24]}.{part}"
        self._path, self._holder = place / f"{name}.lock", place / f"{name}.holder"
        self._me = Holder(os.getpid(), socket.gethostname(), what, run)
        self._lock: BaseFileLock | None = None

    def acquire(self) -> AddressLock:
        from filelock import FileLock, Timeout  # slow to import, and most commands lock nothing

        lock = FileLock(self._path, thread_local=False, mode=0o666)
        try:
            lock.acquire(blocking=False)
        except Timeout as error:
            raise self._in_use() from error
        except OSError as error:
            raise RigInUse(
                "the lock of an instrument cannot be taken",
                value=f"{self.address} ({error.strerror or error})",
                remedy=f"See that you may write in {self._path.parent}",
                topic="unattended",
            ) from error
        self._say_who()
        self._lock = lock
        return self

    def release(self) -> None:
        lock, self._lock = self._lock, None
        if lock is not None:
            with suppress(OSError):
                self._holder.unlink(missing_ok=True)
            lock.release()

    def works_on(self, run: Path) -> None:
        """From now on the holder names this run folder too: that is where requests are left."""
        self._me = replace(self._me, run=str(run.absolute()))
        if self._lock is not None:
            self._say_who()

    def _say_who(self) -> None:
        with suppress(OSError):  # the lock itself is what counts; the name is for people
            text = json.dumps({slot: getattr(self._me, slot) for slot in Holder.__slots__})
            beside = self._holder.with_suffix(".new")
            beside.write_text(text, "utf-8")
            beside.chmod(0o666)
            beside.replace(self._holder)

    def holder(self) -> Holder | None:
        """What the holder said of itself; None where it has not said anything that can be true: all users may write
        here, and a number that means "every process" must never get as far as being killed."""
        try:
            said = Holder(**json.loads(self._holder.read_text("utf-8")))
        except (OSError, ValueError, TypeError, RecursionError):
            return None
        words = isinstance(said.host, str) and isinstance(said.what, str) and isinstance(said.run, str)
        return said if words and type(said.pid) is int and said.pid > 1 else None

    def _in_use(self) -> RigInUse:
        holder, clock = self.holder(), SystemClock()
        until = clock.now() + BOUNDS["holder_s"]
        while (holder is None or not _lives(holder)) and clock.now() < until:
            clock.wait(clock.now() + BOUNDS["look_s"])  # who has just taken it has not yet said so
            holder = self.holder()
        error = RigInUse(
            "an instrument of this rig is in use",
            value=f"{self.address}, by {holder or 'another process'}",
            remedy="Wait until it has ended, or order it off: `sweeprig off RIG`, and with --take-over by force",
            topic="unattended",
        )
        error.holder = holder
        return error


def _lives(holder: Holder) -> bool:
    """False only for a process of this machine that is known to be gone: its name was left behind."""
    if os.name != "posix" or holder.host != socket.gethostname():
        return True
    try:
        os.kill(holder.pid, 0)
    except ProcessLookupError:
        return False
    except (OSError, OverflowError, TypeError):
        return True
    return True


class RigLock:
    """The same part of several addresses, all or none. A context manager; `simbench:` addresses need no lock."""

    def __init__(self, addresses: Iterable[str], part: str, what: str, run: str = "") -> None:
        real = sorted({address for address in addresses if not address.startswith("simbench:")})
        self._locks = [AddressLock(address, part, what, run) for address in real]

    def acquire(self) -> RigLock:
        try:
            for lock in self._locks:
                lock.acquire()
        except BaseException:
            self.release()
            raise
        return self

    def release(self) -> None:
        for lock in self._locks:
            lock.release()

    def works_on(self, run: Path) -> None:
        for lock in self._locks:
            lock.works_on(run)

    def nobody_has(self, part: str) -> None:
        """RigInUse where somebody has another part of any of the addresses at this moment: a runner, say, that lost
        its supervisor and is still switching off."""
        with RigLock((lock.address for lock in self._locks), part, "looks"):
            pass

    def held_by(self) -> set[Holder | None]:
        """Who holds any of it at this moment; None stands for one that has not said. A name alone says nothing: what a
        dead process left behind may by now be the number of another, so each lock is tried."""
        found: set[Holder | None] = set()
        for lock in self._locks:
            try:
                lock.acquire().release()
            except RigInUse:
                found.add(lock.holder())
        return found

    def __enter__(self) -> RigLock:
        return self.acquire()

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, tb: TracebackType | None) -> None:
        self.release()


def canonical(address: str) -> str:
    """The same text for the same instrument: letter case, board number, a loopback's names, links to a serial port."""
    address = address.strip()
    if address.lower().startswith("serial:"):
        port = address.partition(":")[2].partition("?")[0]
        return f"serial:{os.path.realpath(port)}"
    plain = re.sub(r"^(tcpip|usb|gpib)0?(?=::)", r"\1", address.lower())
    return plain.replace("::localhost::", "::127.0.0.1::")


def lock_folder() -> Path:
    """Made on first use, for all users of the machine."""
    folder = Path(os.environ.get(FOLDER) or Path(tempfile.gettempdir()) / "sweeprig-locks")
    if not folder.is_dir():
        folder.mkdir(parents=True, exist_ok=True)
        with suppress(OSError):
            folder.chmod(0o1777)
    return folder
