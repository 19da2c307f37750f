"""The machine that a run works on: kept awake, and checked before the start. Nothing of the rig is here.

Every call to the operating system goes through `host_system.System`, so that fakes can stand for other systems.
"""

from __future__ import annotations

import re
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import AbstractContextManager, ExitStack, contextmanager, suppress
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.host_system import SYSTEM, Child, Facts, System, process_facts
from sweeprig.errors import ConfigError, RunError
from sweeprig.logbook.run_folder import refuse_network
from sweeprig.logbook.traffic import CAP_BYTES

__all__ = [
    "SYSTEM", "Awake", "Check", "Facts", "System", "checks", "keep_awake", "predicted_bytes", "process_facts", "refuse",
]  # fmt: skip

EARLIEST_UTC = datetime(2024, 1, 1, tzinfo=UTC).timestamp()
LATEST_UTC = datetime(2100, 1, 1, tzinfo=UTC).timestamp()
"""Outside of these the machine's clock is not set: boards without a battery start in 1970 or at their image's date."""

_WHY = "a motor is being characterised"
_UNTIL_END_OF_INPUT = "import sys; sys.stdin.buffer.read()"
_CONTINUOUS, _SYSTEM_REQUIRED = 0x80000000, 0x00000001


# -- awake -------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Awake:
    """Whether something keeps the machine awake, and what, or why nothing does, in a sentence for people."""

    active: bool
    how: str


@contextmanager
def keep_awake(system: System = SYSTEM) -> Iterator[Awake]:
    """Ask the machine not to fall asleep inside the block, and say whether that took effect. Never raises itself.

    What keeps it awake ends with this process, also when that is killed. On Windows: enter and leave in one thread.
    """
    reasons: list[str] = []
    with ExitStack() as stack:
        for way in _ways(system):
            attempt = ExitStack()
            try:
                said = attempt.enter_context(way(system))
            except Exception as error:  # noqa: BLE001 - whatever a desktop's library does: a run must not die of it
                said = Awake(False, f"{type(error).__name__}")
            if said.active:
                stack.push(_closing_quietly(attempt))
                yield Awake(True, f"the machine is kept awake by {said.how}")
                return
            _closing_quietly(attempt)(None, None, None)
            reasons.append(said.how)
        why = "; ".join(reason for reason in reasons if reason) or f"no way is known on {system.platform}"
        yield Awake(False, f"nothing keeps this machine awake: {why}")


def _closing_quietly(stack: ExitStack) -> Callable[[Any, Any, Any], bool]:
    def close(*_: object) -> bool:
        with suppress(Exception):
            stack.close()
        return False

    return close


_Way = Callable[[System], AbstractContextManager[Awake]]


def _ways(system: System) -> Sequence[_Way]:
    own: dict[str, _Way] = {"linux": _login_manager, "darwin": _caffeinate, "win32": _windows}
    return (_extra, *([own[system.platform]] if system.platform in own else []))


@contextmanager
def _extra(system: System) -> Iterator[Awake]:
    """The extra `[awake]`: the library knows whether it took effect, and is believed."""
    held = system.wakepy()
    if held is None:
        yield Awake(False, "")
        return
    with held as (active, by):
        if active:
            yield Awake(True, f"the desktop session ({by}); closing the lid may still send it to sleep")
        else:
            yield Awake(False, "the desktop session does not take a request")


@contextmanager
def _login_manager(system: System) -> Iterator[Awake]:
    """Linux: an inhibitor of the login manager, held by a child that lives until its standard input closes."""
    tool = system.which("systemd-inhibit")
    if tool is None:
        yield Awake(False, "systemd-inhibit is not on this machine")
        return
    failed = ""
    for what, besides in (("idle:sleep:handle-lid-switch", ""), ("idle:sleep", ", but closing the lid may sleep it")):
        command = [tool, f"--what={what}", "--mode=block", "--who=sweeprig", f"--why={_WHY}"]
        with system.spawn([*command, sys.executable, "-I", "-S", "-c", _UNTIL_END_OF_INPUT]) as child:
            listed = _shows(system, child, [tool, "--list", "--no-pager"], lambda pid: rf"\b{pid}\b.*sleep.*\bblock\b")
            if not listed:
                yield Awake(True, f"the login manager (systemd-inhibit: {what}){besides}")
                return
            failed = failed or listed
    yield Awake(False, f"systemd-inhibit did not take effect ({failed})")


