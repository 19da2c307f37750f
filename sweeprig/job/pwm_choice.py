"""Which PWM frequencies are used for those that a sweep asks for: moved, where the sweep allows it, so that the
apertures of the meters hold whole periods.

Pure. What a timer gives by itself is taken as it is; whether the sweep may ask so is pwm_checks.py.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

from sweeprig.job.models import Job
from sweeprig.job.pwm_amount import BY_TIMER
from sweeprig.job.rig_models import Rig
from sweeprig.job.timer_models import timer_hz
from sweeprig.quantities import parse_quantity, show_quantity

WHOLE = 1e-4
"""A broken period worth no more than this part of the wave is none; adapters refuse or flag what is above."""

_BOARD_CLOCK_HZ = 16e6
_PRESCALERS = ((244.2, 1), (30.52, 8), (0.0, 64))  # drivers/firmware/README.md: above this frequency, this prescaler


@dataclass(frozen=True, slots=True)
class Pwm:
    """One frequency of the sweep, Hz: as asked for (BY_TIMER: whatever the timer gives) and as used.

    spread   readings average over a phase that runs on, since the apertures hold no whole periods of it
    remark   what must be known of it, in words; empty where it is used as it was asked for and nothing was moved
    """

    asked_hz: float
    used_hz: float
    spread: bool = False
    remark: str = ""


def board_ticks(pwm_hz: float) -> tuple[float, int]:
    """(timer clock Hz, whole ticks in a period) of the board at `pwm_hz` (drivers/firmware/README.md)."""
    prescaler = next(prescaler for above_hz, prescaler in _PRESCALERS if pwm_hz > above_hz)
    clock_hz = _BOARD_CLOCK_HZ / prescaler
    return clock_hz, max(1, round(clock_hz / pwm_hz))


def frequencies(job: Job) -> tuple[Pwm, ...]:
    """What is used for each frequency of the sweep, in its order."""
    rig, tolerance = job.rig, job.sweep.pwm_tolerance
    apertures = stated_apertures(rig)
    return tuple(_by_timer(rig, apertures) if hz == BY_TIMER else _moved(rig, hz, tolerance, apertures)
                 for hz in job.sweep.pwm)  # fmt: skip


def stated_apertures(rig: Rig) -> dict[str, float]:
    """Instrument → the aperture that its options state, s. What is no time is its adapter's to refuse."""
    found = {}
    for name, instrument in rig.instruments.items():
        stated = instrument.options.get("aperture")
        try:
            seconds = parse_quantity(stated, "s") if isinstance(stated, str) else 0.0
        except ValueError:
            continue
        if seconds > 0.0:
            found[name] = seconds
    return found


def broken_period(aperture_s: float, pwm_hz: float) -> float:
    """Largest error of a mean over the aperture for want of whole periods, as a part of the wave's height: the broken
    part (a quarter of a period at the worst duty) over the periods in the aperture."""
    periods = aperture_s * pwm_hz
    return min(abs(periods - round(periods)), 0.25) / periods


def _by_timer(rig: Rig, apertures: Mapping[str, float]) -> Pwm:
    assert rig.pwm_timer is not None  # pwm_checks: nothing else may be asked for by this word
    hz = timer_hz(rig.pwm_timer)
    what = f"the PWM frequency is what the timer gives, about {show_quantity(hz, 'Hz')} by its parts"
    how = f"; readings of {_names(apertures)} average over spread phase" if apertures else ""
    return Pwm(BY_TIMER, hz, bool(apertures), what + how)


def _moved(rig: Rig, asked: float, tolerance_percent: float, apertures: Mapping[str, float]) -> Pwm:
    """`asked` where its periods are whole or it must not be moved, else the nearest one that may be taken."""
    if tolerance_percent == 0.0 or not apertures:
        return Pwm(asked, asked)
    made = _made_by(rig)

    def whole(hz: float) -> bool:
        return all(broken_period(seconds, made(hz)) <= WHOLE for seconds in apertures.values())

    if whole(asked):
        return Pwm(asked, asked)
    longest, reach = max(apertures.values()), tolerance_percent / 100.0 * asked
    first, last = int((asked - reach) * longest), int((asked + reach) * longest) + 1
    near = [hz for periods in range(max(first, 1), last + 1) if abs((hz := periods / longest) - asked) <= reach]
    near = [float(f"{hz:.9g}") for hz in sorted(near, key=lambda hz: (abs(hz - asked), hz))]
    used = next((hz for hz in near if whole(hz)), None)
    shown, names = show_quantity(asked, "Hz"), _names(apertures)
    within = f"within {tolerance_percent:g} % (pwm_tolerance)"
    if used is None:
        remark = f"PWM {shown}: readings of {names} have whole periods at none {within}; they average over spread phase"
        return Pwm(asked, asked, True, remark)
    remark = (
        f"PWM {shown} was asked for and {used:.6g} Hz is used, {within}: readings of {names} then have whole periods"
    )
    return Pwm(asked, used, False, remark)


def _made_by(rig: Rig) -> Callable[[float], float]:
    """What the drive makes of a frequency: whole ticks of the board; other drives what they are told."""
    drive = rig.instruments.get(rig.roles.get("drive", ""))
    if drive is None or drive.adapter != "board":
        return lambda hz: hz

    def made(hz: float) -> float:
        clock_hz, ticks = board_ticks(hz)
        return clock_hz / ticks

    return made


def _names(apertures: Mapping[str, float]) -> str:
    return " and ".join(f"{name} ({show_quantity(seconds, 's')})" for name, seconds in apertures.items())
