"""One rig, one run: locks of addresses that name their holder and end with its process."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from sweeprig.conduct.locks import COMMAND, FOLDER, LINK, AddressLock, Holder, RigLock, canonical, lock_folder
from sweeprig.errors import RigInUse

SUPPLY, METER = "TCPIP0::192.0.2.6::5025::SOCKET", "TCPIP0::192.0.2.7::5025::SOCKET"
BOARD = "serial:/dev/serial/by-id/usb-board?baud=115200"
HOLD = (
    "import sys\nfrom sweeprig.conduct.locks import RigLock\n"
    "lock = RigLock(sys.argv[2:], sys.argv[1], 'works on', '/runs/a').acquire()\nprint('has it', flush=True)\n"
    "sys.stdin.read()\n"
)


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv(FOLDER, str(tmp_path / "locks"))
    return lock_folder()


@pytest.fixture
def other() -> Iterator[subprocess.Popen[str]]:
    """Another process that has the meter's command."""
    pipe = subprocess.PIPE
    with subprocess.Popen([sys.executable, "-c", HOLD, COMMAND, METER], stdin=pipe, stdout=pipe, text=True) as process:
        assert process.stdout is not None
        assert process.stdout.readline() == "has it\n"
        yield process
        process.kill()


def test_a_lock_names_its_holder(other: subprocess.Popen[str]) -> None:
    """RigInUse at once, exit 3: process, machine, what it does, its run, and what to do."""
    with pytest.raises(RigInUse) as caught:
        AddressLock(METER, COMMAND, "switches the rig off").acquire()
    assert caught.value.exit_code == 3
    assert caught.value.holder == Holder(other.pid, socket.gethostname(), "works on", "/runs/a")
    text = str(caught.value)
    for words in (METER, f"process {other.pid} on", "works on /runs/a", "--take-over"):
        assert words in text


@pytest.mark.skipif(sys.platform == "win32", reason="no SIGKILL on Windows")
def test_a_lock_dies_with_its_process(other: subprocess.Popen[str]) -> None:
    """Killed, whatever it left behind: the lock is free, and the dead one is not named any more."""
    other.send_signal(signal.SIGKILL)
    other.wait()
    with RigLock([METER], COMMAND, "works on") as lock:
        assert {holder.pid for holder in [lock._locks[0].holder()] if holder is not None} == {os.getpid()}


def test_all_or_none(other: subprocess.Popen[str]) -> None:
    """One of several addresses is in use: none of the others is kept."""
    lock = RigLock([SUPPLY, METER, BOARD], COMMAND, "works on")
    with pytest.raises(RigInUse):
        lock.acquire()
    assert RigLock([SUPPLY, BOARD], COMMAND, "looks").held_by() == set()
    assert {holder.pid for holder in RigLock([BOARD, METER], COMMAND, "looks").held_by() if holder} == {other.pid}


def test_command_and_link_are_two(other: subprocess.Popen[str]) -> None:
    """The supervisor's part and the runner's part of one address do not meet; `nobody_has` looks at the other part."""
    lock = RigLock([METER], LINK, "has the link open")
    with lock, pytest.raises(RigInUse, match=f"process {other.pid} on"):
        lock.nobody_has(COMMAND)
    RigLock([METER], COMMAND, "looks").nobody_has(LINK)


def test_a_holder_file_alone_says_nothing(folder: Path) -> None:
    """A name that a dead process left, rubbish, or none at all: the lock itself decides."""
    lock = AddressLock(METER, COMMAND, "works on")
    for text in ('{"pid": 7, "host": "x", "what": "works on", "run": ""}', "rubbish", "[]", ""):
        lock._holder.write_text(text, "utf-8")
        assert RigLock([METER], COMMAND, "looks").held_by() == set()
    assert lock.holder() is None
    for pid in ("-1", "0", "1", "true", '"7"', "1.5", "null"):
        lock._holder.write_text(f'{{"pid": {pid}, "host": "x", "what": "y", "run": ""}}', "utf-8")
        assert lock.holder() is None, pid
    assert folder == lock._holder.parent


@pytest.mark.parametrize(
    ("one", "same"),
    [
        ("TCPIP::192.0.2.7::5025::SOCKET", " tcpip0::192.0.2.7::5025::socket "),
        ("TCPIP0::localhost::5025::SOCKET", "TCPIP::127.0.0.1::5025::SOCKET"),
        ("serial:/dev/ttyX?baud=9600", "serial:/dev/../dev/ttyX"),
        ("USB0::1::2::3::INSTR", "USB::1::2::3::INSTR"),
    ],
)
def test_spellings_of_one_instrument_meet(one: str, same: str) -> None:
    """Case, board number 0, names of the loopback and options of a port make no other instrument."""
    assert canonical(one) == canonical(same)
    with RigLock([one], COMMAND, "works on"):
        assert RigLock([same], COMMAND, "looks").held_by() != set()


def test_a_serial_port_by_any_name(tmp_path: Path) -> None:
    """A stable name is a link to the port: both are the same instrument, and another board number is another one."""
    port, name = tmp_path / "ttyX", tmp_path / "usb-board"
    port.touch()
    name.symlink_to(port)
    assert canonical(f"serial:{name}") == canonical(f"serial:{port}")
    assert canonical("GPIB1::5::INSTR") != canonical("GPIB0::5::INSTR")


def test_the_bench_inside_needs_no_lock(folder: Path) -> None:
    """`simbench:` addresses lock nothing."""
    with RigLock(["simbench:board"], COMMAND, "works on"):
        assert list(folder.iterdir()) == []


@pytest.mark.skipif(sys.platform == "win32", reason="a process is only known to be gone on POSIX systems")
def test_a_name_left_behind_is_not_believed(other: subprocess.Popen[str]) -> None:
    """The lock was just taken and its file still names a dead process, or nobody: it is read again until it is true."""
    lock = AddressLock(METER, COMMAND, "works on")
    true = lock._holder.read_text("utf-8")
    reads = list[str]()

    class Late(AddressLock):
        def holder(self) -> Holder | None:
            reads.append(lock._holder.read_text("utf-8"))
            found = super().holder()
            if len(reads) == 2:
                lock._holder.write_text(true, "utf-8")
            return found

    with subprocess.Popen([sys.executable, "-c", ""]) as dead:
        dead.wait()
    for left in (true.replace(str(other.pid), str(dead.pid)), ""):
        reads.clear()
        lock._holder.write_text(left, "utf-8")
        with pytest.raises(RigInUse, match=f"process {other.pid} on"):
            Late(METER, COMMAND, "works on").acquire()
        assert len(reads) == 3