@contextmanager
def _caffeinate(system: System) -> Iterator[Awake]:
    tool = system.which("caffeinate")
    if tool is None:
        yield Awake(False, "caffeinate is not on this machine")
        return
    with system.spawn([tool, "-i", "-s", "-w", str(system.pid)]) as child:
        failed = _shows(system, child, ["pmset", "-g", "assertions"], lambda pid: rf"\bpid {pid}\(caffeinate\)")
        if failed:
            yield Awake(False, f"caffeinate did not take effect ({failed})")
        else:
            yield Awake(True, "caffeinate; keep the lid open and the mains plug in")


@contextmanager
def _windows(system: System) -> Iterator[Awake]:
    wanted = _CONTINUOUS | _SYSTEM_REQUIRED
    try:
        taken = system.execution_state(wanted) != 0 and system.execution_state(wanted) & wanted == wanted
        if taken:
            yield Awake(True, "Windows (SetThreadExecutionState); keep the lid open: closing it may still sleep it")
        else:
            yield Awake(False, "Windows refused (SetThreadExecutionState)")
    finally:
        system.execution_state(_CONTINUOUS)


def _shows(system: System, child: Child, listing: list[str], pattern: Callable[[int], str]) -> str:
    """ "" once the child lives and the system's own list names it; else why not, after `awake_s` at the latest."""
    answer = ""
    for _ in range(round(BOUNDS["awake_s"] / BOUNDS["awake_look_s"])):
        system.wait(BOUNDS["awake_look_s"])
        ended = child.poll()
        if ended is not None:
            code, answer = system.ask(listing)
            why = "" if code == 0 else f"; {_last_line(answer)}"
            return f"it ended at once with exit code {ended}{why}"
        code, answer = system.ask(listing)
        if code == 0 and re.search(pattern(child.pid), answer):
            return ""
        if code != 0:
            break
    return "the system's list does not name it" if code == 0 else f"no list to see it in: {_last_line(answer)}"


def _last_line(text: str) -> str:
    return (text.strip().splitlines() or ["?"])[-1]


# -- checks before the start -------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Check:
    """One thing about the machine: its name, whether it is well, a sentence, and whether a run may not begin so."""

    name: str
    ok: bool
    sentence: str
    refuses: bool = False


def predicted_bytes(plan_seconds: float, holds: int, bytes_per_hold: float | None = None) -> float:
    """Size of logbook, traffic log and report of a plan, bytes, without any margin (figures: table of bounds)."""
    logbook = holds * (bytes_per_hold or BOUNDS["room_hold_bytes"]) + plan_seconds * BOUNDS["room_logbook_rate"]
    return logbook + min(CAP_BYTES, plan_seconds * BOUNDS["room_traffic_rate"]) + BOUNDS["room_report_bytes"]


def checks(
    folder: Path,
    plan_seconds: float,
    holds: int,
    bytes_per_hold: float | None = None,
    *,
    instruments: int = 0,
    deadline_utc: float | None = None,
    needed_seconds: float | None = None,
    system: System = SYSTEM,
) -> list[Check]:
    """What must be well with the machine before a run that lasts `plan_seconds` begins in (or under) `folder`.

    needed_seconds: of it what must be done before the deadline; None: all.
    Changes nothing but for a file that is made and removed. Time zones play no part: everything is counted in UTC.
    """
    place = _nearest(folder)
    return [
        _local(folder, system),
        _writable(place, system),
        _room(place, predicted_bytes(plan_seconds, holds, bytes_per_hold), system),
        _descriptors(instruments, system),
        _clock(system.utc()),
        _files_and_clock(place, system),
        *([] if deadline_utc is None else [_deadline(deadline_utc, needed_seconds or plan_seconds, system.utc())]),
    ]


