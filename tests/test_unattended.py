"""Whole commands on a served bench, killed, stopped and woken at their worst moments.

Real processes, real sockets, a real pseudo-terminal. What the drive did is taken from the bench's own record.
"""

from __future__ import annotations

import re
import signal
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from sweeprig.holds import Outcome, Status
from sweeprig.opened import open_run

RATE = 10.0
HEARTBEAT_S = 10.0 / RATE
"""Real seconds."""
OFF_WITHIN_S = 2.0
"""The plan's figure: the drive off after a kill."""
SLACK_S = 1.0
"""A machine that runs other tests beside this one."""

pytestmark = [
    pytest.mark.skipif(sys.platform != "linux", reason="processes are found in /proc"),
    pytest.mark.slow,
    pytest.mark.timeout(180),
]

Make = Callable[..., Any]


@pytest.fixture
def kit(reference: Callable[[str], Any]) -> Any:
    return reference("killing")


@pytest.fixture
def bench(kit: Any, tmp_path: Path) -> Iterator[Any]:
    bench = kit.Bench(tmp_path / "bench", RATE, holds=40)
    yield bench
    bench.close()


@pytest.fixture
def started(bench: Any) -> Iterator[Make]:
    """`started("resume", folder)`, `started()` for a new run; none of it outlives the test."""
    commands = []

    def start(*arguments: object, cwd: Path | None = None) -> Any:
        plain = ["--plain"] if "resume" in arguments else []
        commands.append(bench.command(*arguments, *plain, cwd=cwd) if arguments else bench.run(cwd))
        return commands[-1]

    yield start
    for command in commands:
        command.close()


def known(folder: Path) -> dict[int, Outcome]:
    """Outcomes by number, as another process reads them at this moment."""
    return {outcome.number: outcome for outcome in open_run(folder).outcomes}


def nothing_lost(folder: Path, *before: dict[int, Outcome]) -> None:
    """Whatever was committed before a kill is there, equal; each number once; each hold begun has its outcome."""
    run = open_run(folder)
    numbers = [outcome.number for outcome in run.outcomes]
    assert len(numbers) == len(set(numbers))
    assert run.unfinished == []
    after = {outcome.number: outcome for outcome in run.outcomes}
    for earlier in before:
        assert {number: after[number] for number in earlier} == earlier


def off_in_time(kit: Any, bench: Any, moment: float, within_s: float = OFF_WITHIN_S) -> str:
    """Why the drive went off; it was on, and went off in time."""
    assert bench.is_on(moment), "the drive was not on when it mattered"
    took_s, why = kit.until(lambda: bench.off_after(moment), "the drive goes off", within_s + 2.0)
    assert took_s <= within_s
    return str(why)


def test_killed_at_every_end(kit: Any, bench: Any, started: Make, tmp_path: Path) -> None:
    """Runner, supervisor, both killed with the drive on: off within 2 s (both: by the heartbeat), nothing lost or
    doubled, and the run goes on. Started in a folder of a user's modules that have the names of ours."""
    hostile = tmp_path / "users"
    hostile.mkdir()
    for name in ("json", "click", "signal", "sweeprig"):
        (hostile / f"{name}.py").write_text("raise SystemExit('imported from the current folder')\n", "utf-8")

    command = started(cwd=hostile)
    command.await_line("hold 3:")
    command.await_on()
    runner, first = command.runner(), known(command.folder)
    assert off_in_time(kit, bench, kit.kill(runner)) == "OUTP OFF"
    moment = bench.last()["mono"]
    kit.until(lambda: bench.off_after(moment, "supply"), "the supply goes off", OFF_WITHIN_S)
    command.await_line("hold 6:")
    assert command.saw("the runner is started again from the logbook")

    command.await_on()
    runner, second = command.await_runner(runner), known(command.folder)
    moment = kit.kill(command.process.pid)
    assert off_in_time(kit, bench, moment) == "OUTP OFF"
    kit.until(lambda: not kit.alive(runner), "the runner ends")
    said = bench.done("status", command.folder).stdout
    assert "parked" in said
    assert f"No process works on it. Go on with: sweeprig resume {command.folder}" in said

    resumed = started("resume", command.folder)
    resumed.await_line("hold ", times=4)
    resumed.await_on()
    third = known(command.folder)
    runner = resumed.runner()
    resumed.process.send_signal(signal.SIGSTOP)  # so that it sees nothing of the runner's end
    kit.kill(runner)
    moment = kit.kill(resumed.process.pid)
    if bench.is_on(moment):  # the runner may have been between two holds
        assert off_in_time(kit, bench, moment, HEARTBEAT_S + SLACK_S) == "heartbeat"
    said = bench.done("status", command.folder).stdout
    assert "broken off while" in said
    assert "Its process ended without proving off" in said
    assert "No process works on it" in said

    last = started("resume", command.folder)
    last.await_line("hold ", times=3)
    last.signal(signal.SIGTERM)
    assert last.wait() == 5
    nothing_lost(command.folder, first, second, third)
    assert [o.status for o in open_run(command.folder).outcomes].count(Status.ABANDONED) == 2
    assert not bench.is_on()
    assert not bench.is_on(of="supply")


