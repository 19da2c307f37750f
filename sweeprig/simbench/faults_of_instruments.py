"""Faults of the instrument itself: restarts, too slow, completion that lies, settings cut or ignored, errors that stay.

Each acts when a message reaches the instrument.
"""

from __future__ import annotations

import re
from typing import Protocol, runtime_checkable

from sweeprig.errors import ConfigError
from sweeprig.simbench.board import crc8
from sweeprig.simbench.faulty_port import Fault

_SETTING = re.compile(rb"(?P<head>\S+\s+)(?P<number>[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?)(?P<rest>.*)")
PART_LEFT = 0.9
STANDING = (-240, "standing")
MIXED_UP = -113


@runtime_checkable
class HasHeartbeat(Protocol):
    """A drive that switches off when it hears nothing."""

    def lapse(self) -> None: ...


class Restart(Fault):
    swallows = sudden = True

    def strike(self) -> None:
        self.port.instrument.power_on()
        self.port.be_deaf(self.spec.seconds)


class MinimumGap(Fault):
    """A message that is lost counts as the last one too."""

    _last = float("-inf")

    def line(self, line: bytes) -> bytes | None:
        now = self.port.bench.now
        early, self._last = now - self._last < self.spec.seconds, now
        if early:
            super().note()
        return None if early else line

    def note(self) -> None:
        """Put down by `line` where it acts."""


class Busy(Fault):
    def strike(self) -> None:
        self.port.be_busy(self.spec.seconds)


class CompletionNever(Fault):
    def concerns(self, line: bytes) -> bool:
        return b"*OPC" in line.upper()

    def line(self, line: bytes) -> bytes | None:
        others = [unit for unit in line.split(b";") if not unit.strip().upper().startswith(b"*OPC")]
        return b";".join(others) or None


class CompletionAtOnce(Fault):
    def concerns(self, line: bytes) -> bool:
        return b"*OPC" in line.upper()

    def strike(self) -> None:
        self.port.instrument.hasty = True

    def passed(self) -> None:
        self.port.instrument.hasty = False


class ClippedSetting(Fault):
    """A number other than 0 and 1, which are words for off and on. A line's checksum is made anew."""

    def concerns(self, line: bytes) -> bool:
        match = None if b"?" in line or line.startswith(b"*") else _SETTING.fullmatch(_bare(line))
        return match is not None and float(match["number"]) not in (0.0, 1.0)

    def line(self, line: bytes) -> bytes | None:
        bare = _bare(line)
        match = _SETTING.fullmatch(bare)
        assert match is not None
        cut = match["head"] + b"%.6g" % (float(match["number"]) * PART_LEFT) + match["rest"]
        self.port.instrument.error(-222, "cut")
        return cut if bare == line else b"%s~%02X" % (cut, crc8(cut))


class StandingError(Fault):
    """After each "no error" it is there again, so that a bounded drain does end."""

    _told = False

    def concerns(self, line: bytes) -> bool:
        return b"SYST" in line.upper() and b"ERR" in line.upper() and b"?" in line

    def strike(self) -> None:
        if not self._told:
            self.port.instrument.error(*STANDING)
        self._told = not self._told


class QueueOverflow(Fault):
    sudden = True

    def strike(self) -> None:
        for _ in range(self.spec.number):
            self.port.instrument.error(MIXED_UP)


class LocalMode(Fault):
    swallows = True

    def concerns(self, line: bytes) -> bool:
        """A person cannot bring about local where `SYST:RWL` has locked the key."""
        panel = self.port.instrument.panel
        locked = panel is not None and panel.locked
        return not locked and b"?" not in line and line.strip().upper() != b"*CLS"


class HeartbeatLoss(Fault):
    sudden = True

    def strike(self) -> None:
        drive = self.port.instrument
        if isinstance(drive, HasHeartbeat):
            drive.lapse()


def require_heartbeat(fault: Fault) -> None:
    """ConfigError where the instrument has no heartbeat to lose."""
    instrument = fault.port.instrument
    if isinstance(fault, HeartbeatLoss) and not isinstance(instrument, HasHeartbeat):
        raise ConfigError(
            f"{instrument.name} has no heartbeat that it could lose",
            value=fault.spec.kind,
            allowed="a board",
            remedy="Name the instrument of the role drive in [[simulated_faults]]",
            topic="simbench",
        )


def _bare(line: bytes) -> bytes:
    """Without the checksum, where there is one."""
    return line[:-3] if line[-3:-2] == b"~" else line


KINDS: dict[str, type[Fault]] = {
    "restart": Restart,
    "minimum_gap": MinimumGap,
    "busy": Busy,
    "completion_never": CompletionNever,
    "completion_at_once": CompletionAtOnce,
    "clipped_setting": ClippedSetting,
    "standing_error": StandingError,
    "queue_overflow": QueueOverflow,
    "local_mode": LocalMode,
    "heartbeat_loss": HeartbeatLoss,
}
