"""Whether the frequencies and duties that a sweep asks for are such as the rig's drive can make.

Pure, like `cross_checks`, which calls it. Without an analogue timer only the word for one is refused.
"""

from __future__ import annotations

from collections.abc import Iterator

from sweeprig.errors import ConfigError, RoleMissing
from sweeprig.job.amounts import shown
from sweeprig.job.models import Job
from sweeprig.job.problems import Sources, misfit
from sweeprig.job.pwm_amount import BY_TIMER, TIMER
from sweeprig.job.pwm_choice import frequencies
from sweeprig.job.timer_models import PwmTimer, timer_ends, timer_hz, timer_step
from sweeprig.job.toml_source import KeyPath

MEASURED = {
    "duty": ("which duty a tap gives is known only by measuring it", 'duty = "scope.duty"'),
    "pwm_frequency": ("the timer's frequency is known only by measuring it", 'pwm_frequency = "scope.frequency"'),
}


def pwm_checks(job: Job, sources: Sources) -> Iterator[ConfigError]:
    timer = job.rig.pwm_timer
    if timer is not None and timer.supply <= 3.0 * timer.diode_drop:
        return  # timer_checks: such a timer does not swing, so there is nothing to reckon with
    yield from _settable(job, sources)
    if timer is None:
        yield from _one_each(job, sources)
        return
    yield from _measured(job, sources)
    yield from _within_reach(job, timer, sources)
    yield from _steps(job, timer, sources)


def _settable(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """The word stands alone and with a timer only; with a timer nothing else can be set."""
    timer, pwm, path = job.rig.pwm_timer, job.sweep.pwm, ("sweep", "pwm")
    if timer is not None and pwm != (BY_TIMER,):
        hz = shown(timer_hz(timer), "Hz")
        yield misfit(
            sources, path, f"nobody sets the frequency of the rig's timer ({sources.where(('rig', 'pwm_timer'))}): it "
            f"gives about {hz} by its parts", f'["{TIMER}"]', f'Write pwm = ["{TIMER}"]; other parts give another one',
        )  # fmt: skip
    elif timer is None and BY_TIMER in pwm:
        yield misfit(
            sources, path, "the rig has no [pwm_timer] that makes a frequency of its own", "frequencies",
            'Write for example pwm = ["1 kHz"], or name a rig with [pwm_timer]',
        )  # fmt: skip
    if timer is not None and job.sweep.pwm_tolerance > 0.0:
        yield misfit(
            sources, ("sweep", "pwm_tolerance"), "a timer's frequency cannot be moved", "0 % with [pwm_timer]",
            "Remove it",
        )  # fmt: skip


def _one_each(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Two frequencies that are moved to the same one would be measured twice under one name."""
    if BY_TIMER in job.sweep.pwm:
        return
    used: dict[float, float] = {}
    for position, one in enumerate(frequencies(job)):
        if one.used_hz in used:
            path: KeyPath = ("sweep", "pwm", position)
            first, hz = shown(used[one.used_hz], "Hz"), shown(one.used_hz, "Hz")
            yield misfit(
                sources, path, f"within pwm_tolerance this and {first} both become {hz}", "frequencies further apart",
                "Remove one, or lower pwm_tolerance",
            )  # fmt: skip
        used.setdefault(one.used_hz, one.asked_hz)


def _measured(job: Job, sources: Sources) -> Iterator[ConfigError]:
    for role, (reason, example) in MEASURED.items():
        if role not in job.rig.roles:
            yield RoleMissing(
                f"the rig has a timer with digital potentiometer and offers no {role}: {reason}",
                value=f"roles are {', '.join(job.rig.roles) or 'none'}",
                allowed=f"a rig with the role {role}",
                where=sources.where(("rig", "roles", role)),
                remedy=f"Add for example {example} to [roles]",
                topic="rig",
            )


def _within_reach(job: Job, timer: PwmTimer, sources: Sources) -> Iterator[ConfigError]:
    """Duties that the sweep names lie between those of the first and the last tap, or one step beyond."""
    sweep, step = job.sweep, timer_step(timer)
    low, high = timer_ends(timer)
    stated: list[tuple[KeyPath, float]] = []
    if sweep.run_in is not None:
        stated.append((("sweep", "run_in", "duty"), sweep.run_in.duty))
    if sweep.reference is not None:
        stated.append((("sweep", "reference", "duty"), sweep.reference.duty))
    if sweep.curve is not None:
        stated += [(("sweep", "curve", "duties", place), duty) for place, duty in enumerate(sweep.curve.duties or ())]
    if sweep.kick is not None:
        stated += [(("sweep", "kick", "duties"), duty) for duty in sweep.kick.duties or ()]
    for path, duty in stated:
        if not low - step <= duty <= high + step:
            yield misfit(
                sources, path, f"{shown(duty, '%')} is beyond what the rig's timer gives by its parts",
                f"{low:.4g} % to {high:.4g} %", "Move it; smaller end resistors reach further",
            )  # fmt: skip
    if sweep.duty.low >= high or sweep.duty.high <= low:
        yield misfit(
            sources, ("sweep", "duty"), "no duty that the rig's timer gives by its parts lies within [duty]",
            f"{low:.4g} % to {high:.4g} %", "Widen [duty]",
        )  # fmt: skip


def _steps(job: Job, timer: PwmTimer, sources: Sources) -> Iterator[ConfigError]:
    """Steps of the searches that the sweep states itself: none finer than a tap."""
    one_tap = timer_step(timer)
    for table in ("stall", "start"):
        stage = getattr(job.sweep, table)
        if stage is not None and stage.step is not None and stage.step < one_tap:
            yield misfit(
                sources, ("sweep", table, "step"), "finer than one tap of the rig's potentiometer", f"{one_tap:.4g} % "
                "or more", "Leave it out: then it is one tap, or the usual step where that is coarser",
            )  # fmt: skip
