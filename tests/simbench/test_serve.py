"""The served bench over real sockets and a real pseudo-terminal, with raw clients, at 20 times real time."""

from __future__ import annotations

import json
import os
import select
import shutil
import socket
import subprocess
import sys
import threading
import time
import tty
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from sweeprig import job as jobs
from sweeprig.errors import ConfigError
from sweeprig.simbench.serve import check_rate, serve, write_whole

CONFIGS = Path(__file__).parents[2] / "configs"
RATE = 20.0
PATIENCE_S = 20.0

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals are not to be had on Windows")


@dataclass
class Served:
    """A bench being served in a thread."""

    folder: Path
    addresses: dict[str, str] = field(default_factory=dict)
    told_to_stop: threading.Event = field(default_factory=threading.Event)
    is_ready: threading.Event = field(default_factory=threading.Event)
    thread: threading.Thread | None = None

    @property
    def record(self) -> list[dict[str, object]]:
        return [json.loads(line) for line in (self.folder / "drive.jsonl").read_text("utf-8").splitlines()]

    def begin(self) -> None:
        job = jobs.load(CONFIGS / "demo.toml")

        def ready(addresses: dict[str, str]) -> None:
            self.addresses = addresses
            self.is_ready.set()

        def run() -> None:
            rig, record = self.folder / "rig.toml", self.folder / "drive.jsonl"
            serve(job, RATE, rig, self.told_to_stop.is_set, ready, record=record)

        self.thread = threading.Thread(target=run)
        self.thread.start()
        assert self.is_ready.wait(PATIENCE_S)

    def end(self) -> None:
        self.told_to_stop.set()
        assert self.thread is not None
        self.thread.join(PATIENCE_S)
        assert not self.thread.is_alive()

    def connect(self, name: str) -> socket.socket:
        _, host, port, _ = self.addresses[name].split("::")
        return socket.create_connection((host, int(port)), PATIENCE_S)

    def open_terminal(self) -> int:
        handle = os.open(self.addresses["board"].removeprefix("serial:"), os.O_RDWR | os.O_NOCTTY)
        tty.setraw(handle)
        return handle


@pytest.fixture
def served(tmp_path: Path) -> Iterator[Served]:
    bench = Served(tmp_path)
    bench.begin()
    yield bench
    bench.end()


def ask_socket(client: socket.socket, message: bytes) -> bytes:
    client.sendall(message + b"\n")
    said = b""
    while not said.endswith(b"\n"):
        said += client.recv(4096)
    return said


def ask_terminal(handle: int, message: bytes, patience_s: float = PATIENCE_S) -> bytes:
    os.write(handle, message + b"\n")
    said = b""
    while not said.endswith(b"\n"):
        readable, _, _ = select.select([handle], [], [], patience_s)
        assert readable
        said += os.read(handle, 4096)
    return said


def until(condition: Callable[[], bool], patience_s: float = PATIENCE_S) -> bool:
    """Look every 10 ms until the condition holds; False when patience ran out."""
    deadline = time.monotonic() + patience_s
    never = threading.Event()
    while time.monotonic() < deadline:
        if condition():
            return True
        never.wait(0.01)
    return False


def test_every_instrument_answers_at_its_address(served: Served) -> None:
    """Three on sockets, the board on a pseudo-terminal: each gives its own identity, with LF and no echo."""
    for name, model in (("meter", b"multimeter"), ("supply", b"supply"), ("scope", b"scope")):
        with served.connect(name) as client:
            assert ask_socket(client, b"*IDN?").split(b",")[:2] == [b"SIMULATED", model]
    handle = served.open_terminal()
    assert ask_terminal(handle, b"*IDN?").startswith(b"SIMULATED,board,")
    os.close(handle)


def test_the_rig_file_has_the_addresses_and_the_rate_and_loads(served: Served, tmp_path: Path) -> None:
    """A job that names the written rig file loads, with everything else of the rig as it was."""
    folder = tmp_path / "configs"
    shutil.copytree(CONFIGS, folder)
    shutil.copy(tmp_path / "rig.toml", folder / "rigs" / "shelter-bench.toml")
    job, original = jobs.load(folder / "demo.toml"), jobs.load(CONFIGS / "demo.toml")
    assert job.rig.rate == RATE
    assert {name: entry.address for name, entry in job.rig.instruments.items()} == served.addresses
    assert served.addresses["board"].startswith("serial:")
    as_before = {
        name: entry.model_copy(update={"address": original.rig.instruments[name].address})
        for name, entry in job.rig.instruments.items()
    }
    assert job.rig.model_copy(update={"rate": None, "instruments": as_before}) == original.rig


