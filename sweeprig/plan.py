"""The frozen plan: the sweep merged with what rig and motor allow. What `schedule` and `characterise` are given.

Built by `job.freeze`; all numbers are in the unit their name says. Nothing here acts.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from sweeprig.holds import Condition


@dataclass(frozen=True, slots=True)
class RunIn:
    """Warm-up at the start of every session: `time_s`, and then on, in pieces as long, until the speed drifts by less
    than `drift_percent_per_hour`, but no longer than `most_s` in all. None: the time alone."""

    duty_percent: float
    time_s: float
    drift_percent_per_hour: float | None = None
    most_s: float = 0.0


@dataclass(frozen=True, slots=True)
class ReferencePlan:
    """A hold at one duty again and again through the night, at each condition in turn, so that drift shows."""

    duty_percent: float
    every_s: float
    time_s: float


@dataclass(frozen=True, slots=True)
class CurvePlan:
    """Duties visited downwards from the top, then upwards again; the motor is settled and read at each.

    standard_error_percent   further points are placed where the curve bends, and replicates made, until the speed
                             curve is known so well everywhere, in percent of the highest speed; None: the duties alone
    most_points              … but no more than so many holds of the falling branch at one condition
    """

    duties_percent: tuple[float, ...]
    least_s: float
    most_s: float
    standard_error_percent: float | None = None
    most_points: int = 0


@dataclass(frozen=True, slots=True)
class StallPlan:
    """Falling-approach trials: relaunch well above, step down to the trial duty, expose for `hold_time_s`.

    search                   `ladder`, or `adaptive`: after each outcome the hold that tells most per second
    holds                    trials at each condition: so many (ladder), at most so many (adaptive)
    standard_error_percent   adaptive: … until the findings to sharpen are known so well
    times_s                  adaptive: the lengths of exposure to choose from, shortest first
    """

    search: str
    hold_time_s: float
    step_percent: float
    holds: int
    relaunch_above_percent: float
    relaunch_s: float
    standard_error_percent: float = 0.25
    times_s: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True)
class StartPlan:
    """Trials from rest: drive off until no edge came for `rest_time_s`, full step to the trial duty, `start_time_s`."""

    search: str
    start_time_s: float
    rest_time_s: float
    step_percent: float
    trials: int
    standard_error_percent: float = 0.25


@dataclass(frozen=True, slots=True)
class KickPlan:
    """Starts from rest by a pulse at a kick duty, then the run duty (lowest reliable duty plus `margin_percent`).

    duties_percent   kick duties, each with a finding of its own
    shortest_s, longest_s   pulse times to choose from, spaced evenly in their logarithm
    hold_time_s      the rotor must still turn at its end
    standard_error   of the natural logarithm of `kick_99_s`
    """

    duties_percent: tuple[float, ...]
    margin_percent: float
    shortest_s: float
    longest_s: float
    hold_time_s: float
    rest_time_s: float
    trials: int
    standard_error: float = 0.3


@dataclass(frozen=True, slots=True)
class LongRunPlan:
    """A few long holds where they pin how the hazard falls with duty: for the bound of a run of `service_s`."""

    service_s: float
    hold_time_s: float
    holds: int
    probability: float = 0.99


@dataclass(frozen=True, slots=True)
class SettlePlan:
    tolerance_percent: float
    confidence_percent: float = 99.0


@dataclass(frozen=True, slots=True)
class TapPlan:
    """A drive that makes its duty by an analogue timer whose digital potentiometer is stepped, tap by tap.

    ends_percent   duty at tap 0 and at `highest_tap` by the parts' nominal values; straight between them
    allowed_percent   lowest and highest duty that a hold may use: no tap is chosen that gives another one
    pwm_hz         the frequency that the timer gives, by its parts; nobody sets it
    first          taps visited before anything else, in this order; time_s: how long each, s
    """

    ends_percent: tuple[float, float]
    highest_tap: int
    allowed_percent: tuple[float, float]
    pwm_hz: float
    first: tuple[int, ...]
    time_s: float


Likely = tuple[float, float]
"""A positive quantity, believed to be about so large: median, and standard deviation of its natural logarithm."""


@dataclass(frozen=True, slots=True)
class Expected:
    """What is believed of the motor before the run; motors are drawn from it to predict the night, nothing else.

    The defaults are guesses for small brushed motors (common practice, no source). stall, start: duty at which half of
    the trials succeed, and the standard deviation of that law, %; kick_s: pulse time; settle_s: from a step of duty to
    the end of a curve hold; coast_s: from drive off to the last edge. source: where it comes from, in words.
    """

    stall_percent: Likely = (12.0, 0.3)
    stall_spread_percent: Likely = (0.3, 0.7)
    start_percent: Likely = (18.0, 0.3)
    start_spread_percent: Likely = (0.8, 0.7)
    kick_s: Likely = (0.1, 0.7)
    settle_s: Likely = (5.0, 0.4)
    coast_s: Likely = (3.0, 0.4)
    source: str = "guesses for small motors"


@dataclass(frozen=True, slots=True)
class HeatPlan:
    """How long the motor may stand locked, in all.

    budget_s    seconds at rest at full duty and highest_v (V) that the winding bears, from cold
    cooling_s   time constant with which it cools
    locked_s    the locked-rotor time in force: protection leaves no rotor locked for longer
    """

    budget_s: float
    cooling_s: float
    locked_s: float
    highest_v: float


@dataclass(frozen=True, slots=True)
class Plan:
    """Everything `next_hold` and `characterise` may know besides outcomes.

    session            start or resume of the run that asks; conduct sets it (warm-up is done again in each)
    roles              role → channel for every role the rig offers: {"speed": "board.speed", …}
    duty_low_percent   lowest and highest duty that rig and motor allow
    time_constant_s    the motor's longest mechanical or electrical time constant, as stated in its file
    lowest_rpm         the rig's lowest measurable speed
    limits             finding → (at least, at most), in the finding's unit: what the motor file asks of it
    by_hand            fields of a condition that only a person can set; hands: what is set so in this session, as
                       `set_by_hand` words it, None before anybody has said so
    duty_step_percent  one step of the drive (resolution of the commanded duty) for each condition, same order
    spend              `all`: an adaptive search goes on to the deadline; `needed`: until all is known as asked
    sharpen            findings whose standard errors the adaptive search brings down
    taps               where the drive makes its duty by a digital potentiometer; every duty then becomes a tap
    remarks            what is done otherwise than the job asks, or must be known with its results, in words
    expected           what is believed of the motor, for the preview; expected_at: … where more is known of a condition
    heat               the budget of locked-rotor heat; None only where a plan is made without a motor file
    """

    seed: int
    conditions: tuple[Condition, ...]
    roles: Mapping[str, str]
    duty_low_percent: float
    duty_high_percent: float
    time_constant_s: float
    lowest_rpm: float
    zero_time_s: float
    run_in: RunIn | None
    curve: CurvePlan | None
    stall: StallPlan | None
    start: StartPlan | None
    settle: SettlePlan
    saturation_percent: float = 2.0
    voltage_at: str = "across_motor"
    current_at: str = "supply_lead"
    switch_delay_s: float = 0.0
    duty_step_percent: tuple[float, ...] = ()
    limits: Mapping[str, tuple[float | None, float | None]] = field(default_factory=dict)
    deadline_utc: float | None = None
    spend: str = "all"
    sharpen: tuple[str, ...] = ("sustain_99_duty_percent", "start_99_duty_percent")
    kick: KickPlan | None = None
    long_run: LongRunPlan | None = None
    reference: ReferencePlan | None = None
    taps: TapPlan | None = None
    remarks: tuple[str, ...] = ()
    session: int = 1
    attended: bool = False
    by_hand: tuple[str, ...] = ()
    hands: str | None = None
    heat: HeatPlan | None = None
    expected: Expected = field(default_factory=Expected)
    expected_at: Mapping[Condition, Expected] = field(default_factory=dict)
    extra: Mapping[str, float] = field(default_factory=dict)

    def set_by_hand(self, condition: Condition) -> str:
        """What a person sets for `condition`, in words: "load free air, direction forward"; empty for nothing."""
        return ", ".join(f"{name} {getattr(condition, name)}" for name in self.by_hand)
