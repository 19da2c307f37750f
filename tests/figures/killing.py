"""A served bench and `sweeprig run` on it as real processes, to be killed, stopped and woken. Linux.

What the drive did is read from the bench's own record, by the machine's monotonic clock, never from what sweeprig says.
"""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

CONFIGS = Path(__file__).parents[2] / "configs"
PATIENCE_S = 60.0
LOOK_S = 0.005
SWEEPRIG = str(Path(sys.executable).parent / "sweeprig")

AGE_S = 5.0
"""Longest age of a reading, bench seconds: a busy machine is no silent channel."""

SWEEP = """
name = "short"
pwm = ["1 kHz"]
supply = ["12 V"]
duty = { low = "0 %", high = "100 %" }
lowest_speed = "60 rpm"
seed = 3
[zero]
time = "2 s"
[run_in]
duty = "60 %"
time = "RUN_IN s"
[curve]
duties = ["100 %", "60 %", "30 %", "20 %", "16 %", "14 %", "12 %"]
least = "2 s"
most = "8 s"
[stall]
search = "ladder"
hold_time = "8 s"
step = "1 %"
holds = HOLDS
relaunch_above = "12 %"
relaunch_time = "3 s"
[start]
search = "ladder"
start_time = "5 s"
rest_time = "2 s"
step = "1 %"
trials = HOLDS
[settle]
tolerance = "2 %"
"""


def until(true: Callable[[], object], what: str, seconds: float = PATIENCE_S) -> Any:
    """Poll until `true()` holds and hand its value over; TimeoutError names what never came."""
    end = time.monotonic() + seconds
    while not (value := true()):
        if time.monotonic() > end:
            raise TimeoutError(f"{what}: not within {seconds:g} s")
        time.sleep(LOOK_S)
    return value


class Bench:
    """A served simulated bench with its job files in `folder`. `heartbeat_s` is the board's, in bench seconds."""

    def __init__(
        self, folder: Path, rate: float, heartbeat_s: float = 10.0, holds: int = 5, run_in_s: int = 10
    ) -> None:
        self.folder, self.rate, self.heartbeat_s = folder, rate, heartbeat_s
        folder.mkdir(parents=True, exist_ok=True)
        self.runs, self.rig, self._record = folder / "runs", folder / "served-rig.toml", folder / "drive.jsonl"
        self._events: list[dict[str, Any]] = []
        self._read, self._reading = 0, threading.Lock()
        self.env = {**os.environ, "SWEEPRIG_LOCKS": str(folder / "locks"), "SWEEPRIG_NOTICES": "", "COLUMNS": "160"}
        shutil.copy(CONFIGS / "motors/aspirator-fan.toml", folder)
        rig = (CONFIGS / "rigs/shelter-bench.toml").read_text("utf-8")
        beat = 'heartbeat = "2 s"'
        assert beat in rig
        rig = rig.replace(beat, f'heartbeat = "{heartbeat_s:g} s"').replace('"2.5 s"', f'"{AGE_S:g} s"')
        (folder / "rig.toml").write_text(rig, "utf-8")
        (folder / "short.toml").write_text(SWEEP.replace("HOLDS", str(holds)).replace("RUN_IN", str(run_in_s)), "utf-8")
        for name, uses in (("inside", "rig"), ("job", "served-rig")):
            lines = f'title = "short"\nrig = "{uses}.toml"\nmotor = "aspirator-fan.toml"\nsweep = "short.toml"\n'
            (folder / f"{name}.toml").write_text(lines, "utf-8")
        self.job = folder / "job.toml"
        line = [SWEEPRIG, "simbench", "serve", folder / "inside.toml", "--rate", rate, "--write", self.rig]
        self.log = (folder / "serve.log").open("w")
        self.server = subprocess.Popen(
            [str(part) for part in (*line, "--record", self._record)], stdout=self.log, stderr=self.log, env=self.env
        )
        until(self.rig.exists, "the bench is served")

    def record(self) -> list[dict[str, Any]]:
        """What happened so far: `mono`, `at`, `what`, `why`."""
        with self._reading, self._record.open("rb") as file:
            file.seek(self._read)
            new = file.read()
            whole = new[: new.rfind(b"\n") + 1]
            self._events += [json.loads(line) for line in whole.splitlines()]
            self._read += len(whole)
            return list(self._events)

    def last(self, before: float = float("inf"), of: str = "drive") -> dict[str, Any] | None:
        """The last thing that `drive` or `supply` did before that moment."""
        found = [event for event in self.record() if event["what"].startswith(of) and event["mono"] <= before]
        return found[-1] if found else None

    def is_on(self, at: float = float("inf"), of: str = "drive") -> bool:
        event = self.last(at, of)
        return event is not None and event["what"] == f"{of}_on"

    def off_after(self, moment: float, of: str = "drive") -> tuple[float, str] | None:
        """Real seconds from `moment` until it was off, and why; (0, "") where it was off, None where it never was."""
        if not self.is_on(moment, of):
            return 0.0, ""
        for event in self.record():
            if event["what"] == f"{of}_off" and event["mono"] > moment:
                return event["mono"] - moment, str(event["why"])
        return None

    def command(self, *arguments: object, cwd: Path | None = None) -> Command:
        return Command(self, [str(argument) for argument in arguments], cwd)

    def run(self, cwd: Path | None = None) -> Command:
        return self.command("run", self.job, "--runs", self.runs, "--plain", cwd=cwd)

    def done(self, *arguments: object) -> subprocess.CompletedProcess[str]:
        """A command run to its end."""
        line = [SWEEPRIG, *(str(argument) for argument in arguments)]
        return subprocess.run(line, capture_output=True, text=True, timeout=PATIENCE_S, check=False, env=self.env)

    def close(self) -> None:
        self.server.terminate()
        try:
            self.server.wait(10)
        except subprocess.TimeoutExpired:
            self.server.kill()
            self.server.wait()
        self.log.close()


