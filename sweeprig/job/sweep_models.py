"""The sweep file: what to find out, and where: axes, curve, stall and start trials, settling, deadline.

Field names are the file's keys; quantities are held in base units (Hz, V, s, %, rpm). No checks across tables.
"""

from __future__ import annotations

from datetime import datetime
from typing import Annotated, Literal

from pydantic import AfterValidator, Field

from sweeprig.job.amounts import Amount, Number, Strict, Words, problem
from sweeprig.job.pwm_amount import PwmAmount

_PWM = PwmAmount(
    "Hz", 20.0, 100_000.0, "Below 20 Hz the rotor follows single pulses; above 100 kHz a duty step exceeds 0.6 %"
)
_DUTY = Amount("%", 0.0, 100.0, "Duty is the on-time in percent of the period")
_SUPPLY = Amount("V", 0.0, 100.0, "A motor needs some supply, and sweeprig is for extra-low voltage", above=True)
_STEP = Amount("%", 0.01, 10.0, "Finer than the drive's own step cannot be set, coarser finds no threshold")
_HOLD = Amount("s", 0.5, 86_400.0, "A hold must see several turns, and must end")
_ERROR = Amount("%", 0.02, 10.0, "Duty; finer is below what a drive can set")
_REST = Amount("s", 1.0, 3600.0, "Rest is seen as a time without edges")
_TRIALS = Number(4, 10_000, "Fewer say nothing about a threshold", whole=True)
_RELAUNCH = Amount("%", 10.0, 100.0, "A falling approach begins at least 10 % duty above the stall duty")


def _all_different(items: tuple[object, ...]) -> tuple[object, ...]:
    """Refuse a value that stands twice on an axis: its condition would be measured twice under one name."""
    for item in items:
        if items.count(item) > 1:
            raise problem("a value stands twice in this list", None, "each once", 'Remove one; "1 kHz" is "1000 Hz"')
    return items


_Different = AfterValidator(_all_different)
_Axis = Field(min_length=1, max_length=20, strict=False)


class DutyRange(Strict):
    """Lowest and highest duty that a hold may use, %."""

    low: Annotated[float, _DUTY] = 0.0
    high: Annotated[float, _DUTY] = 100.0


class Zero(Strict):
    """Everything read with the drive off before anything turns."""

    time: Annotated[float, Amount("s", 0.5, 600.0, "Offsets are means of several readings")] = 3.0


class RunInStage(Strict):
    """Warm-up at a fixed duty, again in each session.

    drift_per_hour, longest   … in pieces of `time`, until the speed drifts by less an hour, or for so long in all
    """

    duty: Annotated[float, _DUTY]
    time: Annotated[float, Amount("s", 1.0, 86_400.0, "A winding warms in minutes")]
    drift_per_hour: Annotated[float, Amount("%", 0.05, 50.0, "Speed in percent an hour")] | None = None
    longest: Annotated[float, Amount("s", 1.0, 86_400.0)] | None = None


class Reference(Strict):
    """A hold at one duty again and again through the night: what shows that the motor drifts, and by how much."""

    duty: Annotated[float, _DUTY]
    every: Annotated[float, Amount("s", 60.0, 86_400.0, "References more often than that would be most of the night")]
    time: Annotated[float, _HOLD]


class Curve(Strict):
    """Speed against duty, downwards and upwards again.

    points, lowest   so many duties, denser at low duty, from the range's high end down to `lowest`
    duties           or these very ones, %; then `points` is left out
    least, most      shortest and longest wait for the speed to settle at each, s
    standard_error   further points where the curve bends and replicates, until the curve is known so well everywhere, %
                     of the highest speed; holds: but no more than so many of the falling branch at a condition
    """

    points: Annotated[int, Number(3, 100, "A curve needs three points", whole=True)] | None = None
    lowest: Annotated[float, _DUTY] | None = None
    duties: (
        Annotated[tuple[Annotated[float, _DUTY], ...], Field(min_length=3, max_length=100, strict=False), _Different]
        | None
    ) = None
    least: Annotated[float, Amount("s", 0.1, 600.0)] = 2.0
    most: Annotated[float, Amount("s", 1.0, 3600.0)] = 20.0
    standard_error: Annotated[float, Amount("%", 0.05, 10.0, "In percent of the highest speed")] | None = None
    holds: Annotated[int, Number(3, 1_000, "Each condition's curve must end", whole=True)] | None = None


class Stall(Strict):
    """Trials of falling approach: relaunch well above, step down, expose for `hold_time`.

    search           `ladder`: step by step; `adaptive`: after each outcome the hold that tells most per second
    step             duties are multiples of it; None: 0.5 % for the ladder, 0.1 % for the adaptive search
    holds            so many (ladder), at most so many (adaptive; None: 80)
    standard_error   adaptive: until the findings to sharpen are known so well, %; None: 0.25 %
    longest          adaptive: no exposure lasts longer, s; None: twice `hold_time`
    """

    search: Literal["ladder", "adaptive"] = "ladder"
    hold_time: Annotated[float, _HOLD]
    step: Annotated[float, _STEP] | None = None
    holds: Annotated[int, _TRIALS] | None = None
    standard_error: Annotated[float, _ERROR] | None = None
    longest: Annotated[float, _HOLD] | None = None
    relaunch_above: Annotated[float, _RELAUNCH] = 12.0
    relaunch_time: Annotated[float, Amount("s", 0.5, 600.0)] = 4.0


