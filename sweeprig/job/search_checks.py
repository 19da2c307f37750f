"""Whether the sweep's searches, kick, long run and references fit each other and the motor.

Pure, like `cross_checks`, which calls it.
"""

from __future__ import annotations

from collections.abc import Iterator

from sweeprig.errors import ConfigError
from sweeprig.job.amounts import shown
from sweeprig.job.models import Job
from sweeprig.job.problems import Sources, misfit
from sweeprig.job.toml_source import KeyPath

ADAPTIVE_ONLY = {"stall": ("standard_error", "longest"), "start": ("standard_error",)}
COUNTS = {"stall": "holds", "start": "trials"}


def search_checks(job: Job, sources: Sources) -> Iterator[ConfigError]:
    yield from _searches(job, sources)
    yield from _sharpened(job, sources)
    yield from _needs_stall(job, sources)
    yield from _orders(job, sources)
    yield from _duties(job, sources)
    yield from _arrives(job, sources)
    yield from _bounded(job, sources)


def _searches(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """A ladder has a number of trials and nothing of the adaptive search's."""
    for table, count in COUNTS.items():
        stage = getattr(job.sweep, table)
        if stage is None or stage.search != "ladder":
            continue
        if getattr(stage, count) is None:
            yield misfit(
                sources, ("sweep", table), f"a ladder needs to know how many trials to make, and {count} is missing",
                "a whole number from 4", f'Write for example {count} = 24, or search = "adaptive"',
            )  # fmt: skip
        for key in ADAPTIVE_ONLY[table]:
            if getattr(stage, key) is not None:
                yield misfit(
                    sources, ("sweep", table, key), "a ladder makes its trials whatever they tell",
                    f"without {key} for a ladder", f'Remove it, or write search = "adaptive" in [{table}]',
                )  # fmt: skip


def _sharpened(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """What is to be sharpened must be searched for; checked where the sweep says something else than nothing, since a
    frozen job has the default written out."""
    sweep = job.sweep
    if sweep.sharpen == type(sweep).model_fields["sharpen"].default:
        return
    for name in sweep.sharpen:
        table = "start" if name.startswith("start") else "stall"
        if getattr(sweep, table) is None:
            yield misfit(
                sources, ("sweep", "sharpen"), f"{name} is found by the trials of [{table}], and the sweep has none",
                "findings that the sweep looks for", f"Add [{table}], or leave it out of sharpen",
            )  # fmt: skip


def _needs_stall(job: Job, sources: Sources) -> Iterator[ConfigError]:
    sweep = job.sweep
    reasons = {
        "kick": "after the kick the motor runs at the lowest reliable duty plus the margin",
        "long_run": "long holds are placed by what the stall trials show",
    }
    for table, reason in reasons.items():
        if getattr(sweep, table) is not None and sweep.stall is None:
            yield misfit(
                sources, ("sweep", table), f"{reason}, and the sweep has no [stall] table", "[stall] beside it",
                f"Add [stall], or remove [{table}]",
            )  # fmt: skip


def _orders(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Shortest below longest, and what must be longer than something else."""
    sweep, pairs = job.sweep, []
    if sweep.kick is not None:
        pairs.append((("sweep", "kick", "longest"), sweep.kick.longest, sweep.kick.shortest, "shortest"))
    if sweep.long_run is not None and sweep.stall is not None:
        hold_time = sweep.stall.hold_time
        pairs.append((("sweep", "long_run", "hold_time"), sweep.long_run.hold_time, hold_time, "[stall] hold_time"))
    if sweep.stall is not None and sweep.stall.longest is not None:
        pairs.append((("sweep", "stall", "longest"), sweep.stall.longest, sweep.stall.hold_time, "hold_time"))
    if sweep.run_in is not None and sweep.run_in.longest is not None:
        pairs.append((("sweep", "run_in", "longest"), sweep.run_in.longest, sweep.run_in.time, "time"))
    for path, longer, shorter, name in pairs:
        if longer < shorter:
            least = shown(shorter, "s")
            yield misfit(
                sources, path, f"shorter than {name}, {least}", f"{least} or more", "Lengthen it",
                default=shown(longer, "s"),
            )  # fmt: skip
    if sweep.run_in is not None and sweep.run_in.longest is not None and sweep.run_in.drift_per_hour is None:
        yield misfit(
            sources, ("sweep", "run_in", "longest"), "the run-in ends after its time unless drift_per_hour is given",
            "together with drift_per_hour", 'Write for example drift_per_hour = "1 %", or remove longest',
        )  # fmt: skip


def _duties(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Reference and kick duties lie within what a hold may use."""
    sweep = job.sweep
    stated: list[tuple[KeyPath, float]] = []
    if sweep.reference is not None:
        stated.append((("sweep", "reference", "duty"), sweep.reference.duty))
    if sweep.kick is not None:
        stated += [(("sweep", "kick", "duties"), duty) for duty in sweep.kick.duties or ()]
    for path, duty in stated:
        if not sweep.duty.low <= duty <= sweep.duty.high or duty == 0.0:
            yield misfit(
                sources, path, f"{shown(duty, '%')} is not within what a hold may use",
                f"above 0 %, {shown(sweep.duty.low, '%')} to {shown(sweep.duty.high, '%')} (duty)", "Correct it",
                default=shown(duty, "%"),
            )  # fmt: skip


def _arrives(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """The speed must have arrived in a reference hold and in a kick's hold time."""
    sweep, needed = job.sweep, 5.0 * job.motor.longest_time_constant
    times: list[tuple[KeyPath, float]] = []
    if sweep.reference is not None:
        times.append((("sweep", "reference", "time"), sweep.reference.time))
    if sweep.kick is not None:
        times.append((("sweep", "kick", "hold_time"), sweep.kick.hold_time))
    for path, seconds in times:
        if seconds * (1.0 + 1e-9) < needed:
            yield misfit(
                sources, path, "shorter than five of the motor's longest time constants, "
                f"{shown(needed, 's')} ({sources.where(('motor', 'longest_time_constant'))})",
                f"{shown(needed, 's')} or more", "Lengthen it: the speed has not arrived before",
                default=shown(seconds, "s"),
            )  # fmt: skip


def _bounded(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """A pulse that starts nothing leaves the rotor locked; a curve to be refined has more holds than points."""
    sweep, locked = job.sweep, job.limits().locked_rotor_time
    if sweep.kick is not None and sweep.kick.longest >= locked:
        own = job.rig.limits.locked_rotor_time > job.motor.locked_rotor_time
        owner: KeyPath = ("motor", "locked_rotor_time") if own else ("rig", "limits", "locked_rotor_time")
        yield misfit(
            sources, ("sweep", "kick", "longest"),
            f"a motor that a pulse does not start stands locked for as long as it may ({sources.where(owner)})",
            f"below {shown(locked, 's')}", "Shorten it, or protection ends the run",
            topic="safety", default=shown(sweep.kick.longest, "s"),
        )  # fmt: skip
    curve = sweep.curve
    if curve is None or curve.holds is None:
        return
    if curve.standard_error is None:
        yield misfit(
            sources, ("sweep", "curve", "holds"), "no point is added to the curve unless standard_error is given",
            "together with standard_error", 'Write for example standard_error = "1 %", or remove holds',
        )  # fmt: skip
    points = curve.points or len(curve.duties or ())
    if curve.holds < points:
        yield misfit(
            sources, ("sweep", "curve", "holds"), f"fewer than the {points} points that are made in any case",
            f"{points} or more", "Raise it, or remove standard_error and holds",
        )  # fmt: skip
