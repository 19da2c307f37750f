"""Serial ports on real pseudo-terminals: what only a serial line can do wrong. Rows: the failures of links.md."""

from __future__ import annotations

import errno
import os
from pathlib import Path
from typing import TYPE_CHECKING

import pytest
import serial

from sweeprig.clock import SystemClock
from sweeprig.errors import ConfigError, LinkLost, LinkTimeout
from sweeprig.link import serial_port
from sweeprig.link.registry import open_link
from sweeprig.link.serial_port import SerialLink, parse_address, stable_address, stable_name
from sweeprig.link.together import together
from sweeprig.roles import Ask, Reply, Steps

if TYPE_CHECKING:
    from tests.link.conftest import Pair, PtyFar


def reading(within_s: float) -> Steps[bytes]:
    answer = yield Ask(b"READ?", within_s=within_s)
    return answer.raw


def test_row_45_dribble_does_not_move_the_deadline(pty_pair: Pair) -> None:
    """Rows A8 and C8: one byte every 50 ms for ever ends at the deadline, with the bytes in the error."""
    began = pty_pair.clock.now()
    dribble = iter([b"", *[b"1"] * 100])  # the first look comes before the query

    def look() -> None:
        pty_pair.far.reply(next(dribble))

    result = together({"board": (pty_pair.link, reading(0.3))}, pty_pair.clock, began + 5.0, look)["board"]
    assert 0.3 <= pty_pair.clock.now() - began < 1.0
    assert isinstance(result.error, LinkTimeout)
    assert set(result.error.partial) == set(b"1")


def test_row_48_a_write_cannot_hang(pty_pair: Pair) -> None:
    """Row C11: a device that stopped reading ends a write as LinkTimeout; the library's own error is the cause."""
    began = pty_pair.clock.now()
    with pytest.raises(LinkTimeout) as caught:
        pty_pair.link.send(b"x" * 1_000_000, Reply.LINE, began + 0.1)
    assert pty_pair.clock.now() - began < 1.0
    assert isinstance(caught.value.__cause__, serial.SerialTimeoutException)
    assert pty_pair.link.dirty


def test_row_46_unplugged(pty_pair: Pair, pty_far: PtyFar) -> None:
    """Rows C9 and C15: an unplugged device is LinkLost; the text says that the port is gone, the cause is kept."""
    pty_pair.ask(b"READ?")
    pty_far.vanish()
    with pytest.raises(LinkLost, match="The port is gone") as caught:
        pty_pair.awaited()
    assert isinstance(caught.value.__cause__, serial.SerialException)


def test_row_47_the_port_is_exclusive(pty_pair: Pair, clock: SystemClock) -> None:
    """Row C10: a second opener is refused, with the hint that another program has the port."""
    with pytest.raises(LinkLost, match="another program may have it open"):
        open_link(pty_pair.far.address, clock, clock.now() + 1.0)


def test_row_38_resynchronising_does_not_reopen(pty_pair: Pair) -> None:
    """Row C1: opening may reset a board, so a port that is alive is drained and keeps its handle."""
    handle = pty_pair.link.fileno()
    pty_pair.ask(b"READ?")
    pty_pair.link.declare_timeout()
    pty_pair.far.reply(b"late\nhalf a l")
    pty_pair.link.resynchronise(pty_pair.clock.now() + 5.0)
    assert pty_pair.link.fileno() == handle
    pty_pair.ask(b"*IDN?", early=True)
    assert pty_pair.awaited(0.02) is None


def test_row_2_resynchronising_ends_although_the_device_streams(pty_far: PtyFar) -> None:
    """Row A2: a device that never falls silent is LinkLost at the deadline."""

    class Chatting(SystemClock):
        """While anyone waits, the device says something."""

        def wait(self, until: float, on: object = ()) -> None:
            del on
            pty_far.reply(b"x")
            super().wait(min(until, self.now() + 0.02))

    clock = Chatting()
    link = open_link(pty_far.address, clock, clock.now() + 1.0)
    began = clock.now()
    with pytest.raises(LinkLost, match="did not fall silent"):
        link.resynchronise(began + 0.4)
    assert 0.4 <= clock.now() - began < 1.0
    assert link.fileno() is None


def test_row_40_the_name_is_resolved_at_each_opening(pty_far: PtyFar, clock: SystemClock, tmp_path: Path) -> None:
    """Row C3: a stable name that now points to another node leads there when the lost link is opened again."""
    gone = tmp_path / "was"
    gone.symlink_to(pty_far.device)
    stable = tmp_path / "usb-board"
    stable.symlink_to(gone)
    link = open_link(f"serial:{stable}", clock, clock.now() + 1.0)
    link.close()
    stable.unlink()
    with pytest.raises(LinkLost, match="The port is gone"):
        link.resynchronise(clock.now() + 1.0)
    stable.symlink_to(pty_far.device)
    link.resynchronise(clock.now() + 1.0)
    assert link.dirty == ""
    link.close()


def test_row_40_a_plain_node_is_reopened_by_its_stable_name(
    pty_far: PtyFar, clock: SystemClock, tmp_path: Path
) -> None:
    """Row C3: opened as a numbered node, lost, and back under another number: reopened by the stable name that led to
    it at first, also when that appears only later; never by the old number, which another device may have by then."""
    folder = tmp_path / "by-id"
    folder.mkdir()
    stable = folder / "usb-board-if00"
    other, moved = type(pty_far)(), type(pty_far)()
    (folder / "usb-meter-if00").symlink_to(other.device)
    stable.symlink_to(pty_far.device)
    link = SerialLink(pty_far.address, clock, stable_names=(tmp_path / "no such folder", folder))
    link.open(clock.now() + 1.0)
    link.close()
    stable.unlink()
    with pytest.raises(LinkLost, match=f"The port is gone.*first opened as {pty_far.device}"):
        link.resynchronise(clock.now() + 1.0)
    stable.symlink_to(moved.device)
    link.resynchronise(clock.now() + 1.0)
    link.send(b"*IDN?", Reply.LINE, clock.now() + 1.0, early=True)
    assert moved.receive(6) == b"*IDN?\n"
    link.close()
    for far in (other, moved):
        far.close()


