"""Kills: runner, supervisor and both at random instants of long accelerated runs over real sockets and a terminal.

A share of the thousand in everyday form; FULL=1 takes all. Each chain has a bench and a run of its own, and a seed.
"""

from __future__ import annotations

import math
import os
import random
import sys
import tempfile
import threading
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass, field
from importlib import import_module
from itertools import pairwise
from pathlib import Path
from typing import Any

from sweeprig.holds import Outcome, Status
from sweeprig.opened import open_run

kit: Any = import_module("killing")
"""Beside this file, which is on the path as the script of the figures is."""

SEED = 20261201
RATE = 10.0
HEARTBEAT_S = 10.0
"""Of the board, bench seconds: long against the two processes' own switching off, so that this is what is measured."""
HOLDS = 12
RUN_IN_S = 3
KILLS = {False: 60, True: 1000}
CHAINS = 6
MIX = ("runner",) * 8 + ("supervisor",) + ("both",)
OFF_WITHIN_S = 2.0
FINDINGS = ("stall_duty_percent", "start_duty_percent", "top_speed_rpm", "stall_speed_rpm")
MOST_IN_A_ROW = 4
"""Kills with no hold done between, of the five that the supervisor bears: then one hold is let through."""


@dataclass
class Tally:
    """What came of the kills. `off_s`: real seconds to off by who was killed; `left_on`, `lost`, `doubled`: counts."""

    kills: Counter[str] = field(default_factory=Counter)
    off_s: dict[str, list[float]] = field(default_factory=lambda: {who: [] for who in set(MIX)})
    by_heartbeat: int = 0
    left_on: int = 0
    lost: int = 0
    doubled: int = 0
    unbroken: dict[str, Any] = field(default_factory=dict)
    findings: list[tuple[dict[str, Any], int]] = field(default_factory=list)
    """Of each run that came to its end: what it found, and how many settings it had passed over."""
    start_s: list[float] = field(default_factory=list)
    troubles: list[str] = field(default_factory=list)


class Chain:
    """Run after run on one bench until its kills are used up; the last run is worked to its end."""

    def __init__(self, folder: Path, seed: str, kills: int, tally: Tally) -> None:
        self.dice, self.left, self.tally = random.Random(seed), kills, tally
        self.bench = kit.Bench(folder, RATE, HEARTBEAT_S, HOLDS, RUN_IN_S)
        self.command: Any = None

    def work(self) -> None:
        try:
            while self.left > 0:
                self._one_run()
        except Exception as error:  # noqa: BLE001 - a chain that breaks is a figure that is not met, not a crash
            self.tally.troubles.append(f"{type(error).__name__}: {error}")
        finally:
            if self.command is not None:
                self.command.close()
            self.bench.close()

    def _one_run(self) -> None:
        """A run from its start to its finished end, killed on the way as often as it bears."""
        command = self.command = self.bench.run()
        command.await_line("hold 1:")
        folder, before, in_a_row, done = command.folder, dict[int, Outcome](), 0, 0
        while self.left > 0:
            self._pause(command, in_a_row >= MOST_IN_A_ROW)
            if command.process.poll() is not None:
                break
            now = known(folder)
            more = sum(str(outcome.status) == "done" for outcome in now.values())
            in_a_row, done = (0 if more > done else in_a_row + 1), more
            before.update(now)
            command = self._kill(command, folder)
        if command.wait(10 * kit.PATIENCE_S) not in (0, 1):
            raise RuntimeError(f"a run ended with {command.process.returncode}:\n{command.text[-2000:]}")
        self._judge(folder, before)

    def _pause(self, command: Any, lets_one_through: bool) -> None:
        """A random time from now, or from when the drive is on; after many kills with nothing done, behind a hold."""
        waits_for_drive, pause_s = self.dice.random() < 0.6, self.dice.expovariate(1.0)
        count = len(command.lines)
        if lets_one_through:
            # the line of a further hold without a word of discarding between: one was done
            kit.until(lambda: _done_since(command, count) or command.process.poll() is not None, "a hold is done")
        if waits_for_drive:
            kit.until(lambda: self.bench.is_on() or command.process.poll() is not None, "the drive is on")
            pause_s *= 0.3
        end = time.monotonic() + pause_s
        while time.monotonic() < end and command.process.poll() is None:
            time.sleep(kit.LOOK_S)

    def _kill(self, command: Any, folder: Path) -> Any:
        """One kill; the command that works on the run afterwards."""
        who = self.dice.choice(MIX)
        runner = command.runner()
        targets = {"runner": [runner], "supervisor": [command.process.pid], "both": [runner, command.process.pid]}[who]
        if 0 in targets:
            return command  # between two runners: nobody is there to be killed
        moment = time.monotonic()
        for pid in targets:
            with suppress(ProcessLookupError):
                kit.kill(pid)
        self.left -= 1
        self.tally.kills[who] += 1
        self._off(who, moment)
        if who == "runner":
            kit.until(lambda: command.runner() not in (0, runner) or command.process.poll() is not None, "another one")
            self.tally.start_s.append(time.monotonic() - moment)
            return command
        command.process.wait()
        kit.until(lambda: not kit.alive(runner), "the runner ends")
        command.close()
        self.command = self.bench.command("resume", folder, "--plain")
        self.command.await_runner()
        return self.command

    def _off(self, who: str, moment: float) -> None:
        """How long the drive stayed on, by the bench's own record."""
        try:
            took_s, why = kit.until(lambda: self.bench.off_after(moment), "off", 5.0)
        except TimeoutError:
            self.tally.left_on += 1
            return
        if why:
            self.tally.off_s[who].append(took_s)
            self.tally.by_heartbeat += why == "heartbeat"

    def _judge(self, folder: Path, before: dict[int, Outcome]) -> None:
        run = open_run(folder)
        after = {outcome.number: outcome for outcome in run.outcomes}
        self.tally.lost += sum(after.get(number) != outcome for number, outcome in before.items())
        self.tally.lost += len(run.unfinished)
        self.tally.doubled += len(run.outcomes) - len(after)
        self.tally.findings.append((findings(folder), passed_over(run.outcomes)))
        self.tally.left_on += self.bench.is_on()