def test_stopped_and_woken(kit: Any, bench: Any, started: Make) -> None:
    """A runner that is stopped is replaced after 5 s; a supervisor that is stopped has its runner switch off after 3 s,
    and the run goes on by itself once it is woken; so it does when both were."""
    command = started()
    command.await_line("hold 3:")
    command.await_on()
    runner = command.runner()
    moment = kit.kill(runner, signal.SIGSTOP)
    off_in_time(kit, bench, moment, HEARTBEAT_S + SLACK_S)
    command.await_line("the runner said nothing for 5")
    fresh = command.await_runner(runner)
    assert not kit.alive(runner)

    command.await_line("hold 5:")
    command.await_on()
    before = known(command.folder)
    moment = command.signal(signal.SIGSTOP)
    kit.until(lambda: not kit.alive(fresh), "the runner ends", 3.0 + OFF_WITHIN_S + SLACK_S)
    took_s, _ = bench.off_after(max(event["mono"] for event in bench.record() if event["what"] == "drive_on"))
    assert bench.last()["mono"] - moment <= 3.0 + OFF_WITHIN_S, took_s
    assert not bench.is_on()
    assert not bench.is_on(of="supply")
    time.sleep(max(0.0, moment + 6.0 - time.monotonic()))
    command.signal(signal.SIGCONT)
    command.await_line("no sign of the supervisor for 3", seconds=5.0)
    runner = command.await_runner(fresh)

    command.await_line("session 3")
    command.await_on()
    moment = command.signal(signal.SIGSTOP)
    kit.kill(runner, signal.SIGSTOP)
    off_in_time(kit, bench, moment, HEARTBEAT_S + SLACK_S)
    time.sleep(max(0.0, moment + 4.0 - time.monotonic()))
    held = len([line for _, line in command.lines if line.startswith("hold ")])
    kit.kill(runner, signal.SIGCONT)
    command.signal(signal.SIGCONT)
    # Who looks first decides whether another session begins or the hold alone is lost.
    command.await_line("hold ", times=held + 2)
    command.await_on()
    command.signal(signal.SIGINT)
    command.signal(signal.SIGINT)
    assert command.wait() == 5
    nothing_lost(command.folder, before)
    assert not bench.is_on()


def test_off_on_a_rig_in_use(kit: Any, bench: Any, started: Make) -> None:
    """`off` orders the holder off, and says so; one that hangs is named, exit 3, within its two seconds; --take-over
    kills it and proves off."""
    command = started()
    command.await_line("hold 3:")
    command.await_on()
    off = started("off", bench.rig)
    off.await_line(f"ordered off: process {command.process.pid} on")
    off_in_time(kit, bench, off.lines[0][0])
    assert off.wait() == 0, off.text
    assert off.saw("off, and shown to be off, after")
    assert not bench.is_on(of="supply")
    assert command.wait() == 5
    assert command.saw("switched off by order")

    resumed = started("resume", command.folder)
    resumed.await_line("hold ", times=2)
    resumed.await_on()
    runner = resumed.runner()
    kit.kill(runner, signal.SIGSTOP)
    said = bench.done("off", bench.job)
    assert said.returncode == 3
    assert f"process {resumed.process.pid} on" in said.stderr
    assert str(command.folder) in said.stderr
    assert "was ordered off and did not confirm it within 2 s" in said.stderr
    assert "--take-over" in said.stderr
    assert resumed.wait() == 5  # the supervisor found the runner hanging, switched off, and obeyed in its place
    assert not bench.is_on()

    third = started("resume", command.folder)
    third.await_line("hold ", times=2)
    third.await_on()
    runner = third.runner()
    for pid in (third.process.pid, runner):
        kit.kill(pid, signal.SIGSTOP)
    said = bench.done("off", bench.rig, "--take-over")
    assert said.returncode == 0, said.stderr
    assert f"killed: process {third.process.pid} on" in said.stderr
    assert third.wait() == -signal.SIGKILL
    kit.until(lambda: not kit.alive(runner), "the runner is gone")
    assert "board and supply confirmed off" in said.stdout
    assert not bench.is_on()
    assert not bench.is_on(of="supply")