class Start(Strict):
    """Trials from rest: no edge for `rest_time`, then a full step, watched for `start_time`. The rest as for stall."""

    search: Literal["ladder", "adaptive"] = "ladder"
    start_time: Annotated[float, Amount("s", 0.5, 600.0, "A start is ten whole turns")]
    rest_time: Annotated[float, _REST] = 10.0
    step: Annotated[float, _STEP] | None = None
    trials: Annotated[int, _TRIALS] | None = None
    standard_error: Annotated[float, _ERROR] | None = None


class Kick(Strict):
    """Starts from rest by a pulse, then the lowest reliable duty plus `margin`.

    duties              of the pulse; None: the highest allowed
    shortest, longest   pulse times that are tried, s
    hold_time           the rotor must still turn at its end, s
    trials              at most so many a condition and kick duty
    standard_error      … until the pulse time is known so well, in percent of itself
    """

    duties: (
        Annotated[tuple[Annotated[float, _DUTY], ...], Field(min_length=1, max_length=3, strict=False), _Different]
        | None
    ) = None
    margin: Annotated[float, Amount("%", 0.0, 50.0, "Duty above the lowest reliable one")] = 1.0
    shortest: Annotated[float, Amount("s", 0.001, 10.0, "No drive times a shorter pulse from outside")] = 0.02
    longest: Annotated[float, Amount("s", 0.01, 60.0)] = 2.0
    hold_time: Annotated[float, _HOLD] = 5.0
    rest_time: Annotated[float, _REST] = 10.0
    trials: Annotated[int, _TRIALS] = 40
    standard_error: Annotated[float, Amount("%", 2.0, 200.0, "In percent of the pulse time")] = 25.0


class LongRun(Strict):
    """A few long holds where they pin how the hazard falls, for the bound of a run of `service`."""

    service: Annotated[float, Amount("s", 3600.0, 3.2e8, "A service time is hours to years")] = 86_400.0
    hold_time: Annotated[float, _HOLD] = 1800.0
    holds: Annotated[int, Number(1, 100, "Each takes its whole hold time", whole=True)] = 6
    probability: Annotated[float, Amount("%", 50.0, 99.9, "Of running through the service time")] = 99.0


class Settle(Strict):
    """When a reading counts as settled: within `tolerance` of its final value, with `confidence`."""

    tolerance: Annotated[float, Amount("%", 0.5, 20.0, "Finer than 0.5 % takes longer than it is worth")] = 1.0
    confidence: Annotated[float, Amount("%", 80.0, 99.9)] = 99.0


def _with_zone(moment: datetime) -> datetime:
    if moment.tzinfo is None:
        example = f"{moment.replace(microsecond=0).isoformat()}+01:00"
        raise problem(
            "a time without its offset from UTC is ambiguous", str(moment), "", f"Write for example {example}"
        )
    return moment


class Deadline(Strict):
    """When the run must have finished: a moment, or hours after its start (then fixed as UTC when it starts).

    spend   `all`: adaptive searches go on sharpening until then; `needed`: the run ends when all is known as asked
    """

    until: Annotated[datetime, AfterValidator(_with_zone)] | None = None
    hours: Annotated[float, Number(0.0, 1000.0, "A deadline lies ahead", above=True)] | None = None
    spend: Literal["all", "needed"] = "all"


Sharpened = Literal[
    "stall_duty_percent", "sustain_99_duty_percent", "start_duty_percent", "start_99_duty_percent"
]  # fmt: skip
"""What an adaptive search can bring the standard error of down."""


class Sweep(Strict):
    """A sweep. A table that is left out ([run_in], [curve], [stall], [start], [kick], …) is not done.

    pwm            frequencies; ["timer"] where the rig's analogue timer makes its own
    pwm_tolerance  a frequency may be moved by so much, % of it, so that the meters' apertures hold whole periods
    sharpen        findings whose standard errors the adaptive searches bring down
    """

    name: Annotated[str, Words(80)]
    pwm: Annotated[tuple[Annotated[float, _PWM], ...], _Axis, _Different]
    supply: Annotated[tuple[Annotated[float, _SUPPLY], ...], _Axis, _Different]
    direction: Annotated[tuple[Literal["forward", "reverse"], ...], _Axis, _Different] = ("forward",)
    load: Annotated[tuple[Annotated[str, Words(80)], ...], _Axis, _Different] = ("free air",)
    duty: DutyRange = Field(default_factory=DutyRange)
    lowest_speed: Annotated[
        float,
        Amount("rpm", 0.0, 100_000.0, "Slower than this the tachometer cannot tell turning from rest", above=True),
    ]
    seed: Annotated[int, Number(0, 999_999_999, "Random choices are drawn from it", whole=True)] = 1
    saturation: Annotated[float, Amount("%", 0.1, 20.0, "The usable range ends so far below the highest speed")] = 2.0
    pwm_tolerance: Annotated[float, Amount("%", 0.0, 10.0, "Further off it would be another condition")] = 0.0
    zero: Zero | None = None
    run_in: RunInStage | None = None
    curve: Curve | None = None
    stall: Stall | None = None
    start: Start | None = None
    kick: Kick | None = None
    long_run: LongRun | None = None
    reference: Reference | None = None
    sharpen: Annotated[tuple[Sharpened, ...], Field(min_length=1, max_length=4, strict=False), _Different] = (
        "sustain_99_duty_percent",
        "start_99_duty_percent",
    )
    settle: Settle = Field(default_factory=Settle)
    deadline: Deadline | None = None
