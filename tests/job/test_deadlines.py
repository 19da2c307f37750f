"""Deadlines as a person gives them when starting a run."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone
from zoneinfo import ZoneInfo

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import freeze, load, shipped
from sweeprig.job.deadlines import ending, moment_of

CET = timezone(timedelta(hours=1))
EVENING = datetime(2026, 3, 2, 18, 5, tzinfo=CET)


def local(naive: datetime) -> datetime:
    return naive.replace(tzinfo=CET)


@pytest.mark.parametrize(
    ("text", "moment"),
    [
        ("06:30", datetime(2026, 3, 3, 6, 30, tzinfo=CET)),
        ("18:06", datetime(2026, 3, 2, 18, 6, tzinfo=CET)),
        ("18:05", datetime(2026, 3, 3, 18, 5, tzinfo=CET)),
        (" 6:30 ", datetime(2026, 3, 3, 6, 30, tzinfo=CET)),
        ("2026-03-03T06:30+00:00", datetime(2026, 3, 3, 6, 30, tzinfo=UTC)),
    ],
)
def test_what_a_time_means(text: str, moment: datetime) -> None:
    """A time of day is the next such; a date with its offset is that moment."""
    assert moment_of(text, EVENING, local) == moment


def test_the_night_when_the_clocks_go_forward() -> None:
    """06:30 is what the clock on the wall shows then, though the night is an hour shorter (EU rule: last Sunday of
    March, 01:00 UTC)."""
    zone = ZoneInfo("Europe/Berlin")
    now = datetime(2026, 3, 28, 22, 0, tzinfo=zone)
    moment = moment_of("06:30", now.astimezone(CET), lambda naive: naive.replace(tzinfo=zone))
    assert moment - now.astimezone(UTC) == timedelta(hours=7, minutes=30)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("25:00", "no time of day"),
        ("half past six", "neither a time of day nor a moment"),
        ("2026-03-03T06:30", "without its offset"),
        ("2026-03-02T06:30+01:00", "has passed"),
        ("٠٦:٣٠", "neither a time of day nor a moment"),
    ],
)
def test_what_is_refused(text: str, says: str) -> None:
    """What is no time, is ambiguous, or has passed is refused with an example of how to write it."""
    with pytest.raises(ConfigError, match=says) as refused:
        moment_of(text, EVENING, local)
    assert "--until 06:30" in str(refused.value)


@pytest.mark.parametrize("hours", [0.0, -1.0, 1001.0, float("nan"), float("inf")])
def test_hours_out_of_range(hours: float) -> None:
    """Hours must lie ahead and be finite."""
    with pytest.raises(ConfigError, match="--hours: a deadline lies ahead"):
        ending(load(shipped("demo")), None, hours)


def test_one_of_the_two() -> None:
    """A moment and hours together are refused; neither leaves the job as it is."""
    job = load(shipped("demo"))
    with pytest.raises(ConfigError, match="both are given"):
        ending(job, EVENING, 2.0)
    assert ending(job, None, None) is job


def test_hours_count_from_the_start() -> None:
    """Hours become a moment when the run begins."""
    plan = freeze(ending(load(shipped("demo")), None, 2.0), began_utc=1000.0)
    assert plan.deadline_utc == 1000.0 + 7200.0
