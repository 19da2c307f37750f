"""What an unattended run needs, checked in words before anything moves. Pure: the rig is described, not opened."""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.conduct.bounds import BOUNDS
from sweeprig.job import Job


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


def refusals(job: Job) -> list[str]:
    """Reasons why this job may not run unattended; empty when it may. Each is a sentence with its figure."""
    found = []
    sums: Mapping[str, float] = locked_rotor_sum(job)
    limit = job.limits().locked_rotor_time
    if sums["together"] >= limit:
        found.append(
            f"the drive could stay on a locked rotor for {sums['together']:.1f} s, "
            f"longer than the locked-rotor time of {limit:g} s: shorten longest_age.speed, or use a sturdier motor"
        )
    if "current" not in job.rig.roles and "supply" not in job.rig.roles:
        found.append("no channel for the current and no supply with a limit: nothing would notice an over-current")
    return found
