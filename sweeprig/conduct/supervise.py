"""The supervisor: starts the runner, watches it, and switches the rig off itself when the runner cannot any more.

It has the terminal and the rig's locks; the runner has the instruments. To take over it kills, reaps, and only then
opens: at any moment one process owns an instrument. A runner that died is started again from the logbook, up to a
limit, never after a trip.
"""

from __future__ import annotations

import os
import queue
import signal
import subprocess
import sys
import threading
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from sweeprig.clock import Clock, SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.messages import BEAT, MOST_LINE, ORDERS, Failed, Hello, Said, understood
from sweeprig.conduct.off import off
from sweeprig.conduct.rig import RigUse
from sweeprig.conduct.states import Ending, Event, OnEvent, Orders, State
from sweeprig.errors import RigError, SweeprigError

LOG = "runner.log"
"""What the runner and its libraries printed: tracebacks, warnings."""
MOST_LOG = 1_000_000

LOOK_S = 0.02
STALL_S = 1.0
"""The supervisor's own loop stood still for so long: it was stopped, or the machine slept; nobody is to blame."""

_OWN_GROUP = getattr(subprocess, "CREATE_NEW_PROCESS_GROUP", 0)
"""Windows' counterpart of a session of its own: Ctrl-C in the terminal is the supervisor's alone."""

Command = Callable[[str], list[str]]
"""Why a runner is started again ("" at first) → the command line."""


@dataclass(frozen=True, slots=True)
class Lost:
    """The runner ended without saying how, or hung; `why` in words."""

    why: str


class Runner:
    """One runner process: its lines as they come, its orders."""

    def __init__(self, command: list[str], log: Path) -> None:
        if log.exists() and log.stat().st_size > MOST_LOG:
            log.unlink()
        pipe = subprocess.PIPE
        with log.open("ab") as errors:
            self.process: subprocess.Popen[bytes] = subprocess.Popen(
                command, stdin=pipe, stdout=pipe, stderr=errors, start_new_session=True, creationflags=_OWN_GROUP
            )
        self.lines: queue.SimpleQueue[bytes | None] = queue.SimpleQueue()
        assert self.process.stdout is not None
        threading.Thread(target=self._read, args=(self.process.stdout,), daemon=True).start()

    def _read(self, source: BinaryIO) -> None:
        with suppress(OSError, ValueError):
            for line in iter(lambda: source.readline(MOST_LINE), b""):
                self.lines.put(line)
        self.lines.put(None)

    def tell(self, word: bytes) -> None:
        """A beat or an order; to one that has gone it says nothing."""
        if self.process.stdin is not None:
            with suppress(OSError, ValueError):
                self.process.stdin.write(word)
                self.process.stdin.flush()

    def kill(self) -> None:
        """Killed and reaped, and whatever it had started with it."""
        if os.name == "posix":
            with suppress(ProcessLookupError, PermissionError):
                os.killpg(self.process.pid, signal.SIGKILL)
        self.process.kill()
        with suppress(subprocess.TimeoutExpired):
            self.process.wait(BOUNDS["kill_s"])
        for stream in (self.process.stdin, self.process.stdout):
            if stream is not None:
                with suppress(OSError):
                    stream.close()


