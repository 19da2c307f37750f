"""Deadlines that a person gives when starting a run: "06:30", or hours. Pure: the moment it is now is an argument."""

from __future__ import annotations

import re
from collections.abc import Callable
from datetime import datetime, timedelta

from sweeprig.errors import ConfigError, Where
from sweeprig.job.models import Job
from sweeprig.job.sweep_models import Deadline

_CLOCK = re.compile(r"([0-9]{1,2}):([0-9]{2})")
_HOW = "Write for example --until 06:30, or --until 2026-03-02T06:30+01:00"
MOST_HOURS = 1000.0


def _here(naive: datetime) -> datetime:
    return naive.astimezone()


def moment_of(text: str, now: datetime, local: Callable[[datetime], datetime] = _here) -> datetime:
    """The moment that `text` means: a time of day, the next such after `now`; or date, time and offset from UTC.

    local: a time without offset → with that of the place, which differs before and after the clocks are put forward.
    ConfigError for what is neither, or has passed."""
    clock = _CLOCK.fullmatch(text.strip())
    if clock is not None:
        hour, minute = int(clock[1]), int(clock[2])
        if hour > 23 or minute > 59:
            raise _refused("this is no time of day", text, "00:00 to 23:59")
        today = now.replace(hour=hour, minute=minute, second=0, microsecond=0, tzinfo=None)
        moment = local(today)
        return moment if moment > now else local(today + timedelta(days=1))
    try:
        moment = datetime.fromisoformat(text.strip())
    except ValueError:
        raise _refused("this is neither a time of day nor a moment", text, "HH:MM, or date, time and offset") from None
    if moment.tzinfo is None:
        raise _refused("a date and time without its offset from UTC is ambiguous", text, "date, time and offset")
    if moment <= now:
        raise _refused("this moment has passed", text, f"after {now.isoformat(timespec='minutes')}")
    return moment


def _refused(what: str, text: str, allowed: str) -> ConfigError:
    return ConfigError(what, value=text[:60], allowed=allowed, remedy=_HOW, where=Where("--until"))


def ending(job: Job, until: datetime | None, hours: float | None) -> Job:
    """The job with that deadline instead of its sweep's; what the sweep says of spending the time stays. Neither given:
    the job as it is. ConfigError for both, or hours out of range."""
    if until is None and hours is None:
        return job
    if until is not None and hours is not None:
        raise ConfigError("a deadline is either a moment or hours, and both are given", remedy="Give one of the two")
    if hours is not None and not 0.0 < hours <= MOST_HOURS:
        allowed = f"above 0 h, up to {MOST_HOURS:g} h"
        raise ConfigError("a deadline lies ahead", value=f"{hours:g} h", allowed=allowed, where=Where("--hours"))
    old = job.sweep.deadline or Deadline()
    new = Deadline(until=until, hours=hours, spend=old.spend)
    return job.model_copy(update={"sweep": job.sweep.model_copy(update={"deadline": new})})
