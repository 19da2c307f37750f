"""What people ask of a run from another terminal: small files in the run's `requests/`, renamed into place.

Only the processes that work on the run read them, and remove each once it is carried out: a file that has gone is the
answer. `off` has one more step: its file is renamed once drive and supply have confirmed, and goes once off is proved,
for a rotor takes its time to come to rest. Whoever asks never touches the logbook.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.states import Orders
from sweeprig.errors import RunError, Where
from sweeprig.logbook.run_folder import REQUESTS, fresh_file

KINDS = ("ready", "pause", "stop", "off")
CONFIRMED = "off.confirmed"
"""The request `off` once drive and supply have confirmed that they are off; the proof is still to come."""


def ask(run: Path, kind: str) -> Path:
    """Leave a request; the file of it, which goes when it was carried out. RunError where the folder has no place."""
    if kind not in KINDS:
        raise ValueError(kind)
    folder = run / REQUESTS
    if not folder.is_dir() or folder.is_symlink():
        raise RunError(
            "this is no folder of a run: it has no place for requests", where=Where(str(run)), remedy="Name the run"
        )
    beside, file = folder / f"{kind}.{os.getpid()}.new", folder / kind
    try:
        with fresh_file(beside):
            pass
        beside.replace(file)
    except OSError as error:
        remedy = "Ask as a user who may write in the run's folder"
        raise RunError(
            "the request cannot be left", value=error.strerror, where=Where(str(folder)), remedy=remedy
        ) from error
    return file


class Requests:
    """The reader's side: `look` often, at next to no cost; what is found sets a flag of `orders`."""

    def __init__(
        self, run: Path, orders: Orders, now: Callable[[], float] | None = None, kinds: tuple[str, ...] = KINDS
    ) -> None:
        self._folder, self.orders, self._kinds = run / REQUESTS, orders, kinds
        self._now = now or SystemClock().now
        self._due = 0.0
        self._taken: set[str] = set()
        self._confirmed = False

    def clear(self) -> list[str]:
        """Forget requests that were left when nobody worked on the run; which they were. Only for who has the run's
        lock and is not yet named as its holder: later it would answer a request that nobody has carried out."""
        self._remove(CONFIRMED)
        return [kind for kind in KINDS if self._remove(kind)]

    def look(self) -> None:
        now = self._now()
        if now < self._due:
            return
        self._due = now + BOUNDS["requests_s"]
        if self._folder.is_symlink():
            return  # nothing is read or removed somewhere else
        try:
            names = {entry.name for entry in self._folder.iterdir()}
        except OSError:
            return  # a request that cannot be read was not made; the run itself goes on
        for kind in self._kinds:
            if kind in names and kind not in self._taken:
                self._taken.add(kind)
                self._set(kind)

    def _set(self, kind: str) -> None:
        if kind == "stop":
            self.orders.finish = True
        else:
            setattr(self.orders, kind, True)

    def off_confirmed(self) -> None:
        """Answer to `off`, where it was asked: drive and supply have confirmed."""
        if "off" in self._taken and not self._confirmed:
            self._confirmed = True
            with suppress(OSError):
                (self._folder / "off").replace(self._folder / CONFIRMED)

    def carried_out(self, *kinds: str) -> None:
        """Answer: those of `kinds` that were asked are done."""
        for kind in kinds:
            if kind in self._taken:
                self._taken.discard(kind)
                self._remove(kind)
                if kind == "off":
                    self._confirmed = False
                    self._remove(CONFIRMED)

    def _remove(self, kind: str) -> bool:
        if self._folder.is_symlink():
            return False
        file = self._folder / kind
        with suppress(OSError):
            file.unlink()
            return True
        return False