def refuse(found: Sequence[Check]) -> None:
    """ConfigError where something stands against beginning at all; it says everything that does."""
    against = [check.sentence for check in found if check.refuses and not check.ok]
    if against:
        raise ConfigError(
            "this run cannot finish on this machine: " + "; ".join(against),
            remedy="Mend that, then start it again; nothing was started",
            topic="unattended",
        )


def _local(folder: Path, system: System) -> Check:
    try:
        refuse_network(folder, system.mounts)
    except RunError as error:
        return Check("file system", False, f"{error.what} ({error.value})", refuses=True)
    return Check("file system", True, "the run lies on a local disk, as far as the system tells", refuses=True)


def _writable(place: Path, system: System) -> Check:
    why = system.may_write(place)
    said = f"{place} cannot be written to ({why})" if why else f"{place} can be written to"
    return Check("folder", not why, said, refuses=True)


def _room(place: Path, size: float, system: System) -> Check:
    wanted = size * BOUNDS["room_factor"] + BOUNDS["room_spare_bytes"]
    try:
        free = system.free_bytes(place)
    except OSError as error:
        return Check("disk", False, f"the free space of {place} is not known ({error.strerror or error})")
    said = f"{free / 1e6:.0f} MB are free at {place}, and the plan wants {wanted / 1e6:.0f} MB"
    parts = f" (predicted {size / 1e6:.0f} MB, times {BOUNDS['room_factor']:g}, and some to spare)"
    return Check("disk", free >= wanted, said + parts, refuses=True)


def _descriptors(instruments: int, system: System) -> Check:
    most, now = system.most_descriptors(), system.open_descriptors()
    if most is None:
        return Check("descriptors", True, "this system sets no limit on descriptors")
    wanted = (now or 0) + instruments + int(BOUNDS["descriptors_spare"])
    said = f"{most} descriptors are allowed and about {wanted} are wanted"
    return Check("descriptors", most >= wanted, said if most >= wanted else f"{said}: raise `ulimit -n`", refuses=True)


def _clock(utc: float) -> Check:
    ok = EARLIEST_UTC <= utc < LATEST_UTC
    said = f"the machine's clock says {_day(utc)}"
    return Check("clock", ok, said if ok else f"{said}: it is not set", refuses=True)


def _files_and_clock(place: Path, system: System) -> Check:
    newest = system.newest(place)
    ahead = 0.0 if newest is None else newest[1] - system.utc()
    if newest is None or ahead <= BOUNDS["clock_behind_s"]:
        return Check("file times", True, "no file of the folder is newer than now")
    said = f"{newest[0]} in {place} is {ahead:.0f} s newer than now: the clock may be behind"
    return Check("file times", False, f"{said}, and stamps and deadlines with it")


def _deadline(deadline: float, plan_seconds: float, utc: float) -> Check:
    left = deadline - utc
    if left <= 0:
        return Check("deadline", False, f"the deadline {_day(deadline)} is past; now is {_day(utc)}", refuses=True)
    said = f"{left / 3600:.1f} h are left to the deadline and what must be done takes about {plan_seconds / 3600:.1f} h"
    return Check("deadline", left >= plan_seconds, said if left >= plan_seconds else f"{said}: not all can be found")


def _day(utc: float) -> str:
    try:
        return datetime.fromtimestamp(utc, UTC).strftime("%Y-%m-%d %H:%M UTC")
    except (OverflowError, ValueError, OSError):
        return f"{utc:.0f} s since 1970"


def _nearest(folder: Path) -> Path:
    """The folder itself, or the first above it that is there."""
    folder = folder.absolute()
    return next((place for place in (folder, *folder.parents) if place.is_dir()), folder)