def test_a_second_client_is_served_after_the_first_has_left(served: Served) -> None:
    """The second connects, gets nothing while the first is there, and its answer after the first has left."""
    with served.connect("meter") as first:
        assert ask_socket(first, b"*OPC?") == b"1\n"
        second = served.connect("meter")
        second.sendall(b"*OPC?\n")
        readable, _, _ = select.select([second], [], [], 0.15)
        assert readable == []
    with second:
        second.settimeout(PATIENCE_S)
        assert second.recv(16) == b"1\n"


def test_a_client_that_resets_the_connection_makes_room(served: Served) -> None:
    """A connection torn down in the middle of a reading does no harm to the next client."""
    rude = served.connect("meter")
    rude.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\x01\x00\x00\x00\x00\x00\x00\x00")
    rude.sendall(b"READ?\n")
    rude.close()
    with served.connect("meter") as client:
        assert ask_socket(client, b"*OPC?") == b"1\n"


def test_readings_take_their_time_divided_by_the_rate(served: Served) -> None:
    """A 10 s aperture takes 0.5 s of real time at rate 20; 0.45 s more is granted to a busy machine."""
    with served.connect("meter") as client:
        ask_socket(client, b"SENS:VOLT:DC:APER 10;APER?")
        began = time.monotonic()
        ask_socket(client, b"READ?")
        assert 0.5 <= time.monotonic() - began < 0.95


def test_the_fan_runs_and_a_client_that_dies_leaves_the_drive_off(served: Served) -> None:
    """Driven over socket and terminal the tachometer counts; after the client has gone the heartbeat switches off.

    The record, flushed at each event, has the off 1 s of bench time (50 ms real) after the last line.
    """
    with served.connect("supply") as supply:
        ask_socket(supply, b"SOUR:VOLT 12;CURR 1.5;:OUTP ON;*OPC?")
        handle = served.open_terminal()
        ask_terminal(handle, b"SOUR:FREQ 1000;PULS:DCYC 80;:OUTP ON;*OPC?")
        assert until(lambda: int(ask_terminal(handle, b"FETC:COUN?").split(b",")[1]) > 10)
        left = time.monotonic()
        os.close(handle)
    assert until(lambda: served.record[-1]["what"] == "drive_off")
    off = served.record[-1]
    assert [entry["what"] for entry in served.record] == ["supply_on", "drive_on", "drive_off"]
    assert off["why"] == "heartbeat"
    assert isinstance(off["mono"], float)
    assert off["mono"] - left < 0.5


def test_all_is_closed_when_told_to_stop(tmp_path: Path) -> None:
    """After stopping, connections are refused and the terminal is gone."""
    bench = Served(tmp_path)
    bench.begin()
    bench.end()
    with pytest.raises(ConnectionRefusedError):
        bench.connect("meter")
    assert not Path(bench.addresses["board"].removeprefix("serial:")).exists()


def test_a_tied_bench_ends_with_its_standard_input() -> None:
    """Served in a process of its own and tied to its parent, it ends when standard input is closed."""
    program = (
        "import sys; from sweeprig import job; from sweeprig.simbench.serve import serve;"
        f"serve(job.load({str(CONFIGS / 'demo.toml')!r}), 20.0, ready=lambda _: print('ready', flush=True), tied=True)"
    )
    with subprocess.Popen([sys.executable, "-c", program], stdin=subprocess.PIPE, stdout=subprocess.PIPE) as process:
        assert process.stdin is not None
        assert process.stdout is not None
        assert process.stdout.readline() == b"ready\n"
        process.stdin.close()
        assert process.wait(PATIENCE_S) == 0


@pytest.mark.parametrize("rate", [41.0, 1000.0])
def test_a_rate_that_makes_the_heartbeat_too_short_is_refused(rate: float) -> None:
    """2 s at rate 41 is 48.8 ms, under 50 ms: ConfigError with the rate, the allowed one and what to do."""
    job = jobs.load(CONFIGS / "demo.toml")
    check_rate(job, 40.0)
    with pytest.raises(ConfigError) as refused:
        check_rate(job, rate)
    text = str(refused.value)
    assert f"{rate:g}" in text
    assert "up to 40" in text
    assert "heartbeat of board" in text


@pytest.mark.parametrize("rate", [0.0, -1.0, 0.5, float("nan"), 2000.0])
def test_a_rate_that_is_none_is_refused(rate: float) -> None:
    """Zero, negative, slower than real time, not a number, or beyond what a rig file can state."""
    with pytest.raises(ConfigError, match="no such rate"):
        check_rate(jobs.load(CONFIGS / "demo.toml"), rate)


def test_a_file_is_put_in_place_whole(tmp_path: Path) -> None:
    """The new text replaces the old one and nothing unfinished stays behind."""
    path = tmp_path / "rig.toml"
    path.write_text("old", encoding="utf-8")
    write_whole(path, "new")
    assert path.read_text("utf-8") == "new"
    assert list(tmp_path.iterdir()) == [path]
