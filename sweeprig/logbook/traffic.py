"""traffic.log: every message to and from the instruments, for the day when something has to be understood.

A help, never a duty: it is not synced, it ends at its cap, and a failure to write it stops nothing.
"""

from __future__ import annotations

from contextlib import suppress
from pathlib import Path
from typing import TextIO

CAP_BYTES = 64_000_000
"""About one night of polling; the logbook itself has no cap."""

_BUFFER = 1 << 16
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
        self._shown: dict[bytes, str] = {}
        try:
            self._file = path.open("a", encoding="ascii", errors="backslashreplace", newline="\n", buffering=_BUFFER)
            self._left = cap_bytes - path.stat().st_size
        except OSError as error:
            self._give_up(str(error))

    def __call__(self, name: str, direction: str, data: bytes, at: float) -> None:
        """Note one message. Never raises; buffered until `flush`."""
        if self._file is None:
            return
        text = self._shown.get(data)
        if text is None:
            text = self._show(data)
        self.line(f"{at:.4f} {name} {direction} {text}\n")

    def _show(self, data: bytes) -> str:
        text = data.decode("latin-1")
        if not (text.isascii() and text.isprintable()) or "\\" in text:
            text = text.encode("unicode_escape").decode("ascii")
        if len(self._shown) < _REMEMBERED:
            self._shown[data] = text
        return text

    def line(self, line: str) -> None:
        """Write a finished line, or end with a note when the cap is reached."""
        if self._file is None:
            return
        self._left -= len(line)
        try:
            if self._left >= 0:
                self._file.write(line)
                return
            self._file.write(f"# the cap of {self.cap_bytes} bytes is reached: no more traffic is noted\n")
        except (OSError, ValueError) as error:
            self._give_up(str(error))
            return
        self._give_up("cap reached")

    def flush(self) -> None:
        """Hand what is buffered to the operating system; the logbook calls this after each commit."""
        if self._file is None:
            return
        try:
            self._file.flush()
        except (OSError, ValueError) as error:
            self._give_up(str(error))

    def close(self) -> None:
        """Never raises, may be called twice."""
        self._give_up(self.failed)

    def _give_up(self, why: str) -> None:
        file, self._file, self.failed = self._file, None, why
        if file is not None:
            with suppress(OSError, ValueError):
                file.close()
