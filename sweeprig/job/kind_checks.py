"""Whether a kind of motor fits the rig's kind of drive, and the values of a simulated one fit each other.

Pure, called by cross_checks.py.
"""

from __future__ import annotations

from collections.abc import Iterator

from sweeprig.errors import ConfigError
from sweeprig.job.models import Job
from sweeprig.job.problems import Sources, misfit
from sweeprig.job.simulated_models import Simulated, SimulatedControlInput
from sweeprig.job.toml_source import KeyPath

_KIND_OF = {
    "brushed": ("brushed", "geared", "prescribed"),
    "with_electronics": ("electronic", "control_input", "prescribed"),
}
"""`kind` of the motor → `simulated.kind` that may stand for it."""

SPEED_TOLERANCE_PERCENT = 10.0
"""Published specification of 4-wire fans, 3.3 (checks 10.5, verified)."""


def kind_checks(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """A control input belongs to a fan with electronics; the true motor is of the kind that the file states."""
    motor, drive_kind = job.motor, job.rig.drive_kind
    place = sources.where(("rig", "drive_kind"))
    if drive_kind == "control_input" and motor.kind != "with_electronics":
        yield misfit(
            sources, ("motor", "kind"), f"the rig drives a control input ({place}), which only electronics have",
            "with_electronics", "Correct the kind, or name a rig with a power switch",
        )  # fmt: skip
    true = motor.simulated
    if true is None:
        return
    path: KeyPath = ("motor", "simulated", "kind")
    allowed = _KIND_OF[motor.kind]
    if true.kind not in allowed:
        what = f"the true motor is not of the kind that the file states ({sources.where(('motor', 'kind'))})"
        yield misfit(sources, path, what, ", ".join(allowed), "Correct one of the two", default=true.kind)
    elif (true.kind == "control_input") != (drive_kind == "control_input"):
        what = f"the true motor and the rig's drive do not fit each other: drive_kind is {drive_kind} ({place})"
        wanted = ("control_input",) if drive_kind == "control_input" else tuple(k for k in allowed if k != true.kind)
        yield misfit(sources, path, what, ", ".join(wanted), "Name a rig of the other drive_kind", default=true.kind)
    yield from _simulated(true, sources)


def _simulated(true: Simulated, sources: Sources) -> Iterator[ConfigError]:
    if not isinstance(true, SimulatedControlInput):
        return
    place: KeyPath = ("motor", "simulated")
    low, slowest = true.minimum_duty_percent, true.minimum_rpm_percent
    # From the minimum upwards, y = 0 to 1: speed less duty is (slowest − low)·(1 − y) + 4·bend·y·(1 − y).
    worst = max(abs(((slowest - low) + 4.0 * true.bend_percent * y / 50.0) * (1.0 - y / 50.0)) for y in range(50))
    if worst > SPEED_TOLERANCE_PERCENT:
        yield misfit(
            sources, (*place, "minimum_rpm_percent"),
            f"speed in percent lies up to {worst:.3g} % off the duty, and the specification of 4-wire fans allows "
            f"{SPEED_TOLERANCE_PERCENT:g} %",
            f"near {low:g} (minimum_duty_percent), with a smaller bend_percent", "Bring them together",
        )  # fmt: skip
    if true.below_minimum == "C" and not 0.0 < true.fail_percent < low:
        yield misfit(
            sources, (*place, "fail_percent"), "type C stops somewhere below its minimum duty",
            f"above 0, below {low:g} (minimum_duty_percent)", "State where it stops", default=f"{true.fail_percent:g}",
        )  # fmt: skip
