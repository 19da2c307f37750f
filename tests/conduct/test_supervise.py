"""The supervisor with runners that misbehave: real processes that say what a test tells them to.

Taking over on real links is in test_unattended.py; here `off` is replaced by a note of its call.
"""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, cast

import pytest

from sweeprig.clock import SystemClock
from sweeprig.conduct import supervise
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.messages import MOST_LINE, Failed, Hello, failed, line_of, understood
from sweeprig.conduct.requests import ask
from sweeprig.conduct.rig import RigUse
from sweeprig.conduct.states import Ending, Event, Orders, State
from sweeprig.conduct.supervise import LOG, Supervisor, runner_command
from sweeprig.conduct.switch_off import Off
from sweeprig.errors import LinkLost, OffNotProved, RigError, RunInUse, SweeprigError, Where
from sweeprig.job import document, load, shipped
from sweeprig.logbook.run_folder import create_run_folder

FINISHED = Ending(State.FINISHED, "nothing more to ask for")
TRIP = Event("trip", 9.0, {"rule": "over_current", "evidence": "supply.amps read 2 A, limit 1.5 A"})
HOLD_TRIPPED = Event("hold_ended", 8.0, {"number": 4, "status": "tripped", "verdict": "undecided",
                                         "reason": "over_current: 2 A", "speed_rpm": None})  # fmt: skip
HOLD_DONE = Event("hold_ended", 8.0, {"number": 4, "status": "done", "verdict": "turning", "reason": "",
                                      "speed_rpm": None})  # fmt: skip
PATIENT = "for line in sys.stdin: pass\n"
"""Lives until its input ends."""


def saying(*parts: Any, then: str = "") -> str:
    """A runner's program: it says these (values or raw bytes), then does `then`."""
    lines = [part if isinstance(part, bytes) else line_of(part) for part in parts]
    return (
        f"import os, signal, sys, time\nfor line in {lines!r}:\n    os.write(1, line)\n"
        f"{then or 'pass'}\n"
    )  # fmt: skip


HELLO = b'{"hello": 1}\n'
KILLED = "os.kill(os.getpid(), signal.SIGKILL)\n"


@dataclass
class Bed:
    """A supervisor whose runners are the given programs, one after another; the last one again and again."""

    folder: Path
    programs: list[str]
    orders: Orders = field(default_factory=Orders)
    events: list[Event] = field(default_factory=list)
    reasons: list[str] = field(default_factory=list)
    offs: list[int] = field(default_factory=list)
    pids: list[int] = field(default_factory=list)
    on_event: Callable[[Event], None] = lambda _: None
    off_fails: int = 0

    def command(self, because: str) -> list[str]:
        self.reasons.append(because)
        program = self.folder / "program.py"
        program.write_text(self.programs[min(len(self.reasons), len(self.programs)) - 1], "utf-8")
        return [sys.executable, "-I", "-S", str(program)]

    def listen(self, event: Event) -> None:
        self.events.append(event)
        self.on_event(event)

    def off(self, use: object, clock: object) -> Off:
        del use, clock
        runner = self.supervisor.runner
        assert runner is not None
        assert runner.process.returncode is not None, "the runner was not reaped before its instruments were opened"
        self.offs.append(len(self.reasons))
        if self.off_fails:
            self.off_fails -= 1
            raise OffNotProved("the supply does not answer")
        return Off(("board", "supply"), {}, 0.01)

    def run(self) -> Ending:
        use = RigUse.of_job(load(shipped("demo")))
        self.supervisor = Supervisor(self.folder, use, self.command, self.listen, self.orders, lambda: None)
        return self.supervisor.run()

    @property
    def texts(self) -> list[str]:
        return [str(event.data["text"]) for event in self.events if event.kind == "notice"]


Make = Callable[..., Bed]


@pytest.fixture
def bed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Make:
    (tmp_path / "requests").mkdir()

    def make(*programs: str) -> Bed:
        made = Bed(tmp_path, list(programs))
        monkeypatch.setattr(supervise, "off", made.off)
        return made

    return make