def test_a_node_without_a_stable_name_keeps_its_own(pty_far: PtyFar, clock: SystemClock, tmp_path: Path) -> None:
    """Row C3: where no link leads to the node (another system, another device's link) its own name is used again."""
    (tmp_path / "usb-other").symlink_to("/dev/null")
    (tmp_path / "plain").write_bytes(b"")
    (tmp_path / "dangling").symlink_to(tmp_path / "nowhere")
    assert stable_name(pty_far.device, (tmp_path / "none", tmp_path)) == pty_far.device
    link = SerialLink(pty_far.address, clock, stable_names=(tmp_path,))
    link.open(clock.now() + 1.0)
    (tmp_path / "later").symlink_to(pty_far.device)  # by now the node may be another device's
    link.close()
    link.open(clock.now() + 1.0)
    assert link._device == pty_far.device
    link.close()


def test_the_better_folder_of_names_comes_first(pty_far: PtyFar, tmp_path: Path) -> None:
    """Row C4: the name by identity is preferred to the one by socket, which serves where there is no other; a link that
    a person has chosen is kept."""
    better, other = tmp_path / "by-id", tmp_path / "by-path"
    for folder in (better, other):
        folder.mkdir()
        (folder / "name").symlink_to(pty_far.device)
    assert stable_name(pty_far.device, (better, other)) == str(better / "name")
    (better / "name").unlink()
    assert stable_name(pty_far.device, (better, other)) == str(other / "name")
    own = tmp_path / "my-board"
    own.symlink_to(pty_far.device)
    assert stable_name(str(own), (better, other)) == str(own)


def test_a_stable_address(pty_far: PtyFar, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row C3: an address keeps its options and its form when the stable name takes the place of the node."""
    monkeypatch.setattr(serial_port, "STABLE_NAMES", (tmp_path,))
    assert stable_address(f"serial:{pty_far.device}?baud=9600") == f"serial:{pty_far.device}?baud=9600"
    (tmp_path / "usb-board").symlink_to(pty_far.device)
    assert stable_address(f"serial:{pty_far.device}?baud=9600") == f"serial:{tmp_path}/usb-board?baud=9600"
    assert stable_address("serial:COM3") == "serial:COM3"


def test_without_a_handle_the_clock_polls(clock: SystemClock, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the library offers no handle (Windows) the link has none either, and exchanges still work."""

    class Handleless:
        unread = b""

        def __init__(self, *arguments: object, **options: object) -> None:
            assert arguments == ("COM3", 9600)
            assert options == {"timeout": 0, "write_timeout": 0.05, "exclusive": True}

        def read(self, size: int) -> bytes:
            data, self.unread = self.unread[:size], b""
            return data

        def write(self, data: bytes) -> None:
            self.unread = data.upper()

        def close(self) -> None:
            pass

    monkeypatch.setattr(serial, "Serial", Handleless)
    link = SerialLink("serial:COM3?baud=9600", clock)
    link.open(clock.now() + 1.0)
    link.identified = True
    assert link.fileno() is None
    assert together({"board": (link, reading(1.0))}, clock, clock.now() + 1.0)["board"].get() == b"READ?"


def test_opening_what_is_not_there(clock: SystemClock, tmp_path: Path) -> None:
    """A port that does not exist is LinkLost with the name in its text."""
    with pytest.raises(LinkLost, match="nowhere") as caught:
        open_link(f"serial:{tmp_path}/nowhere", clock, clock.now() + 1.0)
    assert isinstance(caught.value.__cause__, OSError)
    assert caught.value.__cause__.errno == errno.ENOENT


def test_opening_a_file_that_is_no_port(clock: SystemClock, tmp_path: Path) -> None:
    """A file that is no serial port is refused, and no descriptor stays open."""
    no_port = tmp_path / "plain.txt"
    no_port.write_bytes(b"")
    before = os.dup(0)
    os.close(before)
    with pytest.raises(LinkLost):
        open_link(f"serial:{no_port}", clock, clock.now() + 1.0)
    after = os.dup(0)
    os.close(after)
    assert after == before


@pytest.mark.parametrize(
    ("address", "parsed"),
    [
        ("serial:/dev/serial/by-id/usb-board-00", ("/dev/serial/by-id/usb-board-00", 115_200)),
        ("serial:/dev/ttyACM0?baud=9600", ("/dev/ttyACM0", 9600)),
        ("SERIAL:COM3", ("COM3", 115_200)),
    ],
)
def test_addresses(address: str, parsed: tuple[str, int]) -> None:
    """Port and baud rate are read from the address; 115200 where none is given."""
    assert parse_address(address) == parsed


@pytest.mark.parametrize("query", ["?baud=fast", "?baud=0", "?baud=", "?speed=9600", "?baud=9600&parity=E"])
def test_malformed_options(query: str) -> None:
    """An option that cannot be honoured is refused, never ignored."""
    with pytest.raises(ConfigError, match="serial:PORT or"):
        parse_address(f"serial:/dev/ttyACM0{query}")


def test_malformed_port() -> None:
    """An address without a port is refused."""
    with pytest.raises(ConfigError, match="no address of a serial port"):
        parse_address("serial:")
