"""The run's folder: its name, its exclusiveness, its lock, and the disks it may lie on."""

from __future__ import annotations

import errno
import json
import os
import socket
import string
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.errors import DiskFull, RunError, RunInUse
from sweeprig.logbook import FolderLock, create_run_folder, run_folder

UTC = 1_772_470_800.0  # 2026-03-02 17:00:00 UTC (independent: `date -u -d @1772470800`)
LOCAL = "/dev/sda1 / ext4 rw 0 0\nproc /proc proc rw 0 0\n"


def test_new_run_folder(tmp_path: Path) -> None:
    """A new run has a folder with UTC stamp and reduced motor name, the whole job, and a place for requests."""
    folder = create_run_folder(tmp_path / "runs", "Aspirating Fan µ / A", UTC, "title = 'ü'\n")
    assert folder == tmp_path / "runs" / "20260302t170000z-aspirating-fan-a"
    assert sorted(entry.name for entry in folder.iterdir()) == ["job.toml", "requests"]
    assert (folder / "job.toml").read_bytes() == "title = 'ü'\n".encode()


def test_same_second_same_motor(tmp_path: Path) -> None:
    """Two runs of one motor in one second get two folders; none is ever shared."""
    names = [create_run_folder(tmp_path, "fan", UTC, "").name for _ in range(3)]
    assert names == ["20260302t170000z-fan", "20260302t170000z-fan-2", "20260302t170000z-fan-3"]


@given(st.text())
def test_reduced_names_are_harmless(name: str) -> None:
    """Any motor name becomes 1 to 40 characters of a-z, 0-9 and inner hyphens: no path, no option, no device."""
    reduced = run_folder.reduced(name)
    assert 1 <= len(reduced) <= 40
    assert set(reduced) <= set(string.ascii_lowercase + string.digits + "-")
    assert not reduced.startswith("-")
    assert not reduced.endswith("-")


@pytest.mark.parametrize(
    ("name", "reduced"),
    [
        ("../../etc", "etc"),
        ("Lüfter 12 V", "lufter-12-v"),
        ("風扇", "motor"),
        ("--rm -rf--", "rm-rf"),
        ("a" * 60, "a" * 40),
    ],
)
def test_reduced_examples(name: str, reduced: str) -> None:
    """Accents fall away, everything else becomes one hyphen, and nothing left is `motor`."""
    assert run_folder.reduced(name) == reduced


def test_runs_folder_that_is_a_file(tmp_path: Path) -> None:
    """A place that cannot be a folder is refused with its path and what to do."""
    (tmp_path / "runs").write_text("")
    with pytest.raises(RunError, match=r"runs: this folder cannot be used: .*Name a folder on a local disk"):
        create_run_folder(tmp_path / "runs", "fan", UTC, "")


def test_full_disk_while_the_job_is_written(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A disk that is full before the run has begun is DiskFull, and no half job.toml is left in its place."""

    def full(_: int) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(DiskFull, match="the disk is full"):
        create_run_folder(tmp_path, "fan", UTC, "job")
    assert list(tmp_path.rglob("job.toml")) == []


def test_lock_names_its_holder(tmp_path: Path) -> None:
    """A held folder refuses a second holder with process and host; released, it is free and the side file gone."""
    lock = FolderLock(tmp_path).acquire()
    holder = tmp_path / "run.holder"
    assert json.loads(holder.read_text()) == {"pid": os.getpid(), "host": socket.gethostname()}
    with pytest.raises(RunInUse, match=f"held by process {os.getpid()} on {socket.gethostname()}"):
        FolderLock(tmp_path).acquire()
    lock.release()
    lock.release()
    assert not holder.exists()
    with FolderLock(tmp_path):
        assert holder.exists()


@pytest.mark.parametrize("text", ["", "{", "[]", '{"pid": 3}'])
def test_lock_with_an_unreadable_holder(tmp_path: Path, text: str) -> None:
    """A holder file that says nothing still gives RunInUse, only without the name."""
    with FolderLock(tmp_path):
        (tmp_path / "run.holder").write_text(text)
        with pytest.raises(RunInUse, match="held by another process"):
            FolderLock(tmp_path).acquire()


def test_locks_of_other_names_are_apart(tmp_path: Path) -> None:
    """The supervisor's lock of the run and the writer's lock of the logbook do not exclude each other."""
    with FolderLock(tmp_path, "run"), FolderLock(tmp_path, "logbook"):
        assert sorted(entry.name for entry in tmp_path.glob("*.holder")) == ["logbook.holder", "run.holder"]


@pytest.mark.parametrize(
    "kind",
    ["nfs", "nfs4", "cifs", "smb3", "fuse.sshfs", "9p", "vboxsf", "glusterfs", "fuse.rclone"],
)
def test_network_disk_is_refused(tmp_path: Path, kind: str) -> None:
    """A folder on a network file system is refused: run here, copy afterwards."""
    mounts = f"{LOCAL}server:/x {tmp_path} {kind} rw,relatime 0 0\n"
    text = rf"network file system.*: {kind} \(allowed: a local disk\)\. Run here .* copy the run folder afterwards"
    with pytest.raises(RunError, match=text):
        run_folder.refuse_network(tmp_path / "runs", mounts)


@pytest.mark.parametrize("kind", ["ext4", "btrfs", "xfs", "tmpfs", "overlay", "zfs", "fuseblk", "fuse.mergerfs"])
def test_local_disk_is_taken(tmp_path: Path, kind: str) -> None:
    """A folder on a local file system is taken, whatever else is mounted beside it."""
    mounts = f"server:/x /somewhere-else nfs4 rw 0 0\n/dev/sdb1 {tmp_path} {kind} rw 0 0\n"
    run_folder.refuse_network(tmp_path / "runs", mounts)
    assert run_folder.file_system_of(tmp_path, mounts) == (kind, tmp_path)


def test_file_system_of_takes_the_innermost_and_last_mount(tmp_path: Path) -> None:
    """The longest mount point counts, the later of two equal ones lies on top, blanks are octal, links are followed."""
    inner = tmp_path / "with blank"
    inner.mkdir()
    (tmp_path / "link").symlink_to(inner)
    written = str(inner).replace(" ", "\\040")
    mounts = f"{LOCAL}a {written} ext4 rw 0 0\nb {tmp_path} nfs rw 0 0\nc {written} cifs rw 0 0\nbroken\n"
    assert run_folder.file_system_of(inner / "run", mounts) == ("cifs", inner)
    assert run_folder.file_system_of(tmp_path / "link" / "run", mounts) == ("cifs", inner)
    assert run_folder.file_system_of(tmp_path / "other", mounts) == ("nfs", tmp_path)
    assert run_folder.file_system_of(Path(f"{tmp_path}-beside"), mounts) == ("ext4", Path("/"))


def test_machine_on_a_shared_root_may_run() -> None:
    """Where the root itself is shared there is nothing more local to offer, so it is not refused."""
    run_folder.refuse_network(Path("/runs"), "none / 9p rw 0 0\n")