def passed_over(outcomes: list[Outcome]) -> int:
    """Settings of which no hold was done, though three or more were begun: kills had hit each of them."""
    begun, done = Counter[Any](), set[Any]()
    for outcome in outcomes:
        hold = outcome.hold
        setting = (hold.purpose, hold.approach, hold.condition, hold.duty_percent)
        begun[setting] += 1
        if outcome.status is Status.DONE:
            done.add(setting)
    return sum(count >= 3 and setting not in done for setting, count in begun.items())


def ratios(whole: dict[str, Any], killed: dict[str, Any]) -> list[tuple[float, str, tuple[str, ...]]]:
    """Differences of findings over the uncertainty of the difference, each with the finding's name and the flags that
    it has beyond those of the unbroken run: settings lost to kills three times are passed over, and must be flagged."""
    both = [(name, whole[name], killed[name]) for name in FINDINGS]
    return [
        (
            abs(here["value"] - there["value"]) / math.hypot(here["u"], there["u"]),
            name,
            tuple(sorted(set(here["flags"]) - set(there["flags"]))),
        )
        for name, there, here in both
        if there["u"] is not None and here["u"] is not None
    ]


def _done_since(command: Any, count: int) -> bool:
    words = [line for _, line in command.lines[count:]]
    began = [place for place, line in enumerate(words) if line.startswith("hold ")]
    return any(
        not any("discarded" in line or "abandoned" in line or "switches off" in line for line in words[one:two])
        for one, two in pairwise(began)
    )


def known(folder: Path) -> dict[int, Outcome]:
    return {outcome.number: outcome for outcome in open_run(folder).outcomes}


def findings(folder: Path) -> dict[str, Any]:
    condition = open_run(folder).findings.as_json()["conditions"][0]
    return {name: condition[name] for name in FINDINGS}


def unbroken(folder: Path, tally: Tally) -> None:
    """The same job on its own bench, never killed."""
    bench = kit.Bench(folder, RATE, HEARTBEAT_S, HOLDS, RUN_IN_S)
    command = bench.run()
    try:
        command.wait(10 * kit.PATIENCE_S)
        tally.unbroken = findings(command.folder)
    finally:
        command.close()
        bench.close()


def figures(full: bool) -> Iterator[dict[str, Any]]:
    """The kills. `n` is how many there were; what the machine bears in the time."""
    if sys.platform != "linux":
        return
    kills = int(os.environ.get("KILLS", KILLS[full]))
    tally = Tally()
    with tempfile.TemporaryDirectory(prefix="kills") as place:
        chains = [Chain(Path(place, str(k)), f"{SEED} {k}", -(-kills // CHAINS), tally) for k in range(CHAINS)]
        threads = [threading.Thread(target=chain.work) for chain in chains]
        threads.append(threading.Thread(target=unbroken, args=(Path(place, "unbroken"), tally)))
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    yield from told(tally)


def told(tally: Tally) -> Iterator[dict[str, Any]]:
    """The tally as figures."""
    n = tally.kills.total()
    for trouble in tally.troubles:
        print(trouble, file=sys.stderr)
    broken = bool(tally.troubles)
    for key in ("lost", "doubled"):
        count = getattr(tally, key)
        yield figure(f"kill_{key}_outcomes", count, "0", count == 0 and not broken, n)
    yield figure("kill_drive_left_on", tally.left_on, "0", tally.left_on == 0 and not broken, n)
    by_them = tally.off_s["runner"] + tally.off_s["supervisor"]
    worst_s = max(by_them, default=math.nan)
    yield figure("kill_off_worst_s", round(worst_s, 2), f"<= {OFF_WITHIN_S:g}", worst_s <= OFF_WITHIN_S, len(by_them))
    heartbeat_s = max(tally.off_s["both"], default=math.nan) * RATE
    bound = 1.25 * HEARTBEAT_S
    yield figure(
        "kill_both_off_worst_bench_s",
        round(heartbeat_s, 1),
        f"<= {bound:g}",
        heartbeat_s <= bound,
        len(tally.off_s["both"]),
    )
    yield figure("kill_off_by_heartbeat", tally.by_heartbeat, "", None, sum(map(len, tally.off_s.values())))
    found = [one for killed, _ in tally.findings if tally.unbroken for one in ratios(tally.unbroken, killed)]
    for key, these in (
        ("kill_findings_over_u", [one for one in found if not one[2]]),
        ("kill_flagged_findings_over_u", [one for one in found if one[2]]),
    ):
        worst = max(these, default=(math.nan, "", ()))
        target, meets = ("<= 4", worst[0] <= 4.0) if key == "kill_findings_over_u" else ("", None)
        yield {**figure(key, round(worst[0], 2), target, meets, len(these)), "finding": worst[1], "flags": worst[2]}
    passed = sum(passed > 0 for _, passed in tally.findings)
    yield figure("kill_runs_with_settings_passed_over", passed, "", None, len(tally.findings))
    yield figure(
        "kill_next_runner_s", round(sum(tally.start_s) / (len(tally.start_s) or 1), 2), "", None, len(tally.start_s)
    )
    yield figure("kills_by_kind", dict(tally.kills), "", None, n)


def figure(key: str, value: object, target: str, meets: bool | None, n: int) -> dict[str, Any]:
    return {"figure": key, "value": value, "target": target, "meets": meets, "n": n}
