"""The machine: what keeps it awake, and whether that acts.

Windows, macOS, the desktop's library and the login manager are fakes here, but for one stand-in program that is run.
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager
from pathlib import Path

import pytest

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.host import System, keep_awake
from sweeprig.conduct.host_system import spawned


class FakeChild:
    pid = 4711

    def __init__(self, ends: int | None = None) -> None:
        self.ends = ends

    def poll(self) -> int | None:
        return self.ends


class Machine:
    """A faked machine: which tools it has, whether their children live, and what its lists say."""

    def __init__(self, platform: str, tools: tuple[str, ...] = (), listing: str = "", code: int = 0) -> None:
        self.platform, self.tools, self.listing, self.code = platform, tools, listing, code
        self.ends: int | None = None
        self.started: list[list[str]] = []
        self.alive = 0
        self.waited = 0.0
        self.states: list[int] = []
        self.state_answers = [0x80000000, 0x80000001, 0x80000001]
        self.held: Callable[[], AbstractContextManager[tuple[bool, str]] | None] = lambda: None

    @contextmanager
    def spawn(self, command: list[str]) -> Iterator[FakeChild]:
        self.started.append(command)
        self.alive += 1
        try:
            yield FakeChild(self.ends)
        finally:
            self.alive -= 1

    def wait(self, seconds: float) -> None:
        self.waited += seconds

    def execution_state(self, flags: int) -> int:
        self.states.append(flags)
        return self.state_answers[len(self.states) - 1]

    def system(self) -> System:
        return System(
            platform=self.platform,
            pid=99,
            which=lambda name: f"/usr/bin/{name}" if name in self.tools else None,
            spawn=self.spawn,
            ask=lambda command: (self.code, self.listing),  # noqa: ARG005 - as the real one
            wait=self.wait,
            wakepy=lambda: self.held(),
            execution_state=self.execution_state,
        )


LISTED = (
    "WHO UID USER PID COMM WHAT WHY MODE\n"
    "NetworkManager 0 root 812 NetworkManager sleep sleep delay\n"
    "sweeprig 1000 ada 4711 systemd-inhibit idle:sleep:handle-lid-switch a motor is being characterised block\n"
)


def test_linux_listed_is_awake() -> None:
    """An inhibitor that lives and that the login manager lists is believed, and ends with the block."""
    machine = Machine("linux", ("systemd-inhibit",), LISTED)
    with keep_awake(machine.system()) as awake:
        assert awake.active
        assert awake.how.startswith("the machine is kept awake by the login manager")
        assert machine.alive == 1
    assert machine.alive == 0
    command = machine.started[0]
    assert {"--what=idle:sleep:handle-lid-switch", "--mode=block", "--who=sweeprig"} <= set(command)


@pytest.mark.parametrize(
    ("listing", "code", "words"),
    [
        ("WHO UID USER PID COMM WHAT WHY MODE\n", 0, "does not name it"),
        (LISTED.replace("4711", "14711"), 0, "does not name it"),
        (LISTED.replace("block", "delay"), 0, "does not name it"),
        ("Failed to connect to bus: No such file or directory\n", 1, "Failed to connect to bus"),
    ],
)
def test_linux_not_listed_is_not_awake(listing: str, code: int, words: str) -> None:
    """A process that lives is no proof: another's line, one that only delays, or no list at all is a no, in words."""
    machine = Machine("linux", ("systemd-inhibit",), listing, code)
    with keep_awake(machine.system()) as awake:
        assert not awake.active
        assert awake.how.startswith("nothing keeps this machine awake: ")
        assert words in awake.how
        assert machine.alive == 0
    assert machine.waited <= 2 * BOUNDS["awake_s"] + 1e-9


def test_linux_child_that_ends_is_not_awake() -> None:
    """An inhibitor that is refused ends at once, which is said with its exit code; then it is tried without the lid."""
    machine = Machine("linux", ("systemd-inhibit",), LISTED)
    machine.ends = 1
    with keep_awake(machine.system()) as awake:
        assert not awake.active
        assert "ended at once with exit code 1" in awake.how
    assert [command[1] for command in machine.started] == [
        "--what=idle:sleep:handle-lid-switch",
        "--what=idle:sleep",
    ]


@pytest.mark.parametrize(("platform", "tool"), [("linux", "systemd-inhibit"), ("darwin", "caffeinate")])
def test_a_missing_tool_is_named(platform: str, tool: str) -> None:
    """Where the system's tool is not there, that is the reason."""
    with keep_awake(Machine(platform).system()) as awake:
        assert (awake.active, awake.how) == (False, f"nothing keeps this machine awake: {tool} is not on this machine")


def test_an_unknown_system_says_no() -> None:
    """On a system of which no way is known the answer is no."""
    with keep_awake(Machine("plan9").system()) as awake:
        assert not awake.active
        assert "no way is known on plan9" in awake.how


def test_macos_is_bound_to_this_process() -> None:
    """caffeinate is told to end with this process, and is believed once the assertions name it."""
    machine = Machine("darwin", ("caffeinate",), "   pid 4711(caffeinate): [0x1] 00:00:01 PreventUserIdleSystemSleep\n")
    with keep_awake(machine.system()) as awake:
        assert awake.active
        assert "caffeinate" in awake.how
    assert machine.started == [["/usr/bin/caffeinate", "-i", "-s", "-w", "99"]]
    machine.listing = "   pid 12(powerd): [0x1] 00:00:01 PreventUserIdleSystemSleep\n"
    with keep_awake(machine.system()) as awake:
        assert not awake.active


