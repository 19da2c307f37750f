"""What an unattended run needs, checked in words before anything moves. The rig is described, not opened; nothing acts.

`points` is the list that `preview` shows; those that are not met are what refuses the run.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.rig import RigUse, build_adapter
from sweeprig.job import Job, freeze
from sweeprig.roles import Drive


@dataclass(frozen=True, slots=True)
class Point:
    """words: what a rig that is left alone must do, as the end of a sentence that begins with it; met; why: what is
    wrong and what to do about it, where it is not met."""

    words: str
    met: bool
    why: str


def locked_rotor_sum(job: Job) -> dict[str, float]:
    """The worst case from the last sign of rotation to the drive off, seconds, part by part.

    worst reading cycle + age limit + switch-off time (design: section 6, point 3), and their sum under "together".
    """
    cycle = BOUNDS["trial_window_s"] + BOUNDS["cycle_s"]
    age = job.rig.limits.longest_age.speed
    return {
        "one reading cycle at its worst": cycle,
        "longest age of the speed reading": age,
        "switching off": BOUNDS["off_s"],
        "together": cycle + age + BOUNDS["off_s"],
    }


def points(job: Job, now: float) -> list[Point]:
    """All points, `now` in UTC seconds. ConfigError for a drive whose adapter is unknown or refuses its options."""
    return [_locked(job), _over_current(job), _heartbeat(job), _cautions(job), _hands(job), _deadline(job, now)]


def refusals(job: Job, now: float) -> list[str]:
    """Reasons why this job may not run unattended; empty when it may. Each is a sentence with its figure."""
    return [point.why for point in points(job, now) if not point.met]


def _locked(job: Job) -> Point:
    sums: Mapping[str, float] = locked_rotor_sum(job)
    together, limit = sums["together"], job.limits().locked_rotor_time
    return Point(
        f"switches off {together:.1f} s after the last sign of rotation at the latest, within the locked-rotor time of "
        f"{limit:g} s",
        together < limit,
        f"the drive could stay on a locked rotor for {together:.1f} s, "
        f"longer than the locked-rotor time of {limit:g} s: shorten longest_age.speed, or use a sturdier motor",
    )


def _over_current(job: Job) -> Point:
    limit = job.limits().current
    return Point(
        f"notices more than {limit:g} A: a channel for the current, or a supply that limits it",
        "current" in job.rig.roles or "supply" in job.rig.roles,
        "no channel for the current and no supply with a limit: nothing would notice an over-current",
    )


def _heartbeat(job: Job) -> Point:
    """At least three polls long, and no longer than the rig file says; without one the supervisor must be in time."""
    rig, use = job.rig, RigUse.of_job(job)
    drive = build_adapter(use, rig.roles["drive"].partition(".")[0])
    heartbeat_s = drive.heartbeat_s if isinstance(drive, Drive) else None
    locked, stated = job.limits().locked_rotor_time, rig.limits.heartbeat
    if heartbeat_s is None:
        hang_s = BOUNDS["hang_s"] + BOUNDS["off_s"]
        return Point(
            f"has no heartbeat in its drive, and is switched off {hang_s:g} s after a program that hangs",
            stated is None and (hang_s <= locked or rig.in_process),
            f"the drive has no heartbeat, and a program that hangs would leave it on for up to {hang_s:g} s, "
            f"locked-rotor time {locked:g} s: use a drive with a heartbeat",
        )
    least = 3.0 * BOUNDS["drive_poll_s"]
    most = locked if stated is None else min(stated, locked)
    return Point(
        f"has a drive that stops by itself {heartbeat_s:g} s after the computer falls silent, from {least:g} s (three "
        f"polls) to {most:g} s",
        least <= heartbeat_s <= most,
        f"the drive's heartbeat of {heartbeat_s:g} s is not within {least:g} s (three polls) and {most:g} s (limits, "
        "locked-rotor time): correct the option heartbeat",
    )


def _cautions(job: Job) -> Point:
    rig = job.rig
    simulated = rig.in_process or rig.rate is not None
    who = rig.cautions_acknowledged
    said = "simulated: not needed" if simulated and who is None else who or "nobody did"
    return Point(
        f"has its cautions acknowledged ({said})",
        simulated or who is not None,
        "nobody has acknowledged the cautions for this rig: read `sweeprig manual safety`, see to each, and write "
        'cautions_acknowledged = "your name, 2026-03-02" into the rig file',
    )


def _hands(job: Job) -> Point:
    by_hand = freeze(job).by_hand
    axes = " and ".join(by_hand)
    return Point(
        "needs nobody to change anything on it",
        not by_hand,
        f"the sweep asks for several values of {axes}, which only a person can set: name one, or stay with the rig",
    )


def _deadline(job: Job, now: float) -> Point:
    """A simulated bench inside this process has a calendar of its own."""
    deadline = job.sweep.deadline
    until = None if deadline is None or job.rig.in_process else deadline.until
    if until is None:
        return Point("has time: no deadline that has passed", True, "")
    shown = until.astimezone(UTC).strftime("%Y-%m-%d %H:%M UTC")
    today = datetime.fromtimestamp(now, UTC).strftime("%Y-%m-%d %H:%M UTC")
    return Point(
        f"has time until {shown}", until.timestamp() > now, f"the deadline, {shown}, has passed (it is {today})"
    )
