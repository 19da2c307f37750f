"""The machine: what keeps it awake and whether that acts, and what must be well with it before a run begins.

Windows, macOS, the desktop's library and the login manager are fakes here, but for one stand-in program that is run.
"""

from __future__ import annotations

import errno
import os
import signal
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import pytest

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.host import Check, System, checks, keep_awake, predicted_bytes, process_facts, refuse
from sweeprig.conduct.host_system import spawned
from sweeprig.errors import ConfigError
from sweeprig.logbook.traffic import CAP_BYTES

NOON = datetime(2026, 3, 2, 12, tzinfo=UTC).timestamp()


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


# -- checks --------------------------------------------------------------------------------------------------------


def well(**other: object) -> System:
    """A machine on which nothing is wrong, but for `other`."""
    system = System(
        utc=lambda: NOON,
        free_bytes=lambda folder: 10**12,  # noqa: ARG005 - as the real one
        may_write=lambda folder: "",  # noqa: ARG005
        newest=lambda folder: ("job.toml", NOON - 5.0),  # noqa: ARG005
        most_descriptors=lambda: 1024,
        open_descriptors=lambda: 12,
        mounts="/dev/sda1 / ext4 rw 0 0\n",
    )
    return replace(system, **other)  # type: ignore[arg-type]  # the fields of System


def bad(folder: Path, system: System, deadline: float | None = None) -> list[Check]:
    """The checks of a night of 8 h and 600 holds on six instruments that are not well."""
    found = checks(folder, 28_800.0, 600, instruments=6, deadline_utc=deadline, system=system)
    return [check for check in found if not check.ok]


def test_a_good_machine_passes(tmp_path: Path) -> None:
    """Nothing is wrong with a good machine, each check has a sentence, and nothing is refused."""
    found = checks(tmp_path, 28_800.0, 600, instruments=6, deadline_utc=NOON + 36_000.0, system=well())
    assert [check.name for check in found if not check.ok] == []
    assert len({check.name for check in found}) == len(found) == 7
    assert all(check.sentence for check in found)
    refuse(found)


@pytest.mark.parametrize(
    ("wrong", "name", "words"),
    [
        ({"free_bytes": lambda _: 200_000_000}, "disk", "200 MB are free"),
        ({"may_write": lambda _: "Read-only file system"}, "folder", "Read-only file system"),
        ({"open_descriptors": lambda: 1000}, "descriptors", "ulimit -n"),
        ({"utc": lambda: 86_400.0, "newest": lambda _: None}, "clock", "1970-01-02 00:00 UTC: it is not set"),
        ({"utc": lambda: 4.2e9}, "clock", "2103-"),
        ({"utc": lambda: 1e30}, "clock", "it is not set"),
        ({"mounts": "server:/x / ext4 rw 0 0\nserver:/home /tmp nfs4 rw 0 0\n"}, "file system", "nfs4"),
    ],
)
def test_what_cannot_finish_is_refused(wrong: dict[str, object], name: str, words: str) -> None:
    """Each thing that would end the run before its end stops the start, with its figure, as an error of the input."""
    found = bad(Path("/tmp/sweeprig-runs-not-there"), well(**wrong))
    assert [check.name for check in found] == [name]
    assert words in found[0].sentence
    with pytest.raises(ConfigError) as caught:
        refuse(found)
    assert words in str(caught.value)
    assert (caught.value.exit_code, caught.value.topic) == (2, "unattended")


def test_everything_that_refuses_is_said_at_once(tmp_path: Path) -> None:
    """Who mends the disk learns of the descriptors too."""
    system = well(free_bytes=lambda _: 0, most_descriptors=lambda: 16)
    with pytest.raises(ConfigError, match=r"0 MB are free.*16 descriptors are allowed"):
        refuse(bad(tmp_path, system))


