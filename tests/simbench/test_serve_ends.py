"""How serving ends: real processes and real signals; and that a bench at rest sleeps until something happens."""

from __future__ import annotations

import json
import os
import select
import signal
import socket
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from sweeprig.job import load
from sweeprig.simbench import serve as serving
from sweeprig.simbench.serve_ends import LOOK_S, Ends

PATIENCE_S = 20.0
MOVES = '\n[[simulated_faults]]\nkind = "node_moves"\ninstrument = "board"\nexchange = 100000\n'
"""Never happens in these tests; but the board's terminal then has a link in a folder of its own."""

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="neither pseudo-terminals nor SIGHUP on Windows")

Started = Callable[..., "Server"]


class Server:
    """`sweeprig simbench serve` in a process of its own."""

    def __init__(self, command: list[str], **more: object) -> None:
        self.process = subprocess.Popen(
            command,
            text=True,
            **({"stdin": subprocess.DEVNULL, "stdout": subprocess.PIPE, "stderr": subprocess.PIPE} | more),
        )  # type: ignore[call-overload]  # keywords handed through
        assert self.process.stdout is not None
        lines = [self.process.stdout.readline().split() for _ in range(4)]
        self.addresses = dict(lines)

    def connect(self, name: str = "supply") -> socket.socket:
        return socket.create_connection(("127.0.0.1", int(self.addresses[name].split("::")[2])), PATIENCE_S)

    @property
    def link(self) -> Path:
        return Path(self.addresses["board"].removeprefix("serial:"))

    def told(self, number: int) -> tuple[int, str]:
        """Send the signal; (exit code, what it said on standard error)."""
        self.process.send_signal(number)
        _, said = self.process.communicate(timeout=PATIENCE_S)
        return self.process.returncode, said


def ask(client: socket.socket, message: bytes) -> bytes:
    client.sendall(message + b"\n")
    said = b""
    while not said.endswith(b"\n"):
        said += client.recv(4096)
    return said


@pytest.fixture
def started(short_job: Path, tmp_path: Path) -> Iterator[Started]:
    """`started(…)`: the short job served with a written rig file and a record; keywords go to the process."""
    rig = short_job.parent / "shelter-bench.toml"
    rig.write_text(rig.read_text("utf-8") + MOVES, "utf-8")
    command = [str(Path(sys.executable).parent / "sweeprig"), "simbench", "serve", str(short_job)]
    command += ["--write", str(tmp_path / "served.toml"), "--record", str(tmp_path / "drive.jsonl")]
    made: list[Server] = []

    def start(**more: object) -> Server:
        made.append(Server(command, **more))
        return made[-1]

    yield start
    for each in made:
        if each.process.poll() is None:
            each.process.kill()
        each.process.communicate(timeout=PATIENCE_S)


@pytest.mark.parametrize("name", ["SIGTERM", "SIGHUP", "SIGINT"])
def test_a_signal_ends_serving_in_order(started: Started, tmp_path: Path, name: str) -> None:
    """With a client connected and the supply on: exit code 0, the client reads an end, the port refuses, the terminal's
    link and its folder are gone, and the record holds what happened, whole."""
    server = started()
    assert server.link.exists()
    with server.connect() as client:
        assert ask(client, b"SOUR:VOLT 5;:OUTP ON;*OPC?") == b"1\n"
        code, said = server.told(getattr(signal, name))
        assert code == 0
        assert f"ended: {name}" in said
        assert client.recv(16) == b""
    with pytest.raises(ConnectionRefusedError):
        server.connect()
    assert not server.link.parent.exists()
    entries = [json.loads(line) for line in (tmp_path / "drive.jsonl").read_text("utf-8").splitlines()]
    assert [entry["what"] for entry in entries] == ["supply_on"]


