"""The folder of one run: its names, how it is made, who holds it, and which disks it may lie on.

Makes and locks folders; knows nothing of what is inside the logbook or the job.
"""

from __future__ import annotations

import errno
import json
import os
import re
import socket
import stat
import sys
import unicodedata
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, TextIO

from sweeprig.errors import DiskFull, RunError, RunInUse, Where

if TYPE_CHECKING:
    from types import TracebackType

    from filelock import BaseFileLock

JOB = "job.toml"
LOGBOOK = "logbook.sqlite"
FINDINGS = "findings.json"
REPORT = "report.html"
TRAFFIC = "traffic.log"
REQUESTS = "requests"
LAST_SEEN = "last-seen"

_LONGEST_NAME = 40
_MOST_TWINS = 1000
_LARGEST_HOLDER = 1_000
_MOUNTS = Path("/proc/mounts")
_NETWORK = """
9p afpfs afs beegfs ceph cifs coda davfs glusterfs gpfs lustre ncpfs nfs nfs4 orangefs panfs prl_fs pvfs2 smb2 smb3
smbfs vboxsf vmhgfs wekafs fuse.afpfs fuse.ceph fuse.ceph-fuse fuse.curlftpfs fuse.gcsfuse fuse.glusterfs fuse.goofys
fuse.google-drive-ocamlfuse fuse.gvfsd-fuse fuse.juicefs fuse.mfs fuse.onedriver fuse.prl_fsd fuse.rclone fuse.s3fs
fuse.smbnetfs fuse.sshfs fuse.vmhgfs-fuse
"""
"""File system types of /proc/mounts that lie on another machine, or on the host of a virtual one."""


def create_run_folder(runs: Path, motor: str, utc: float, job_text: str) -> Path:
    """`runs/<UTC stamp>-<motor>/` with `job.toml` written whole and `requests/`; the path of it.

    The folder is made exclusively: a second run of the same second gets `-2` and so on. RunError on a network file
    system or where it cannot be made, DiskFull where the disk is full.
    """
    with os_errors_at(runs):
        refuse_network(runs)
        runs.mkdir(parents=True, exist_ok=True)
        folder = _make_exclusively(runs, f"{stamp(utc)}-{reduced(motor)}")
        (folder / REQUESTS).mkdir()
        write_whole(folder / JOB, job_text)
        _sync_folder(runs)
    return folder


def stamp(utc: float) -> str:
    """UTC seconds as `20260302t180000z` (ISO 8601 basic, lower case)."""
    return datetime.fromtimestamp(utc, UTC).strftime("%Y%m%dt%H%M%Sz")


def reduced(name: str) -> str:
    """A name as a folder may carry it: only `a-z`, `0-9` and single `-`, at most 40; `motor` if nothing is left."""
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode("ascii").lower()
    return re.sub(r"[^a-z0-9]+", "-", plain)[:_LONGEST_NAME].strip("-") or "motor"


def write_whole(path: Path, text: str) -> None:
    """Write a small text file so that it is there whole or not at all, also after a power cut."""
    beside = path.with_name(path.name + ".new")
    with os_errors_at(path), fresh_file(beside) as file:
        file.write(text)
        file.flush()
        os.fsync(file.fileno())
    put_in_place(beside, path)


def fresh_file(path: Path) -> TextIO:
    """A new, empty text file at `path`, whatever was there before.

    A folder that came from a stranger may hold a link under any name: what a link points to is never written to.
    """
    path.unlink(missing_ok=True)
    return path.open("x", encoding="utf-8", newline="\n")


def read_bounded(path: Path, most: int) -> str:
    """The text of a small file of a run. FileNotFoundError where there is none; ValueError where it is no text of at
    most `most` bytes; RunError for a pipe or a device, which might never end, and where it cannot be read."""
    try:
        mode = path.stat().st_mode
    except FileNotFoundError:
        raise
    except OSError as error:
        raise _unusable(path, error.strerror or str(error)) from error
    if not stat.S_ISREG(mode):
        raise _unusable(path, "it is no ordinary file")
    with os_errors_at(path), path.open("rb") as file:
        data = file.read(most + 1)
    if len(data) > most:
        raise ValueError(f"more than {most} bytes")
    return data.decode("utf-8")


def _unusable(path: Path, why: str) -> RunError:
    remedy = "Delete it: what a run leaves for people is made again from its logbook"
    return RunError("this file of the run cannot be used", value=why, where=Where(str(path)), remedy=remedy)


def put_in_place(beside: Path, path: Path) -> None:
    """Move a finished, synced file to its name, and make the name survive a power cut."""
    with os_errors_at(path):
        beside.replace(path)
        _sync_folder(path.parent)


def folder_of(given: Path | str) -> Path:
    """The run folder that a person means: the folder itself, or one of the run's own files in it."""
    path = Path(given)
    return path.parent if path.name in (LOGBOOK, JOB, FINDINGS, REPORT) else path


def runs_near(folder: Path) -> tuple[Path, list[str]] | None:
    """Where runs lie that may be meant instead of `folder`, and their names, newest first; None where there are none.

    Looked for in `folder` itself, beside it, and in `runs` here.
    """
    for place in (folder, folder.parent, Path("runs")):
        with suppress(OSError):
            names = sorted((entry.parent.name for entry in place.glob(f"*/{LOGBOOK}")), reverse=True)
            if names:
                return place, names
    return None