class Command:
    """`sweeprig run` or `resume` under way: its lines with the moment at which each came, its runner, its end."""

    def __init__(self, bench: Bench, arguments: list[str], cwd: Path | None = None) -> None:
        self.bench = bench
        self.lines: list[tuple[float, str]] = []
        self.process = subprocess.Popen(
            [SWEEPRIG, *arguments], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=bench.env, cwd=cwd
        )
        self.readers = [
            threading.Thread(target=self._read, args=(stream,)) for stream in (self.process.stdout, self.process.stderr)
        ]
        for reader in self.readers:
            reader.start()
        self.began = time.monotonic()

    def _read(self, stream: Any) -> None:
        for line in stream:
            self.lines.append((time.monotonic(), line.rstrip("\n")))
        stream.close()

    @property
    def text(self) -> str:
        return "\n".join(line for _, line in self.lines)

    @property
    def folder(self) -> Path:
        """The newest run folder of its bench."""
        return Path(max(self.bench.runs.iterdir()))

    def saw(self, words: str, times: int = 1) -> bool:
        """Whether so many lines hold the words; a line of a hold begins with them."""
        if words == "hold ":
            return sum(line.startswith(words) for _, line in self.lines) >= times
        return sum(words in line for _, line in self.lines) >= times

    def await_line(self, words: str, times: int = 1, seconds: float = PATIENCE_S) -> None:
        self._until(lambda: self.saw(words, times), f"{words!r} ({times} times)", seconds)

    def await_on(self, seconds: float = PATIENCE_S) -> None:
        """Until the drive is on, by the bench's record."""
        self._until(self.bench.is_on, "the drive is on", seconds)

    def await_runner(self, but: int = 0, seconds: float = PATIENCE_S) -> int:
        """The process of its runner, another one than `but`."""
        return int(self._until(lambda: (pid := self.runner()) != but and pid, "a runner", seconds))

    def _until(self, true: Callable[[], object], what: str, seconds: float) -> Any:
        try:
            return until(lambda: true() or self.ended(), what, seconds)
        except TimeoutError as error:
            raise TimeoutError(f"{error}\n{self.text}") from None

    def ended(self) -> bool:
        if self.process.poll() is not None:
            self.wait(1.0)
            raise AssertionError(f"it ended with {self.process.returncode}\n{self.text}")
        return False

    def runner(self) -> int:
        """The runner's process at this moment, 0 where there is none."""
        for pid in children(self.process.pid):
            with suppress(OSError):
                if b"sweeprig.conduct.runner" in Path(f"/proc/{pid}/cmdline").read_bytes():
                    return pid
        return 0

    def signal(self, number: signal.Signals) -> float:
        """To the supervisor alone; the moment at which it was sent."""
        moment = time.monotonic()
        self.process.send_signal(number)
        return moment

    def wait(self, seconds: float = PATIENCE_S) -> int:
        """Its exit code."""
        try:
            code = self.process.wait(seconds)
        except subprocess.TimeoutExpired:
            raise TimeoutError(f"it did not end within {seconds:g} s\n{self.text}") from None
        for reader in self.readers:
            reader.join(10)
        return code

    def close(self) -> None:
        """Nothing of it is left, whatever state it is in."""
        runner = self.runner()
        for pid in (runner, self.process.pid):
            if pid and (pid != self.process.pid or self.process.poll() is None):
                with suppress(ProcessLookupError):
                    os.kill(pid, signal.SIGKILL)
        self.process.wait()
        for reader in self.readers:
            reader.join(10)


def children(pid: int) -> list[int]:
    try:
        return [int(word) for word in Path(f"/proc/{pid}/task/{pid}/children").read_text().split()]
    except OSError:
        return []


def kill(pid: int, number: signal.Signals = signal.SIGKILL) -> float:
    """The moment just before the signal was sent."""
    moment = time.monotonic()
    os.kill(pid, number)
    return moment


def alive(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False