def test_what_may_be_wrong_is_only_said(tmp_path: Path) -> None:
    """A newer file, a disk that does not tell its room, and a near deadline stop nothing."""

    def no_answer(_: Path) -> int:
        raise OSError(errno.EIO, "Input/output error")

    system = well(newest=lambda _: ("old", NOON + 3600.0), free_bytes=no_answer)
    found = bad(tmp_path, system, deadline=NOON + 3600.0)
    assert [check.name for check in found] == ["disk", "file times", "deadline"]
    assert "3600 s newer than now" in found[1].sentence
    assert "1.0 h are left" in found[2].sentence
    with pytest.raises(ConfigError):
        refuse([*found, Check("x", False, "a proof that refuse can refuse", refuses=True)])


def test_a_deadline_in_the_past_is_refused(tmp_path: Path) -> None:
    """A job of last week asks for nothing that could be done, and says both times."""
    with pytest.raises(ConfigError, match=r"2026-03-02 11:00 UTC is past; now is 2026-03-02 12:00 UTC"):
        refuse(bad(tmp_path, well(), deadline=NOON - 3600.0))


def test_unlimited_descriptors_are_enough(tmp_path: Path) -> None:
    """A system without a limit refuses nothing."""
    assert bad(tmp_path, well(most_descriptors=lambda: None)) == []


def test_predicted_size_covers_the_demo() -> None:
    """Own earlier output: the demo's run (209 holds, 3356 s) left 3.7 MB of logbook, 5.0 of traffic, 0.4 of the rest.

    The prediction is above that, and at most three times as much; traffic is counted up to its cap.
    """
    left = 3_715_072 + 5_012_878 + 300_930 + 58_770
    assert left < predicted_bytes(3356.0, 209) < 3 * left
    day = predicted_bytes(86_400.0, 0) - BOUNDS["room_report_bytes"] - 86_400.0 * BOUNDS["room_logbook_rate"]
    assert day == pytest.approx(CAP_BYTES)


def test_the_real_machine_answers(tmp_path: Path) -> None:
    """With the real calls, under a folder that is not there yet: each check answers, and leaves nothing behind."""
    found = checks(tmp_path / "runs" / "later", 60.0, 5, instruments=4, system=System())
    assert [check.name for check in found] == ["file system", "folder", "disk", "descriptors", "clock", "file times"]
    assert list(tmp_path.iterdir()) == []
    assert next(check for check in found if check.name == "folder").ok


def test_a_file_from_the_future_is_seen(tmp_path: Path) -> None:
    """The real folder's times: an hour ahead is seen, an hour ago is not."""
    file = tmp_path / "left.toml"
    file.write_text("", "utf-8")
    now = SystemClock().utc()
    for shift, names in ((3600.0, ["file times"]), (-3600.0, [])):
        os.utime(file, (now + shift, now + shift))
        found = checks(tmp_path, 60.0, 5, system=System())
        assert [check.name for check in found if check.name == "file times" and not check.ok] == names


def _is_open(descriptor: int) -> bool:
    try:
        os.fstat(descriptor)
    except OSError:
        return False
    return True


@pytest.mark.skipif(sys.platform != "linux", reason="the facts of processes are read from /proc")
def test_process_facts_count() -> None:
    """Each descriptor counts as one, a page that is used counts in the memory, and another process can be asked."""
    before = process_facts()
    with open(os.devnull, "rb"), open(os.devnull, "rb"):  # noqa: PTH123 - nothing but a descriptor is wanted
        more = process_facts()
    ballast = b"x" * 50_000_000
    heavy = process_facts()
    assert before.descriptors is not None
    assert before.rss_bytes is not None
    assert heavy.rss_bytes is not None
    assert more.descriptors == before.descriptors + 2
    assert heavy.rss_bytes > before.rss_bytes + len(ballast) // 2
    assert before.descriptors == process_facts(os.getpid()).descriptors == sum(map(_is_open, range(4096)))
    assert process_facts(2**22 + 1) == type(before)(None, None)