class Supervisor:
    """Works a run to its end with one runner after another. `run` is all that is called from outside."""

    def __init__(
        self,
        folder: Path,
        use: RigUse,
        command: Command,
        on_event: OnEvent,
        orders: Orders,
        tick: Callable[[], None],
        wall: Clock | None = None,
    ) -> None:
        self.folder, self.use, self.command = folder, use, command
        self.on_event, self.orders, self.tick = on_event, orders, tick
        self.wall = wall or SystemClock()
        self.bench = SystemClock(use.rig.rate or 1.0)
        self.tripped = ""
        self.in_a_row = 0
        self.holds_done = 0
        self.runner: Runner | None = None

    def run(self) -> Ending:
        """How the last session ended. Raises what a session raised; RigError when the runner does not stay alive."""
        because = ""
        try:
            while True:
                self.runner = Runner(self.command(because), self.folder / LOG)
                said = self._watch(self.runner)
                self.runner.kill()
                if isinstance(said, Ending) and not (said.again and not self._stopping()):
                    return said
                if isinstance(said, Failed):
                    self._leave_off(said)
                    raise said.raised()
                because = said.why if isinstance(said, Lost) else said.reason
                self._take_over(because)
                if self.tripped:
                    return Ending(State.TRIPPED, self.tripped)
                if self._stopping():
                    return Ending(State.PARKED, f"stopped by request; the runner had gone: {because}")
                self._count_restart(because)
        except BaseException:
            if self.runner is not None and self.runner.process.poll() is None:
                self.runner.kill()
                with suppress(SweeprigError):
                    self._take_over("the supervisor failed")
            raise

    def _stopping(self) -> bool:
        return self.orders.finish or self.orders.off

    # -- watching ------------------------------------------------------------------------------------------------

    def _watch(self, runner: Runner) -> Ending | Failed | Lost:
        """Pass on what it says, beat, and hand down orders, until it ended or is lost."""
        now = self.wall.now()
        heard, beaten, looked, ordered_off = now, now - 1.0, now, 0.0
        greeted = False
        told: set[str] = set()
        while True:
            while (line := self._next(runner)) is not _NOTHING:
                if line is None:
                    return self._gone(runner)
                heard = self.wall.now()
                said = understood(line) if isinstance(line, bytes) else None
                greeted = greeted or isinstance(said, Hello)
                if isinstance(said, Ending | Failed):
                    return said
                if isinstance(said, Event):
                    self._pass_on(said)
            now = self.wall.now()
            if now - looked > STALL_S:
                heard = now
            looked = now
            if now - beaten >= BOUNDS["beat_s"]:
                self.tick()
                runner.tell(BEAT)
                beaten = now
            for word in ORDERS:
                if getattr(self.orders, word) and word not in told:
                    runner.tell(word.encode() + b"\n")
                    told.add(word)
                    ordered_off = now if word == "off" else ordered_off
            if now - heard > (BOUNDS["hang_s"] if greeted else BOUNDS["start_up_s"]):
                return Lost(f"the runner said nothing for {now - heard:.1f} s")
            if ordered_off and now - ordered_off > BOUNDS["obey_s"]:
                return Lost(f"the runner did not end {now - ordered_off:.0f} s after the order to switch off")
            self.wall.wait(now + LOOK_S)

    def _next(self, runner: Runner) -> object:
        try:
            return runner.lines.get_nowait()
        except queue.Empty:
            return _NOTHING

    def _gone(self, runner: Runner) -> Lost:
        with suppress(subprocess.TimeoutExpired):
            runner.process.wait(BOUNDS["kill_s"])
        code = runner.process.returncode
        how = "still there" if code is None else f"killed by signal {-code}" if code < 0 else f"exit code {code}"
        return Lost(f"the runner ended without saying why ({how}; see {LOG})")

    def _pass_on(self, event: Event) -> None:
        if event.kind == "trip":
            self.tripped = str(event.data.get("evidence", "protection"))
        if event.kind == "hold_ended" and event.data.get("status") == "done":
            self.in_a_row, self.holds_done = 0, self.holds_done + 1
        self.on_event(event)

    # -- taking over ---------------------------------------------------------------------------------------------

    def _tell(self, kind: str, **data: object) -> None:
        self.on_event(Event(kind, self.bench.now(), data))

    def _take_over(self, why: str) -> None:
        """The runner is dead and reaped: off on all links, and the proof. Tried again for a while: it matters."""
        self._tell("notice", text=f"{why}: the supervisor switches off")
        until = self.wall.now() + BOUNDS["take_over_s"]
        while True:
            try:
                done = off(self.use, self.bench)
            except RigError as error:
                self._tell("notice", text=f"off is not proved yet: {error}")
                if self.wall.now() >= until:
                    raise
                self.wall.wait(self.wall.now() + BOUNDS["take_over_pause_s"])
            else:
                self._tell("off", proved=True, took_s=done.took_s)
                return

    def _leave_off(self, said: Failed) -> None:
        """A session that ended with an error has told drive and supply to be off; that is seen to here once more."""
        if said.error in ("ConfigError", "RunInUse", "RigInUse", "UnknownAdapter", "MissingPackage", "RoleMissing"):
            return  # nothing was opened
        try:
            self._take_over(f"the session ended with an error: {said.parts.get('what')}")
        except RigError as error:
            self._tell("notice", text=f"OFF COULD NOT BE PROVED: {error}")

    def _count_restart(self, why: str) -> None:
        self.in_a_row += 1
        if self.in_a_row > BOUNDS["restarts_in_a_row"]:
            raise RigError(
                f"the runner was lost {self.in_a_row} times with no hold done between",
                value=why,
                remedy=f"Look into {self.folder / LOG}, then resume the run; the drive is off",
                topic="unattended",
            )
        self._tell("notice", text=f"the runner is started again from the logbook ({self.in_a_row} in a row)")


_NOTHING = object()


def runner_command(folder: Path, attended: bool) -> Command:
    """A fresh interpreter that imports nothing from the folder it is started in."""

    def command(because: str) -> list[str]:
        line = [sys.executable, "-P", "-m", "sweeprig.conduct.runner", str(folder)]
        return line + (["--attended"] if attended else []) + (["--because", because] if because else [])

    return command


__all__ = ["LOG", "Said", "Supervisor", "runner_command"]
