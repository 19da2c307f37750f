"""Long and awkward: full disks, slow disks, stepped clocks, processes stopped for a minute, links reopened by the
hundred, 72 simulated hours. The everyday forms are tests/conduct/test_stress.py and test_healing.py. Linux.

Processes are real, on a served bench; what the drive did is read from the bench's own record.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from importlib import import_module
from pathlib import Path
from typing import Any

from sweeprig.holds import Outcome, Status
from sweeprig.opened import open_run

kit: Any = import_module("killing")
RATE = 5.0
HEARTBEAT_S = 10.0
"""Of the board, bench seconds: two real ones."""
HOLDS = 12
STOP_S = 12.0
"""Real seconds: a minute of the bench."""
SLOW_S = 3.0
STEP_S = 3600.0
CYCLES = 500
BUSY = ("heartbeat", "no_reading")
"""What a machine with much else to do brings about at this rate."""
WORKERS = Path(__file__).with_name("stress_workers.py")


# -- disks -------------------------------------------------------------------------------------------------------------


@contextmanager
def small_disk(folder: Path, kilobytes: int) -> Iterator[Callable[[int], None] | None]:
    """A disk of that size at `folder`, and how to give it another size; None where none may be mounted."""
    folder.mkdir()
    size = f"size={kilobytes}k"
    if subprocess.run(
        ["mount", "-t", "tmpfs", "-o", size, "tmpfs", folder], capture_output=True, check=False
    ).returncode:
        yield None
        return

    def resize(to: int) -> None:
        subprocess.run(["mount", "-o", f"remount,size={to}k", folder], check=True)

    try:
        yield resize
    finally:
        subprocess.run(["umount", folder], check=True)


def worked(*arguments: object) -> dict[str, Any]:
    """What a worker (see stress_workers.py) says of itself, in a fresh interpreter."""
    line = [sys.executable, str(WORKERS), *(str(one) for one in arguments)]
    done = subprocess.run(line, capture_output=True, text=True, check=False)
    if done.returncode:
        raise RuntimeError(f"{line[2:]}: {done.stderr[-2000:]}")
    value: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return value


def full_disks(place: Path, full: bool) -> Iterator[dict[str, Any]]:
    """Runs on a disk, or with a limit of the file size, that ends somewhere; then there is room, and they go on."""
    lost, ended, troubles = 0, 0, []
    sizes = range(120, 600, 12 if full else 60)
    for number, kilobytes in enumerate(sizes):
        with small_disk(place / f"disk{number}", kilobytes) as resize:
            runs = place / f"disk{number}" / "runs"
            limit = 0 if resize else kilobytes * 1024
            first = worked("fill", runs, limit)
            if resize is not None:
                resize(65_536)
            nothing: dict[str, Any] = {"outcomes": [], "unfinished": 0, "state": "finished"}
            again = worked("go_on", runs) if first["folder"] else nothing
            ended += first["error"] == "DiskFull"
            kept = {one[0]: one for one in again["outcomes"]}
            lost += sum(kept.get(one[0]) != one for one in first["outcomes"]) + again["unfinished"]
            if again["state"] != "finished" or first["drive_on"] or first["error"] not in ("", "DiskFull"):
                troubles.append((kilobytes, first["error"], first["drive_on"], again["state"]))
    for trouble in troubles:
        print("full disk:", trouble, file=sys.stderr)
    yield figure("disk_full_lost", lost, "0", lost == 0 and not troubles and ended > 0, len(sizes), ended_by_it=ended)


# -- real processes ----------------------------------------------------------------------------------------------------


class Stage:
    """One served bench, and runs on it whose processes have a hand in them: a file that slows commits or steps UTC."""

    def __init__(self, folder: Path) -> None:
        self.bench = kit.Bench(folder, RATE, HEARTBEAT_S, HOLDS)
        self.knobs = folder / "knobs"
        self.knobs.mkdir()
        site = folder / "site"
        site.mkdir()
        text = WORKERS.with_name("stress_knobs.py").read_text("utf-8")
        (site / "sitecustomize.py").write_text(text, "utf-8")
        self.bench.env |= {"PYTHONPATH": str(site), "STRESS_KNOBS": str(self.knobs)}

    def turn(self, knob: str, value: float) -> None:
        beside = self.knobs / f"{knob}.new"
        beside.write_text(repr(value), "utf-8")
        beside.replace(self.knobs / knob)

    def commits(self) -> list[tuple[float, float]]:
        """Slow commits so far, real monotonic seconds."""
        with suppress(FileNotFoundError):
            text = (self.knobs / "commits").read_text("utf-8")
            return [(float(a), float(b)) for a, b in (line.split() for line in text.splitlines())]
        return []

    def run(self) -> Any:
        command = self.bench.run()
        command.await_line("hold 3:")
        return command

    def ended(self, command: Any) -> tuple[list[Outcome], int]:
        """Outcomes, and how much is wrong: not finished, gaps in the numbers, holds without an outcome, left on."""
        code = command.wait(10 * kit.PATIENCE_S)
        run = open_run(command.folder)
        numbers = [outcome.number for outcome in run.outcomes]
        wrong = (code not in (0, 1)) + (numbers != list(range(1, len(numbers) + 1))) + len(run.unfinished)
        wrong += self.bench.is_on()
        if wrong:
            print(command.text[-3000:], file=sys.stderr)
        return run.outcomes, wrong

    def close(self) -> None:
        self.bench.close()


def slow_disk(stage: Stage) -> Iterator[dict[str, Any]]:
    """Every commit takes three seconds, longer than the heartbeat: the drive must be off before each is through."""
    command = stage.run()
    try:
        stage.turn("slow", SLOW_S)
        kit.until(lambda: len(stage.commits()) >= 12 or command.process.poll() is not None, "slow commits")
        stage.turn("slow", 0.0)
        outcomes, wrong = stage.ended(command)
    finally:
        stage.turn("slow", 0.0)
        command.close()
    allowed_s = 1.25 * HEARTBEAT_S / RATE
    on = [(begin, end) for begin, end in stage.commits() if stage.bench.is_on(begin)]
    left = [took for begin, _ in on if (took := stage.bench.off_after(begin)) is None or took[0] > allowed_s]
    broken = [outcome.reason.partition(":")[0] for outcome in outcomes if outcome.status is not Status.DONE]
    yield figure(
        "slow_disk_drive_left_on", len(left) + wrong, "0", not left and not wrong and bool(on), len(stage.commits()),
        with_the_drive_on=len(on), discarded=len(broken), reasons=sorted(set(broken)),
    )  # fmt: skip


def stepped_clock(stage: Stage) -> Iterator[dict[str, Any]]:
    """UTC an hour on, and an hour back, in the middle of holds of a run on a served bench."""
    command = stage.run()
    steps = 0
    try:
        for offset in (STEP_S, 0.0, -STEP_S, 0.0):
            command.await_line("hold ", sum("hold " in line for _, line in list(command.lines)) + 2)
            stage.turn("step", offset)
            steps += 1
        outcomes, wrong = stage.ended(command)
    finally:
        stage.turn("step", 0.0)
        command.close()
    seen = [outcome for outcome in outcomes if "clock was stepped" in outcome.reason]
    broken = [outcome for outcome in outcomes if outcome.status is not Status.DONE and outcome not in seen]
    other = [outcome.reason for outcome in broken if outcome.reason.partition(":")[0] not in BUSY]
    backwards = sum(not 0.0 < outcome.ended - outcome.began < 600.0 for outcome in outcomes)
    wrong += backwards + (len(seen) > steps) + (not seen) + len(other)
    yield figure("clock_step_wrong", wrong, "0", wrong == 0, steps, discarded=len(seen), other=other)


def stopped(stage: Stage, who: str) -> Iterator[dict[str, Any]]:
    """One process stopped for a minute of the bench, then woken: off meanwhile, and the sweep goes on."""
    command = stage.run()
    try:
        command.await_on()
        before = {outcome.number: outcome for outcome in open_run(command.folder).outcomes}
        pid = command.runner() if who == "runner" else command.process.pid
        moment = kit.kill(pid, signal.SIGSTOP)
        was_on = stage.bench.is_on(moment)
        time.sleep(STOP_S)
        off = stage.bench.off_after(moment) if was_on else (0.0, "")
        off_during = [one for one in stage.bench.record() if one["what"] == "drive_on" and one["mono"] > moment + 6.0]
        with suppress(ProcessLookupError):
            os.kill(pid, signal.SIGCONT)
        outcomes, wrong = stage.ended(command)
    finally:
        command.close()
    after = {outcome.number: outcome for outcome in outcomes}
    lost = sum(after.get(number) != outcome for number, outcome in before.items()) + wrong
    bound_s = 1.25 * HEARTBEAT_S / RATE if who == "runner" else 3.0 + 2.0
    took_s = float("nan") if off is None else round(off[0], 2)
    yield figure(
        f"stopped_{who}_off_s", took_s, f"<= {bound_s:g}", took_s <= bound_s, 1, by="" if off is None else off[1],
        on_again_meanwhile=len(off_during),
    )  # fmt: skip
    yield figure(f"stopped_{who}_lost", lost, "0", lost == 0, len(before))


# -- long --------------------------------------------------------------------------------------------------------------


def reopened(folder: Path) -> Iterator[dict[str, Any]]:
    """All links of a served rig (sockets and a terminal) lost and healed, again and again. Faster: nothing turns."""
    bench = kit.Bench(folder, 4.0 * RATE, HEARTBEAT_S, HOLDS)
    try:
        said = worked("reopen", bench.job, CYCLES)
    finally:
        bench.close()
    grown, mb = said["descriptors_grown"], said["rss_grown_mb"]
    yield figure("reopen_descriptors_grown", grown, "0", grown == 0, said["cycles"], links=said["links"])
    yield figure("reopen_rss_grown_mb", mb, "<= 2", mb <= 2.0, said["cycles"], from_cycle=said["from_cycle"])


def three_days(hours: float) -> Iterator[dict[str, Any]]:
    """A run of 72 simulated hours on a motor that is a law; what it holds of memory on the way."""
    with tempfile.TemporaryDirectory() as folder:
        said = worked("days", folder, hours)
    rss = said["rss_mb"]
    at = {f"at_{h}_h": mb for h, mb in rss}
    grown = round(rss[-1][1] - rss[0][1], 1)
    about = {"holds": said["holds"], "simulated_hours": said["hours"], "state": said["state"]}
    yield figure("rss_72h_mb", rss[-1][1], "<= 300", rss[-1][1] <= 300, 1, **at, **about)
    kb = round(1024.0 * grown / max(said["holds_between"], 1), 2)
    yield figure("rss_24_to_72h_grown_mb", grown, "<= 30", grown <= 30.0, 1, kilobytes_a_hold=kb)
    more = said["descriptors"][-1] - said["descriptors"][0]
    yield figure("descriptors_24_to_72h_grown", more, "0", more == 0, 1)


def figures(full: bool) -> Iterator[dict[str, Any]]:
    if sys.platform != "linux":
        return
    with tempfile.TemporaryDirectory(prefix="stress") as place:
        yield from full_disks(Path(place), full)
        stage = Stage(Path(place, "stage"))
        try:
            yield from slow_disk(stage)
            yield from stepped_clock(stage)
            for who in ("runner", "supervisor"):
                yield from stopped(stage, who)
        finally:
            stage.close()
        yield from reopened(Path(place, "reopened"))
    yield from three_days(72.0)


def figure(key: str, value: object, target: str, meets: bool | None, n: int, **more: object) -> dict[str, Any]:
    return {"figure": key, "value": value, "target": target, "meets": meets, "n": n, **more}
