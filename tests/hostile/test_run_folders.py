"""A run folder from a stranger, with links where files belong: what they point to is neither written nor waited for.

Everything that writes into a run folder is tried on a folder in which that name, and every name used on the way to it,
is a link to a file of the user's.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

import pytest

from sweeprig.conduct import requests
from sweeprig.errors import RunError, SweeprigError
from sweeprig.logbook import Logbook, Reader
from sweeprig.logbook.export import export_csv
from sweeprig.logbook.run_folder import FolderLock, write_whole
from sweeprig.logbook.traffic import TrafficLog
from sweeprig.opened import open_run
from sweeprig.report import write
from sweeprig.results import fit, write_report

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="links need a right there that few users have")

WRITTEN = (
    "findings.json", "findings.json.new", "report.html", "report.html.new", "traffic.log", "holds.csv", "readings.csv",
    "logbook.holder", "run.holder", "last-seen", "last-seen.new",
)  # fmt: skip
LOCKS = ("logbook.lock", "run.lock")
OF_THE_DATABASE = ("logbook.sqlite-wal", "logbook.sqlite-shm", "logbook.sqlite-journal")


@pytest.fixture
def precious(tmp_path: Path) -> Path:
    """A file of the user's, outside of the run folder."""
    file = tmp_path / "precious.txt"
    file.write_text("kept", "utf-8")
    return file


@pytest.fixture
def link(run_folder: Path, precious: Path) -> Callable[..., Path]:
    """`link(name, …)`: links to the precious file under these names of the run folder; the folder."""

    def made(*names: str) -> Path:
        for name in names:
            (run_folder / name).symlink_to(precious)
        return run_folder

    return made


def resumed(folder: Path) -> None:
    log = TrafficLog(folder / "traffic.log")
    try:
        with Logbook.open(folder / "logbook.sqlite", traffic=log) as book:
            log("board", ">", b"OUTP OFF", 1.0)
            book.begin_session(300.0, 400.0, {})
    finally:
        log.close()


def traffic(folder: Path) -> None:
    log = TrafficLog(folder / "traffic.log")
    log("board", ">", b"OUTP OFF", 1.0)
    log.close()
    assert log.failed


def reported(folder: Path) -> None:
    (folder / "findings.json").unlink()  # else the findings would be read through it, and refused
    write_report(open_run(folder))


def reported_to_a_name(folder: Path) -> None:
    (folder / "findings.json").unlink()
    write(open_run(folder), folder / "report.html")


WRITERS: dict[str, tuple[Callable[[Path], object], tuple[str, ...]]] = {
    "fit": (fit, ("findings.json",)),
    "report": (reported, ("report.html",)),
    "report to a name": (reported_to_a_name, ("report.html",)),
    "export": (
        lambda folder: export_csv(Reader(folder / "logbook.sqlite"), folder), ("holds.csv", "readings.csv"),
    ),
    "traffic": (traffic, ()),
    "a small file": (lambda folder: write_whole(folder / "last-seen", "now"), ("last-seen",)),
    "a lock": (lambda folder: FolderLock(folder).acquire(), ("run.holder",)),
    "resume": (resumed, ()),
}  # fmt: skip


@pytest.mark.parametrize(("writer", "names"), WRITERS.values(), ids=WRITERS)
def test_a_link_is_replaced_and_not_followed(
    link: Callable[..., Path], precious: Path, writer: Callable[[Path], object], names: tuple[str, ...]
) -> None:
    """What writes into the folder works in files of the folder's own; the file behind the links is as it was."""
    folder = link(*WRITTEN)
    held = writer(folder)
    for name in names:
        assert not (folder / name).is_symlink()
        assert (folder / name).stat().st_size > 0
    if isinstance(held, FolderLock):
        held.release()
    assert precious.read_text("utf-8") == "kept"


@pytest.mark.parametrize("name", [*LOCKS, *OF_THE_DATABASE])
def test_a_link_under_a_name_of_the_system_is_refused_or_passed_over(
    link: Callable[..., Path], precious: Path, name: str
) -> None:
    """Locks and the database's own files are opened by libraries: none writes through a link, whatever else happens."""
    folder = link(name)
    with suppress(SweeprigError):
        resumed(folder)
    with suppress(SweeprigError):
        FolderLock(folder).acquire().release()
    with suppress(SweeprigError):
        fit(folder)
    assert precious.read_text("utf-8") == "kept"


def test_requests_are_left_in_the_run_only(run_folder: Path, tmp_path: Path) -> None:
    """A folder of requests that is a link to another folder takes none, and the other folder stays empty."""
    other = tmp_path / "other"
    other.mkdir()
    (run_folder / "requests").symlink_to(other)
    with pytest.raises(RunError, match="no place for requests"):
        requests.ask(run_folder, "stop")
    assert not list(other.iterdir())


@pytest.mark.parametrize("name", ["findings.json", "job.toml"])
@pytest.mark.parametrize("kind", ["pipe", "/dev/zero", "folder"])
def test_nothing_is_read_without_end(run_folder: Path, name: str, kind: str) -> None:
    """A pipe, a device or a folder under the name of a file of the run is an error at once, never a wait."""
    file = run_folder / name
    file.unlink(missing_ok=True)
    if kind == "pipe":
        os.mkfifo(file)
    elif kind == "folder":
        file.mkdir()
    else:
        file.symlink_to(kind)
    with pytest.raises(SweeprigError, match=name.replace(".", r"\.")):
        _ = open_run(run_folder).findings


def test_a_holder_file_that_is_a_pipe_is_no_name(run_folder: Path) -> None:
    """Who has the lock is not known from a pipe, from a file without end or from nested JSON; asking does not wait."""
    lock = FolderLock(run_folder)
    holder = run_folder / "run.holder"
    os.mkfifo(holder)
    assert lock.holder() == {}
    holder.unlink()
    holder.symlink_to("/dev/zero")
    assert lock.holder() == {}
    holder.unlink()
    holder.write_text("[" * 900, "utf-8")
    assert lock.holder() == {}
