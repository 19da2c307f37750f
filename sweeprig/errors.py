"""Every error that sweeprig raises on purpose.

    SweeprigError
    ├── ConfigError                 a file, a value or a command is wrong; nothing was started     exit 2
    │   ├── UnknownAdapter          no adapter (or dialect, link kind) of that name
    │   ├── MissingPackage          it is known, but its package cannot be imported
    │   └── RoleMissing             the sweep needs what the rig does not offer
    ├── RigError                    the rig did not do as it was told; nothing is lost              exit 3
    │   ├── LinkError
    │   │   ├── LinkTimeout         no whole reply by the deadline          (also TimeoutError)
    │   │   ├── LinkLost            the peer closed, vanished or refused    (also ConnectionError)
    │   │   ├── LinkGarbled         bytes came that are no reply
    │   │   └── LinkMisuse          the caller broke the link's contract
    │   ├── InstrumentRefused       an error in its queue, or the read-back differs from the set
    │   ├── WrongInstrument         another one answers than the saved run had
    │   ├── OffNotProved            the drive was told to be off and could not be shown to be
    │   └── RigInUse                another process has an instrument of the rig; `holder` says which
    ├── RunError                    a run folder cannot be used                                     exit 3
    │   ├── RunInUse                another process holds it
    │   └── DiskFull                the logbook could not be written            (also OSError)
    ├── Tripped                     protection switched the drive off                               exit 4
    └── Interrupted                 a person asked to stop; the run can be resumed                  exit 5

Anything else that escapes is our own fault: exit 70, traceback kept.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Where:
    """A place in a file that a person can open: path, line (from 1), dotted key."""

    file: str
    line: int | None = None
    key: str | None = None

    def __str__(self) -> str:
        place = self.file if self.line is None else f"{self.file}:{self.line}"
        return place if self.key is None else f"{place}, {self.key}"


class SweeprigError(Exception):
    """Base of all. Its text says what is wrong; `remedy` what to do; `topic` names a manual page.

    `run`: the folder of the run that it ended, where there is one that can be resumed.
    """

    exit_code = 70

    def __init__(
        self,
        what: str,
        *,
        value: str | None = None,
        allowed: str | None = None,
        where: Where | None = None,
        remedy: str | None = None,
        topic: str | None = None,
    ) -> None:
        super().__init__(what)
        self.what = what
        self.value = value
        self.allowed = allowed
        self.where = where
        self.remedy = remedy
        self.topic = topic
        self.run: str | None = None

    def __str__(self) -> str:
        """`file:line, key: what: value (allowed: …). Remedy (manual: topic)`, leaving out what is not known."""
        text = "" if self.where is None else f"{self.where}: "
        text += self.what
        if self.value is not None:
            text += f": {self.value}"
        if self.allowed is not None:
            text += f" (allowed: {self.allowed})"
        if self.remedy is not None:
            text += f". {self.remedy}"
        if self.topic is not None:
            text += f" (sweeprig manual {self.topic})"
        return text


class ConfigError(SweeprigError):
    exit_code = 2


class UnknownAdapter(ConfigError):
    pass


class MissingPackage(ConfigError):
    pass


class RoleMissing(ConfigError):
    pass


class RigError(SweeprigError):
    exit_code = 3


class LinkError(RigError):
    """`partial` keeps the bytes that had come when it failed: they go to the record, never to a reading."""

    def __init__(self, what: str, *, partial: bytes = b"", remedy: str | None = None) -> None:
        super().__init__(what, remedy=remedy, topic="links")
        self.partial = partial


class LinkTimeout(LinkError, TimeoutError):
    pass


class LinkLost(LinkError, ConnectionError):
    pass


class LinkGarbled(LinkError):
    pass


class LinkMisuse(LinkError):
    exit_code = 70


class InstrumentRefused(RigError):
    pass


class WrongInstrument(RigError):
    pass


class OffNotProved(RigError):
    pass


class RigInUse(RigError):
    holder: object = None
    """What is known of the process that has it (`conduct.locks.Holder`)."""


class RunError(SweeprigError):
    exit_code = 3


class RunInUse(RunError):
    pass


class DiskFull(RunError, OSError):
    pass


class Tripped(SweeprigError):
    exit_code = 4


class Interrupted(SweeprigError):
    exit_code = 5
