"""The frozen plan: the sweep merged with what rig and motor allow. What `schedule` and `characterise` are given.

Built by `job.freeze`; all numbers are in the unit their name says. Nothing here acts.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from sweeprig.holds import Condition


@dataclass(frozen=True, slots=True)
class RunIn:
    duty_percent: float
    time_s: float


@dataclass(frozen=True, slots=True)
class CurvePlan:
    """Duties visited downwards from the top, then upwards again; the motor is settled and read at each."""

    duties_percent: tuple[float, ...]
    least_s: float
    most_s: float


@dataclass(frozen=True, slots=True)
class StallPlan:
    """Falling-approach trials: relaunch well above, step down to the trial duty, expose for `hold_time_s`."""

    search: str
    hold_time_s: float
    step_percent: float
    holds: int
    relaunch_above_percent: float
    relaunch_s: float


@dataclass(frozen=True, slots=True)
class StartPlan:
    """Trials from rest: drive off until no edge came for `rest_time_s`, full step to the trial duty, `start_time_s`."""

    search: str
    start_time_s: float
    rest_time_s: float
    step_percent: float
    trials: int


@dataclass(frozen=True, slots=True)
class SettlePlan:
    tolerance_percent: float
    confidence_percent: float = 99.0


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
    session: int = 1
    attended: bool = False
    by_hand: tuple[str, ...] = ()
    hands: str | None = None
    heat: HeatPlan | None = None
    extra: Mapping[str, float] = field(default_factory=dict)

    def set_by_hand(self, condition: Condition) -> str:
        """What a person sets for `condition`, in words: "load free air, direction forward"; empty for nothing."""
        return ", ".join(f"{name} {getattr(condition, name)}" for name in self.by_hand)