@pytest.fixture
def short(monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """`short(hang_s=0.3)`: a bound for this test only."""

    def patch(**bounds: float) -> None:
        for name, value in bounds.items():
            assert name in BOUNDS
            monkeypatch.setitem(cast(dict[str, float], BOUNDS), name, value)

    return patch


def test_a_clean_end_is_handed_on(bed: Make) -> None:
    """What the runner says last is the ending; no takeover, no restart."""
    here = bed(saying(HELLO, HOLD_DONE, FINISHED))
    assert here.run() == FINISHED
    assert here.reasons == [""]
    assert here.offs == []
    assert [event.kind for event in here.events] == ["hold_ended"]


def test_a_runner_that_dies_is_started_again(bed: Make) -> None:
    """Killed: off by the supervisor once it is reaped, then another one that is told why."""
    here = bed(saying(HELLO, HOLD_DONE, then=KILLED), saying(HELLO, FINISHED))
    assert here.run() == FINISHED
    assert here.offs == [1]
    assert here.reasons[1] == f"the runner ended without saying why (killed by signal 9; see {LOG})"
    assert here.texts == [
        f"{here.reasons[1]}: the supervisor switches off",
        "the runner is started again from the logbook",
    ]
    assert [event.data["proved"] for event in here.events if event.kind == "off"] == [True]


@pytest.mark.parametrize("program", ["raise SystemExit(7)", "import nothing_of_that_name"])
def test_one_that_crashes_at_its_start_is_given_up(bed: Make, program: str) -> None:
    """After five restarts with no hold done the run ends with exit 3, names the log, and the log has the traceback."""
    here = bed(program)
    with pytest.raises(RigError, match="the runner was lost 6 times with no hold done between") as caught:
        here.run()
    assert caught.value.exit_code == 3
    assert LOG in str(caught.value)
    assert "the drive is off" in str(caught.value)
    assert len(here.reasons) == len(here.offs) == 6
    if "import" in program:
        assert "nothing_of_that_name" in (here.folder / LOG).read_text("utf-8")


def test_a_hold_done_sets_the_count_back(bed: Make) -> None:
    """A night may lose many runners as long as something gets done between."""
    die = saying(HELLO, HOLD_DONE, then=KILLED)
    here = bed(*[die] * 9, saying(HELLO, FINISHED))
    assert here.run() == FINISHED
    assert len(here.offs) == 9


@pytest.mark.parametrize("last", [TRIP, HOLD_TRIPPED], ids=["trip told", "only the outcome told"])
def test_a_trip_is_never_started_again(bed: Make, last: Event) -> None:
    """Killed right after it had told of a trip: off is proved, and no other runner is started."""
    here = bed(saying(HELLO, last, then=KILLED), saying(HELLO, FINISHED))
    ending = here.run()
    assert ending.state is State.TRIPPED
    assert "2 A" in ending.reason
    assert here.reasons == [""]
    assert here.offs == [1]
    assert here.events[-1].data["state"] == State.TRIPPED.words


def test_a_hang_is_killed(bed: Make, short: Callable[..., None]) -> None:
    """Greeted and then silent for `hang_s`: killed, off, another one."""
    short(hang_s=0.3)
    here = bed(saying(HELLO, then=PATIENT), saying(HELLO, FINISHED))
    assert here.run() == FINISHED
    assert here.reasons[1].startswith("the runner said nothing for 0.3")
    assert here.offs == [1]


def test_one_that_never_greets_is_killed(bed: Make, short: Callable[..., None]) -> None:
    """Until it has greeted it has `start_up_s`; nothing that it prints without sense counts as a sign of life."""
    short(hang_s=0.1, start_up_s=0.6)
    babble = "while True:\n    os.write(1, b'warming up\\n')\n    time.sleep(0.02)\n"
    here = bed(saying(then=babble), saying(HELLO, FINISHED))
    assert here.run() == FINISHED
    assert here.reasons[1].startswith("the runner said nothing for 0.6")


def test_garbage_says_nothing(bed: Make) -> None:
    """Torn lines, wrong types, lines too long (their ends too) and bytes of all kinds are passed over."""
    inner = b'{"ended": "TRIPPED", "reason": "", "again": false}\n'
    too_long = b"x" * MOST_LINE + inner
    exact = b"x" * (MOST_LINE - len(inner)) + inner
    odd = [b"\xff\x00\n", b"[1]\n", b'"hello"\n', b'{"kind": "trip"}\n', b'{"ended": "NOWHERE"}\n', b"{" * 9000 + b"\n"]
    wrong = [b'{"kind": "trip", "at": 0, "data": 7}\n', b'{"kind": "trip", "at": 1e999, "data": [1]}\n']
    here = bed(saying(HELLO, *odd, *wrong, too_long, exact, HOLD_DONE, b'{"kind": "tr', b"\n", FINISHED))
    assert here.run() == FINISHED
    assert here.events == [HOLD_DONE]


def test_a_flood_does_not_hold_up_orders(bed: Make) -> None:
    """One that talks without end is still told to switch off, and its words take no memory without end."""
    flood = (
        "import fcntl\nfcntl.fcntl(0, fcntl.F_SETFL, os.O_NONBLOCK)\nheard = b''\n"
        f"line = {line_of(Event('beat', 1.0, {'number': 1}))!r} * 50\n"
        "while b'off' not in heard:\n    os.write(1, line)\n    try: heard += os.read(0, 100)\n"
        "    except BlockingIOError: pass\n"
        f"os.write(1, {line_of(Ending(State.PARKED, 'switched off by order'))!r})\n"
    )
    here = bed(saying(HELLO, then=flood))

    def more_waits_always(_: Event) -> None:
        here.orders.off = len(here.events) > 1000
        runner = here.supervisor.runner
        assert runner is not None
        while runner.lines.empty() and runner.process.poll() is None:
            pass  # the supervisor never sees the end of what has come

    here.on_event = more_waits_always
    assert here.run().reason == "switched off by order"
    assert here.offs == []


def test_a_disobedient_runner_is_killed(bed: Make, short: Callable[..., None]) -> None:
    """Ordered off, it has `obey_s`; then it is killed, off is proved from here, and none is started again."""
    short(obey_s=0.3)
    beats = f"while True:\n    os.write(1, {line_of(Event('beat', 1.0, {'number': 1}))!r})\n    time.sleep(0.05)\n"
    here = bed(saying(HELLO, then=beats))
    here.on_event = lambda _: setattr(here.orders, "off", True)
    ending = here.run()
    assert ending.state is State.PARKED
    assert "did not end 0 s after the order to switch off" in ending.reason
    assert here.offs == [1]
    assert here.reasons == [""]


def test_orders_reach_the_runner(bed: Make, tmp_path: Path) -> None:
    """Beats from the start, and each order once, as a word on a line."""
    end = line_of(FINISHED)
    listen = (
        "words = []\nwhile words.count('beat\\n') < 3 or 'finish\\n' not in words:\n"
        "    words.append(sys.stdin.readline())\n"
        f"open({str(tmp_path / 'heard')!r}, 'w').write(''.join(words))\nos.write(1, {end!r})\n"
    )
    here = bed(saying(HELLO, HOLD_DONE, then=listen))
    here.on_event = lambda _: here.orders.interrupt()
    assert here.run() == FINISHED
    words = (tmp_path / "heard").read_text("utf-8").split()
    assert words.count("beat") == 3
    assert words.count("finish") == 1
    assert set(words) == {"beat", "finish"}


def test_a_request_to_a_dead_runner_is_obeyed(bed: Make) -> None:
    """`stop` or `off` left while the runner died: the supervisor has switched off, answers, and starts no other."""
    for kind in ("stop", "off"):
        here = bed(saying(HELLO, then=KILLED))
        file = ask(here.folder, kind)
        ending = here.run()
        assert ending.state is State.PARKED
        assert "stopped by request; the runner had gone" in ending.reason
        assert here.reasons == [""]
        assert not file.exists()


def test_an_error_of_the_session_is_the_same_here(bed: Make) -> None:
    """Class, text and exit code of what a session raised are those of the same session in this process."""
    first = RigError(
        "supply: 14 V was set and 12 V read back", value="12 V", allowed="14 V", remedy="Look at it", topic="rig"
    )
    second = RunInUse("this run is in use", value="process 7", where=Where("/runs/a"), remedy="Wait until it has ended")
    for error in (first, second):
        here = bed(saying(HELLO, failed(error)))
        with pytest.raises(type(error)) as caught:
            here.run()
        assert str(caught.value) == str(error)
        assert caught.value.exit_code == error.exit_code


def test_off_is_seen_to_after_an_error_on_the_rig(bed: Make, short: Callable[..., None]) -> None:
    """A session that ended with an error of the rig is followed by off from here; one of the job's files is not."""
    here = bed(saying(HELLO, failed(LinkLost("board: the peer closed"))))
    with pytest.raises(RigError, match="the peer closed"):
        here.run()
    assert here.offs == [1]
    here = bed(saying(HELLO, failed(SweeprigError("odd"))))
    here.off_fails = 10_000
    short(take_over_s=0.05, take_over_pause_s=0.01)
    with pytest.raises(SweeprigError, match="odd"):
        here.run()
    assert here.texts[-1].startswith("OFF COULD NOT BE PROVED: the supply does not answer")


def test_a_logbook_lost_in_the_middle_is_no_refusal(bed: Make) -> None:
    """RunInUse before a session began has opened nothing; in the middle of one it leaves a rig: off from here."""
    locked = failed(RunInUse("the logbook stayed locked for 500 ms"))
    session = Event("session", 1.0, {"session": 1, "simulated": True})
    for parts, offs in (((HELLO, locked), []), ((HELLO, session, locked), [1])):
        here = bed(saying(*parts))
        with pytest.raises(RunInUse, match="stayed locked"):
            here.run()
        assert here.offs == offs


def test_off_is_tried_until_it_is_proved(bed: Make, short: Callable[..., None]) -> None:
    """A takeover whose proof fails is repeated, and each failure is told; the next runner waits for the proof."""
    short(take_over_pause_s=0.01)
    here = bed(saying(HELLO, then=KILLED), saying(HELLO, FINISHED))
    here.off_fails = 3
    assert here.run() == FINISHED
    assert here.offs == [1, 1, 1, 1]
    assert sum("off is not proved yet: the supply does not answer" in text for text in here.texts) == 3


def test_a_listener_that_fails_does_not_keep_the_drive_on(bed: Make, tmp_path: Path) -> None:
    """Whoever shows the events raises: the runner is killed, off is proved without asking him again, it is raised."""
    pid = tmp_path / "pid"
    write = f"open({str(pid)!r}, 'w').write(str(os.getpid()))\n"
    here = bed(saying(HELLO, then=write + f"os.write(1, {line_of(HOLD_DONE)!r})\n" + PATIENT))

    def fails(_: Event) -> None:
        raise OSError(5, "the terminal is gone")

    here.on_event = fails
    with pytest.raises(OSError, match="the terminal is gone"):
        here.run()
    assert here.offs == [1]
    assert len(here.events) == 1
    with pytest.raises(ProcessLookupError):
        os.kill(int(pid.read_text("utf-8")), 0)


def test_silence_of_the_supervisor_alone_begins_another_session(bed: Make) -> None:
    """A runner that switched off because nobody beat, or because its input ended, is followed by another one."""
    silent = Ending(State.PARKED, "no sign of the supervisor for 3.1 s", again=True)
    here = bed(saying(HELLO, silent), saying(HELLO, FINISHED))
    assert here.run() == FINISHED
    assert here.reasons[1] == silent.reason
    assert here.offs == [1]


def test_a_runner_that_cannot_be_started(bed: Make, monkeypatch: pytest.MonkeyPatch) -> None:
    """No such program, no memory: exit 3, and the text says what to look at."""
    here = bed("")
    monkeypatch.setattr(here, "command", lambda _: [str(here.folder / "nothing there")])
    with pytest.raises(RigError, match="cannot be started; the drive is off: No such file") as caught:
        here.run()
    assert caught.value.exit_code == 3


def test_what_goes_on_the_command_line(tmp_path: Path) -> None:
    """A fresh interpreter that takes nothing from the current folder; a reason cannot break the line."""
    command = runner_command(tmp_path, attended=True)
    assert command("")[1:4] == ["-P", "-m", "sweeprig.conduct.runner"]
    assert command("")[-1] == "--attended"
    odd = command("--help \0" + "x" * 10_000)[-1]
    assert odd.startswith("--because=--help  x")
    assert len(odd) < 1000


def test_what_a_runner_raises(tmp_path: Path, short_job: Path) -> None:
    """The real runner says its error as its last line, its exit code is the error's, the traceback goes to the log."""
    folder = create_run_folder(tmp_path, "fan", SystemClock().utc(), document(load(short_job)))
    done = subprocess.run(
        runner_command(folder, attended=True)(""), input=b"", capture_output=True, timeout=60, check=False
    )
    first, *_, last = [understood(line) for line in done.stdout.splitlines()]
    assert isinstance(first, Hello)
    assert isinstance(last, Failed)  # `simbench:` addresses have no ports in a process of their own
    assert done.returncode == last.exit_code != 0
    assert b"Traceback" in done.stderr