class FolderLock:
    """One process at a time: an operating system's lock on `<name>.lock`, and who has it in `<name>.holder`.

    The lock ends with its process, however that ends; a holder file left behind says nothing by itself.
    """

    def __init__(self, folder: Path, name: str = "run") -> None:
        self.folder = folder
        self._path = folder / f"{name}.lock"
        self._holder = folder / f"{name}.holder"
        self._lock: BaseFileLock | None = None

    def acquire(self) -> FolderLock:
        """Take the lock or raise RunInUse, naming the holder, at once."""
        from filelock import FileLock, Timeout  # slow to import, and most commands lock nothing

        lock = FileLock(self._path, thread_local=False)
        with os_errors_at(self.folder):
            try:
                lock.acquire(blocking=False)
            except Timeout as error:
                raise self._in_use() from error
            try:
                with fresh_file(self._holder) as file:
                    json.dump({"pid": os.getpid(), "host": socket.gethostname()}, file)
            except BaseException:
                lock.release()
                raise
        self._lock = lock
        return self

    def release(self) -> None:
        """Give the lock back; may be called twice."""
        lock, self._lock = self._lock, None
        if lock is not None:
            with suppress(OSError):
                self._holder.unlink(missing_ok=True)
            lock.release()

    def held(self) -> bool:
        """Whether a process has the lock at this moment. Asked by taking it for an instant: never ask in a loop."""
        from filelock import FileLock, Timeout

        if not self._path.exists():
            return False
        lock = FileLock(self._path, thread_local=False)
        try:
            lock.acquire(blocking=False)
        except Timeout:
            return True
        except OSError:
            return False  # a copy in a place where nobody may write, and so nobody works on
        lock.release()
        return False

    def holder(self) -> dict[str, object]:
        """`pid` and `host` of the last holder that did not release, {} where nothing is known."""
        try:
            data = json.loads(read_bounded(self._holder, _LARGEST_HOLDER))
        except (OSError, ValueError, RunError, RecursionError):
            return {}
        return data if isinstance(data, dict) else {}

    def __enter__(self) -> FolderLock:
        return self.acquire()

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, tb: TracebackType | None) -> None:
        self.release()

    def _in_use(self) -> RunInUse:
        holder = self.holder()
        who = f"process {holder['pid']} on {holder['host']}" if {"pid", "host"} <= holder.keys() else "another process"
        remedy = "Wait until it has ended, or stop it; a run is only ever held by one process"
        return RunInUse("this run is in use", value=f"held by {who}", where=Where(str(self.folder)), remedy=remedy)


def refuse_network(path: Path, mounts: str | None = None) -> None:
    """RunError where `path` lies on a network file system: locks and shared memory cannot be relied on there.

    `mounts`: text of /proc/mounts; read from there when None, and nothing is known on systems without it.
    """
    if mounts is None:
        if sys.platform != "linux":
            return
        try:
            mounts = _MOUNTS.read_text("utf-8", "surrogateescape")
        except OSError:
            return
    kind, point = file_system_of(path.absolute(), mounts)
    if is_network(kind) and point != Path("/"):  # a machine whose root is shared has nothing more local to offer
        raise RunError(
            f"{point} is a network file system, and a run cannot be kept safe on one",
            value=kind,
            allowed="a local disk",
            where=Where(str(path)),
            remedy="Run here on a local disk, and copy the run folder afterwards",
        )


def is_network(kind: str) -> bool:
    """Whether a file system of this type (as in /proc/mounts) is reached over a network or shared by a host."""
    return kind in _NETWORK.split()


def file_system_of(path: Path, mounts: str) -> tuple[str, Path]:
    """(type, mount point) of the file system that holds the absolute `path`, from the text of /proc/mounts.

    The longest mount point wins, among equals the last one (it lies on top). ("", "/") where the text names none.
    """
    best, kind = Path("/"), ""
    real = Path(os.path.realpath(path))
    for line in mounts.splitlines():
        words = line.split(" ")
        if len(words) < 3:
            continue
        point = Path(re.sub(r"\\([0-7]{3})", lambda octal: chr(int(octal[1], 8)), words[1]))
        if real.is_relative_to(point) and len(point.parts) >= len(best.parts):
            best, kind = point, words[2]
    return kind, best


def _make_exclusively(runs: Path, name: str) -> Path:
    for twin in range(1, _MOST_TWINS):
        folder = runs / (name if twin == 1 else f"{name}-{twin}")
        with suppress(FileExistsError):
            folder.mkdir()
            return folder
    remedy = "Name another folder for runs, or move old runs away"
    raise RunError("too many runs of one name and second", value=name, where=Where(str(runs)), remedy=remedy)


def _sync_folder(folder: Path) -> None:
    """Make a new name in `folder` survive a power cut, where the system can do that (not on Windows)."""
    if sys.platform == "win32":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


@contextmanager
def os_errors_at(path: Path) -> Iterator[None]:
    """The operating system's refusals become DiskFull or RunError, the cause kept."""
    try:
        yield
    except RunError:
        raise  # DiskFull is an OSError too: it has been said already
    except OSError as error:
        where = Where(str(path))
        if error.errno in (errno.ENOSPC, getattr(errno, "EDQUOT", errno.ENOSPC)):
            remedy = "Make room, or name a folder on another disk"
            raise DiskFull("the disk is full", where=where, remedy=remedy) from error
        remedy = "Name a folder on a local disk in which you may write"
        value = error.strerror or str(error)
        raise RunError("this folder cannot be used", value=value, where=where, remedy=remedy) from error