def test_a_kill_leaves_nothing_that_stops_the_next_start(started: Started, tmp_path: Path) -> None:
    """After kill -9 in the middle of serving the same command serves again, with the same files."""
    first = started()
    with first.connect() as client:
        assert ask(client, b"SOUR:VOLT 5;:OUTP ON;*OPC?") == b"1\n"
        first.process.kill()
        assert first.process.wait(PATIENCE_S) == -signal.SIGKILL
    second = started()
    with second.connect() as client:
        assert ask(client, b"OUTP?") == b"0\n"
    assert second.link.exists()
    for part in ("supply", "board"):
        assert second.addresses[part] in (tmp_path / "served.toml").read_text("utf-8")
    assert (tmp_path / "drive.jsonl").read_text("utf-8") == ""
    assert second.told(signal.SIGTERM)[0] == 0
    assert sorted(path.name for path in tmp_path.iterdir()) == ["drive.jsonl", "job", "served.toml"]


def test_a_hang_up_that_is_ignored_stays_so(started: Started) -> None:
    """Started as `nohup` does, it goes on after its terminal hung up; SIGTERM ends it."""
    server = started(preexec_fn=lambda: signal.signal(signal.SIGHUP, signal.SIG_IGN))
    server.process.send_signal(signal.SIGHUP)
    with server.connect() as client:
        assert ask(client, b"*OPC?") == b"1\n"
    code, said = server.told(signal.SIGTERM)
    assert code == 0
    assert "ended: SIGTERM" in said


def test_a_terminal_that_is_gone_takes_no_exit_code_with_it(started: Started) -> None:
    """Where standard error was a terminal that hung up, nothing can be said any more; it ends in order all the same."""
    master, slave = os.openpty()
    server = started(stderr=slave)
    os.close(slave)
    os.close(master)
    assert server.told(signal.SIGHUP)[0] == 0
    assert not server.link.parent.exists()


def test_a_signal_that_is_somebody_elses_wakes_once() -> None:
    """It ends nothing, and the handle rests again; one that ends is remembered, and the former handler comes back."""
    before = signal.getsignal(signal.SIGTERM)
    former = signal.signal(signal.SIGUSR1, lambda *_: None)
    try:
        with Ends(signals=True) as ends:
            os.kill(os.getpid(), signal.SIGUSR1)
            woken = select.select(ends.handles, [], [], PATIENCE_S)[0]
            assert woken == ends.handles
            assert ends.come(woken) == ""
            assert select.select(ends.handles, [], [], 0.0)[0] == []
            os.kill(os.getpid(), signal.SIGTERM)
            assert select.select(ends.handles, [], [], PATIENCE_S)[0] == ends.handles
            assert ends.come([]) == "SIGTERM"
    finally:
        signal.signal(signal.SIGUSR1, former)
    assert signal.getsignal(signal.SIGTERM) is before


def test_only_a_callers_word_is_looked_at_again_and_again() -> None:
    """Signals and standard input wake by themselves; `stop` is asked every 20 ms, and its True ends serving."""
    said = [False, True]
    with Ends(signals=True) as ends:
        assert ends.longest_wait_s is None
    with Ends(stop=lambda: said.pop(0)) as ends:
        assert ends.longest_wait_s == LOOK_S
        assert [ends.come([]), ends.come([])] == ["", "told to stop"]


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere a terminal without a client has to be looked at")
def test_a_bench_at_rest_sleeps_until_something_happens(short_job: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """With nobody connected and nothing planned the loop asks the system to sleep as long as it may, once, and a signal
    wakes it."""
    waits: list[float] = []
    real = select.select

    def selected(read: list[int], write: list[int], other: list[int], wait_s: float) -> object:
        waits.append(wait_s)
        os.kill(os.getpid(), signal.SIGTERM)
        return real(read, write, other, wait_s)

    monkeypatch.setattr("sweeprig.simbench.serve.select.select", selected)
    assert serving.serve(load(short_job), 1.0, signals=True) == "SIGTERM"
    assert waits == [serving.LONGEST_WAIT_S]