def test_windows_reads_its_state_back() -> None:
    """Asked for twice: the second answer must be the first wish. At the end the wish is taken back."""
    machine = Machine("win32")
    with keep_awake(machine.system()) as awake:
        assert awake.active
        assert machine.states == [0x80000001, 0x80000001]
    assert machine.states[-1] == 0x80000000


@pytest.mark.parametrize("answers", [[0, 0, 0], [0x80000000, 0x80000000, 0x80000000]])
def test_windows_refusal_is_a_no(answers: list[int]) -> None:
    """A call that fails, and one whose state is not there afterwards, are no."""
    machine = Machine("win32")
    machine.state_answers = [*answers, 0]
    with keep_awake(machine.system()) as awake:
        assert (awake.active, "refused" in awake.how) == (False, True)


def test_the_library_is_tried_first_and_believed() -> None:
    """Where the extra is installed and active nothing else is started; where it is not active the system's way is."""

    def held(active: bool) -> Callable[[], AbstractContextManager[tuple[bool, str]]]:
        @contextmanager
        def made() -> Iterator[tuple[bool, str]]:
            yield active, "org.example.SessionManager"

        return made

    machine = Machine("linux", ("systemd-inhibit",), LISTED)
    machine.held = held(True)
    with keep_awake(machine.system()) as awake:
        assert awake.active
        assert "org.example.SessionManager" in awake.how
    assert machine.started == []
    machine.held = held(False)
    with keep_awake(machine.system()) as awake:
        assert awake.active
        assert "login manager" in awake.how


def test_what_a_library_raises_does_not_reach_the_run() -> None:
    """An error while asking, and one while giving back, cost at most the staying awake."""

    @contextmanager
    def broken() -> Iterator[tuple[bool, str]]:
        yield True, "a desktop"
        raise RuntimeError("the session bus has gone")

    def refused() -> AbstractContextManager[tuple[bool, str]]:
        raise RuntimeError("no session bus")

    machine = Machine("linux")
    machine.held = refused
    with keep_awake(machine.system()) as awake:
        assert (awake.active, "RuntimeError" in awake.how) == (False, True)
    machine.held = broken
    with keep_awake(machine.system()) as awake:
        assert awake.active


def test_an_error_of_the_run_passes_through() -> None:
    """What the block raises is the caller's, and the machine may sleep again."""
    machine = Machine("linux", ("systemd-inhibit",), LISTED)
    with pytest.raises(ZeroDivisionError), keep_awake(machine.system()):
        raise ZeroDivisionError
    assert machine.alive == 0


STAND_IN = """#!/bin/sh
# lists the processes that named themselves and are still there, or names itself and runs its command
if [ "$1" = --list ]; then
  for pid in $(cat "$PLACE/pids"); do
    kill -0 "$pid" && echo "sweeprig 0 root $pid systemd-inhibit idle:sleep why block"
  done 2>/dev/null
  exit 0
fi
echo $$ >> "$PLACE/pids"
shift 4
exec "$@"
"""


@pytest.mark.skipif(sys.platform != "linux", reason="the login manager is Linux's")
def test_it_ends_with_a_killed_process(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """With real processes: the child acts, and after a kill -9 of the run it ends by itself."""
    tool = tmp_path / "systemd-inhibit"
    tool.write_text(STAND_IN, "utf-8")
    tool.chmod(0o755)
    monkeypatch.setenv("PATH", f"{tmp_path}:{os.environ['PATH']}")
    monkeypatch.setenv("PLACE", str(tmp_path))
    lines = (
        "from dataclasses import replace",
        "from sweeprig.conduct.host import SYSTEM, keep_awake",
        "with keep_awake(replace(SYSTEM, wakepy=lambda: None)) as awake:",
        "    print(awake.active, flush=True)",
        "    input()",
    )
    run = subprocess.Popen([sys.executable, "-c", "\n".join(lines)], stdin=subprocess.PIPE, stdout=subprocess.PIPE)
    assert run.stdin is not None
    assert run.stdout is not None
    with run.stdin, run.stdout:
        assert run.stdout.readline() == b"True\n"
        (child,) = (int(pid) for pid in (tmp_path / "pids").read_text().split())
        assert Path(f"/proc/{child}").exists()
        run.send_signal(signal.SIGKILL)
        run.wait(30.0)
    clock = SystemClock()
    until = clock.now() + 30.0
    while _runs(child) and clock.now() < until:
        clock.wait(clock.now() + 0.02)
    assert not _runs(child)


def _runs(pid: int) -> bool:
    """Alive, and not merely waiting to be reaped by whoever inherited it."""
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


@pytest.mark.skipif(os.name != "posix", reason="uses a shell's program")
def test_a_child_ends_with_its_block() -> None:
    """The real start of a child: alive inside, in a session of its own, reaped after."""
    with spawned([sys.executable, "-I", "-S", "-c", "import sys; sys.stdin.buffer.read()"]) as child:
        assert child.poll() is None
        assert os.getsid(child.pid) == child.pid
    assert child.poll() is not None
