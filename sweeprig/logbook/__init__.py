"""One SQLite file a run, and the folder it lies in. `Logbook` writes, `Reader` reads; nobody else opens the file."""

from __future__ import annotations

from sweeprig.logbook.logbook import Logbook
from sweeprig.logbook.read import Reader
from sweeprig.logbook.run_folder import FolderLock, create_run_folder
from sweeprig.logbook.traffic import TrafficLog
from sweeprig.logbook.values import Event, InstrumentSeen, Intent, Session

__all__ = [
    "Event",
    "FolderLock",
    "InstrumentSeen",
    "Intent",
    "Logbook",
    "Reader",
    "Session",
    "TrafficLog",
    "create_run_folder",
]
