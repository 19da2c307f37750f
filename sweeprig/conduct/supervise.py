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
from collections.abc import Callable, Iterator
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from sweeprig.clock import Clock, SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.messages import BEAT, MOST_LINE, ORDERS, Failed, Hello, Said, understood
from sweeprig.conduct.off import off
from sweeprig.conduct.requests import Requests
from sweeprig.conduct.rig import RigUse
from sweeprig.conduct.states import Ending, Event, OnEvent, Orders, State
from sweeprig.errors import RigError

LOG = "runner.log"
"""What the runner and its libraries printed: tracebacks, warnings."""
MOST_LOG = 1_000_000
_MOST_WHY = 500

LOOK_S = 0.02
MOST_LINES = 200
"""Lines that wait to be looked at, and that are looked at in one go: one who talks without end has to wait, and is
still told what to do."""
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
        self.lines: queue.Queue[bytes | None] = queue.Queue(MOST_LINES)
        assert self.process.stdout is not None
        threading.Thread(target=self._read, args=(self.process.stdout,), daemon=True).start()

    def _read(self, source: BinaryIO) -> None:
        """Whole lines only; of one that is too long nothing counts, its end neither."""
        with suppress(OSError, ValueError):
            too_long = False
            for part in iter(lambda: source.readline(MOST_LINE), b""):
                whole = part.endswith(b"\n")
                if whole and not too_long:
                    self.lines.put(part)
                too_long = not whole
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
        self.requests = Requests(folder, Orders(), kinds=("off", "stop"))
        self.at = 0.0
        self.deaf = False
        self.tripped = ""
        self.began = False
        self.in_a_row = 0
        self.holds_done = 0
        self.runner: Runner | None = None

    def run(self) -> Ending:
        """How the last session ended. Raises what a session raised; RigError when the runner does not stay alive."""
        because = ""
        try:
            while True:
                ending = self._with_one_runner(because)
                if isinstance(ending, Ending):
                    return ending
                because = ending.why
                self._count_restart(because)
        except BaseException as first:
            if self.runner is not None and self.runner.process.poll() is None:
                self.runner.kill()
                self.deaf = True  # it may be the listener that failed: the drive goes off all the same
                try:
                    self._take_over("the supervisor failed")
                except Exception as second:  # noqa: BLE001 - whatever it is, the first error is the one to show
                    first.add_note(f"and then, while switching off: {second}")
            raise

    def _with_one_runner(self, because: str) -> Ending | Lost:
        """One runner's life; Lost once its rig is switched off and another may be started."""
        runner = self.runner = self._started(because)
        said = self._watch(runner)
        runner.kill()
        if isinstance(said, Ending) and not (said.again and not self._stopping()):
            return said
        if isinstance(said, Failed):
            self._leave_off(said)
            raise said.raised()
        why = said.why if isinstance(said, Lost) else said.reason
        self._take_over(why)
        self.requests.look()  # what was asked of the runner that is dead
        if self.tripped:
            return self._ended(State.TRIPPED, self.tripped)
        if self._stopping():
            return self._ended(State.PARKED, f"stopped by request; the runner had gone: {why}")
        return Lost(why)

    def _started(self, because: str) -> Runner:
        try:
            return Runner(self.command(because), self.folder / LOG)
        except OSError as error:
            raise RigError(
                "the process that performs holds cannot be started; the drive is off",
                value=error.strerror or str(error),
                remedy="See that the machine has memory, processes and descriptors left, then resume the run",
                topic="unattended",
            ) from error

    def _ended(self, state: State, reason: str) -> Ending:
        """An end that no runner told: the supervisor has switched off and proved it."""
        self.requests.carried_out("off", "stop")
        self._tell("state", state=state.words, drive_may_be_on=False, reason=reason)
        return Ending(state, reason)

    def _stopping(self) -> bool:
        return any((self.orders.finish, self.orders.off, self.requests.orders.finish, self.requests.orders.off))

    # -- watching ------------------------------------------------------------------------------------------------

    def _watch(self, runner: Runner) -> Ending | Failed | Lost:
        """Pass on what it says, beat, and hand down orders, until it ended or is lost."""
        now = self.wall.now()
        heard, beaten, looked, ordered_off = now, now - 1.0, now, 0.0
        greeted = False
        told: set[str] = set()
        while True:
            for line in self._waiting(runner):
                if line is None:
                    return self._gone(runner)
                said = understood(line)
                if said is None:
                    continue  # no sign of life: a runner that only babbles does not work
                heard = self.wall.now()
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

    def _waiting(self, runner: Runner) -> Iterator[bytes | None]:
        """The lines that have come, None for the end; no more in one go than let beats and orders out in time."""
        with suppress(queue.Empty):
            for _ in range(MOST_LINES):
                yield runner.lines.get_nowait()

    def _gone(self, runner: Runner) -> Lost:
        with suppress(subprocess.TimeoutExpired):
            runner.process.wait(BOUNDS["kill_s"])
        code = runner.process.returncode
        how = "still there" if code is None else f"killed by signal {-code}" if code < 0 else f"exit code {code}"
        return Lost(f"the runner ended without saying why ({how}; see {LOG})")

    def _pass_on(self, event: Event) -> None:
        self.at = max(self.at, event.at)
        self.began = self.began or event.kind == "session"
        if event.kind == "trip":
            self.tripped = str(event.data.get("evidence", "protection"))
        if event.kind == "hold_ended" and event.data.get("status") == "tripped":
            self.tripped = str(event.data.get("reason", "protection"))  # told first: the runner may die before `trip`
        if event.kind == "hold_ended" and event.data.get("status") == "done":
            self.in_a_row, self.holds_done = 0, self.holds_done + 1
        self._listener(event)

    def _listener(self, event: Event) -> None:
        if not self.deaf:
            self.on_event(event)

    # -- taking over ---------------------------------------------------------------------------------------------

    def _tell(self, kind: str, **data: object) -> None:
        self._listener(Event(kind, self.at, data))

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
                self.tick()
                self.wall.wait(self.wall.now() + BOUNDS["take_over_pause_s"])
            else:
                self._tell("off", proved=True, took_s=done.took_s)
                return

    def _leave_off(self, said: Failed) -> None:
        """A session that ended with an error has told drive and supply to be off; that is seen to here once more."""
        refused = ("ConfigError", "RunInUse", "RigInUse", "UnknownAdapter", "MissingPackage", "RoleMissing")
        if said.error in refused and not self.began:
            return  # nothing was opened; in the middle of a run the same errors leave a rig behind
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
        again = "" if self.in_a_row == 1 else f", for the {self.in_a_row}. time with no hold done between"
        self._tell("notice", text=f"the runner is started again from the logbook{again}")


def runner_command(folder: Path, attended: bool) -> Command:
    """A fresh interpreter that imports nothing from the folder it is started in."""

    def command(because: str) -> list[str]:
        line = [sys.executable, "-P", "-m", "sweeprig.conduct.runner", str(folder)]
        why = because.replace("\0", " ")[:_MOST_WHY]  # what an instrument had said may be in it
        return line + (["--attended"] if attended else []) + ([f"--because={why}"] if why else [])

    return command


__all__ = ["LOG", "Said", "Supervisor", "runner_command"]
