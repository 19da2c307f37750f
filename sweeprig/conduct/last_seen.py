"""The file `last-seen` of a run: one line of JSON for watchdogs outside that look after many machines.

A sign, never a duty: what cannot be written is left, and the run goes on. Nothing in sweeprig decides by it.
"""

from __future__ import annotations

import json
import os
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from sweeprig.conduct.bounds import BOUNDS

_MOST_TEXT = 500


@dataclass(frozen=True, slots=True)
class Seen:
    """What a run said last: UTC seconds, the words of its state (`conduct.states`), and a sentence."""

    utc: float
    state: str
    text: str


class LastSeen:
    """Keeps the file at `path` fresh. `failed`: why the last attempt came to nothing, "" when it did not."""

    def __init__(self, path: Path, every_s: float | None = None) -> None:
        self.path = path
        self.failed = ""
        self._every_s = BOUNDS["last_seen_s"] if every_s is None else every_s
        self._last: tuple[str, float] | None = None

    def write(self, state_words: str, text: str, utc: float) -> None:
        """Replace the file, unless this state was written less than `last_seen_s` ago. Never raises.

        Not synced to the disk: it is read while the machine runs, and a sync would hold the caller up.
        """
        if self._last is not None and self._last[0] == state_words and 0.0 <= utc - self._last[1] < self._every_s:
            return
        self._last = state_words, utc  # also where it fails: a full disk is not asked again at once
        try:
            self._replace(line_of(Seen(utc, state_words, text)))
        except (OSError, ValueError, OverflowError) as error:
            self.failed = str(error) or type(error).__name__
        else:
            self.failed = ""

    def _replace(self, line: str) -> None:
        beside = self.path.with_name(f"{self.path.name}.{os.getpid()}.new")
        try:
            beside.write_text(line, "utf-8", newline="\n")
            beside.replace(self.path)
        except BaseException:
            beside.unlink(missing_ok=True)
            raise


def line_of(seen: Seen) -> str:
    """`{"state": …, "text": …, "utc": seconds, "at": "2026-03-02T18:00:00Z", "pid": …}` and a line end."""
    at = datetime.fromtimestamp(seen.utc, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    text = seen.text if len(seen.text) <= _MOST_TEXT else f"{seen.text[:_MOST_TEXT]} …"
    said = {"state": seen.state, "text": text, "utc": seen.utc, "at": at, "pid": os.getpid()}
    return json.dumps(said, allow_nan=False) + "\n"


def read(path: Path) -> Seen | None:
    """What stands in the file; None where there is none, or it is not one of ours."""
    try:
        data = json.loads(path.read_text("utf-8"))
        return Seen(float(data["utc"]), str(data["state"]), str(data["text"]))
    except (OSError, ValueError, KeyError, TypeError):
        return None
