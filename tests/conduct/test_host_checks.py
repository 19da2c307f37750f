"""The machine: what must be well with it before a run begins, and what only is said."""

from __future__ import annotations

import errno
import os
import sys
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import pytest

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.host import Check, System, checks, predicted_bytes, process_facts, refuse
from sweeprig.errors import ConfigError
from sweeprig.logbook.traffic import CAP_BYTES

NOON = datetime(2026, 3, 2, 12, tzinfo=UTC).timestamp()


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