def test_two_on_one_rig(kit: Any, bench: Any, started: Make) -> None:
    """Of two runs that are started together exactly one works; the other says who has the rig, exit 3, and leaves no
    folder. Then pause, ready and stop are obeyed, and a run that nobody works on takes no request."""
    two = [started(), started()]
    loser = kit.until(lambda: next((one for one in two if one.process.poll() is not None), None), "one is refused")
    winner = next(one for one in two if one is not loser)
    assert loser.wait() == 3
    assert f"process {winner.process.pid} on" in loser.text
    assert "sweeprig off RIG" in loser.text
    winner.await_line("hold 2:")
    assert len(list(bench.runs.iterdir())) == 1
    again = bench.done("resume", winner.folder)
    assert again.returncode == 3
    assert f"process {winner.process.pid} on" in again.stderr

    assert bench.done("pause", winner.folder).returncode == 0
    winner.await_line("WAITING FOR A PERSON: paused by request")
    assert not bench.is_on()
    assert not bench.is_on(of="supply")
    said = bench.done("status", winner.folder).stdout
    assert "waiting for a person" in said
    assert "No process" not in said
    assert bench.done("ready", winner.folder).returncode == 0
    winner.await_line("session 2")
    winner.await_on()
    assert bench.done("stop", winner.folder).returncode == 0
    assert winner.wait() == 5
    assert not list((winner.folder / "requests").iterdir())
    nobody = bench.done("stop", winner.folder)
    assert nobody.returncode == 3
    assert "no process works on this run" in nobody.stderr
    assert not list((winner.folder / "requests").iterdir())
    nothing_lost(winner.folder)


def test_a_trip_ends_the_night(kit: Any, bench: Any, started: Make) -> None:
    """Protection trips, and the runner is killed while it still proves off: exit 4, drive and supply off, no other
    runner, and `status` says to find the cause first."""
    text = bench.rig.read_text("utf-8")
    limit = re.search(r'^current = "(.+)"$', text, re.MULTILINE)
    assert limit is not None
    bench.rig.write_text(text.replace(limit[0], 'current = "0.03 A"', 1), "utf-8")
    command = started()
    command.await_line("TRIPPED: ")
    if runner := command.runner():
        kit.kill(runner)
    assert command.wait() == 4
    assert not command.saw("started again")
    assert command.saw("protection switched the drive off")
    assert not bench.is_on()
    assert not bench.is_on(of="supply")
    assert "Find the cause of the trip" in bench.done("status", command.folder).stdout


@pytest.mark.parametrize(
    ("signals", "discards"),
    [
        ([signal.SIGTSTP, signal.SIGINT], False),
        ([signal.SIGINT, signal.SIGINT], True),
        ([signal.SIGTERM], True),
        ([signal.SIGHUP], True),
    ],
    ids=["ctrl-z then ctrl-c", "ctrl-c twice", "SIGTERM", "SIGHUP"],
)
def test_signals(kit: Any, bench: Any, started: Make, signals: list[signal.Signals], discards: bool) -> None:
    """Ctrl-Z changes nothing; Ctrl-C finishes the hold in hand; twice, a termination or a closed terminal switch off at
    once. Exit 5, drive and supply off, and the runner is gone."""
    command = started()
    command.await_line("hold 2:")
    command.await_on()
    runner = command.runner()
    for number in signals:
        moment = command.signal(number)
        time.sleep(0.1)
    assert command.wait() == 5
    assert not kit.alive(runner)
    assert not bench.is_on()
    assert not bench.is_on(of="supply")
    statuses = {o.number: o.status for o in open_run(command.folder).outcomes}
    assert statuses[2] is (Status.DISCARDED if discards else Status.DONE)
    assert len(statuses) == 2
    assert command.saw("a run cannot be put to sleep") is (signal.SIGTSTP in signals)
    if discards:
        assert bench.off_after(moment)[0] <= OFF_WITHIN_S
    nothing_lost(command.folder)
