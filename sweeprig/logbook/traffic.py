"""traffic.log: every message to and from the instruments, for the day when something has to be understood.

A help, never a duty: it is not synced, it ends at its cap, and a failure to write it stops nothing.
"""

from __future__ import annotations

import math
from contextlib import suppress
from pathlib import Path
from typing import TextIO

CAP_BYTES = 64_000_000
"""About one night of polling; the logbook itself has no cap."""

_MOST_WAITING = 1 << 10
"""Messages that wait in memory; more are handed to the operating system between two commits."""

_NEAR_CAP_BYTES = 1 << 20
"""So near to the cap each message is written at once, so that the end is where it belongs."""

_REMEMBERED = 1 << 8
"""Messages whose text is kept: what is asked is nearly always asked again."""


class TrafficLog:
    """A callable for `together(traffic=…)`. Lines `at name direction text`, appended; `failed` says why it ended.

    at in s of the run clock; text is the bytes as ASCII, everything else as backslash escapes.
    """

    def __init__(self, path: Path, cap_bytes: int = CAP_BYTES) -> None:
        self.path = path
        self.cap_bytes = cap_bytes
        self.failed = ""
        self._file: TextIO | None = None
        self._left = 0
        self._waiting: list[tuple[str, str, bytes, float]] = []
        self._shown: dict[bytes, str] = {}
        try:
            if path.is_symlink() or path.is_fifo():
                raise OSError("it is a link or a pipe, and no log of this run")
            self._file = path.open("a", encoding="ascii", errors="backslashreplace", newline="\n")
            self._left = cap_bytes - path.stat().st_size
        except OSError as error:
            self._give_up(str(error))

    def __call__(self, name: str, direction: str, data: bytes, at: float) -> None:
        """Note one message. Never raises; kept until `flush`, so that noting it costs next to nothing."""
        if self._file is not None:
            waiting = self._waiting
            waiting.append((name, direction, data, at))
            if len(waiting) >= _MOST_WAITING or self._left < _NEAR_CAP_BYTES:
                self._write()

    def _write(self) -> None:
        """What waits goes to the file's buffer, up to the cap."""
        file, waiting, self._waiting = self._file, self._waiting, []
        if file is None:
            return
        text = self._lines(waiting)
        if len(text) > self._left:
            text = text[: text.rfind("\n", 0, max(self._left, 0)) + 1]
            text += f"# the cap of {self.cap_bytes} bytes is reached: no more traffic is noted\n"
            self._left = -1
        self._left -= len(text)
        try:
            file.write(text)
        except (OSError, ValueError) as error:
            self._give_up(str(error))
        if self._left < 0 and self._file is not None:
            self._give_up("cap reached")

    def _lines(self, messages: list[tuple[str, str, bytes, float]]) -> str:
        known, last, stamp, lines = self._shown, math.nan, "", []
        for name, direction, data, at in messages:
            if at != last:  # an answer and the ask that follows it have one time
                last, stamp = at, f"{at:.4f}"
            text = known.get(data) or self._show(data)
            lines.append(f"{stamp} {name} {direction} {text}\n")
        return "".join(lines)

    def _show(self, data: bytes) -> str:
        text = data.decode("latin-1")
        if not text.isprintable() or not text.isascii() or "\\" in text:
            text = text.encode("unicode_escape").decode("ascii")
        if len(self._shown) < _REMEMBERED:
            self._shown[data] = text
        return text

    def flush(self) -> None:
        """Hand what is kept to the operating system; the logbook calls this after each commit."""
        self._write()
        if self._file is None:
            return
        try:
            self._file.flush()
        except (OSError, ValueError) as error:
            self._give_up(str(error))

    def close(self) -> None:
        """Never raises, may be called twice."""
        self.flush()
        self._give_up(self.failed)

    def _give_up(self, why: str) -> None:
        file, self._file, self.failed = self._file, None, why
        if file is not None:
            with suppress(OSError, ValueError):
                file.close()
