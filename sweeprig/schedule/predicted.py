"""A motor as it is expected: drawn at random, it answers holds with outcomes. For the preview only.

Its laws are those of `laws`; its speeds are a straight line, from which nothing is learned but that they scatter.
"""

from __future__ import annotations

import math
import random

from sweeprig.holds import Approach, Condition, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.laws import GUMBEL_SD, LN2, LOGISTIC_SD
from sweeprig.plan import Expected, Likely, Plan
from sweeprig.quantities import Reading
from sweeprig.schedule.budget import BETWEEN_S

TOP_RPM, DEAD_PERCENT, SPEED_SCATTER = 3000.0, 3.0, 0.003
KICK_SPREAD = 0.3
"""Guessed scatter of the pulse that one start needs, as the standard deviation of its logarithm."""


class PredictedMotor:
    """The motor of predicted night `number`. What conditions have in common is drawn once for all of them."""

    def __init__(self, plan: Plan, number: int) -> None:
        self.plan = plan
        self.rng = random.Random(f"{plan.seed} {number}")
        self._common = {name: self.rng.gauss(0.0, 1.0) for name in Expected.__dataclass_fields__}
        self._drawn: dict[Condition, dict[str, float]] = {}

    def of(self, condition: Condition) -> dict[str, float]:
        """The values of this motor at a condition, by the names of Expected."""
        if condition not in self._drawn:
            expected = self.plan.expected_at.get(condition, self.plan.expected)
            named = {name: getattr(expected, name) for name in Expected.__dataclass_fields__}
            self._drawn[condition] = {
                name: self._draw(likely, self._common[name]) for name, likely in named.items() if name != "source"
            }
        return self._drawn[condition]

    @staticmethod
    def _draw(likely: Likely, standard_normal: float) -> float:
        median, log_sd = likely
        return median * math.exp(log_sd * standard_normal)

    def outcome(self, hold: Hold, session: int, clock: float, now: float) -> Outcome:
        """What this motor answers. clock: s since the start, when the hold begins; now: UTC of the start."""
        motor = self.of(hold.condition)
        verdict, exposed, event = self._exposed(hold, motor)
        lead = sum(seconds + (motor["coast_s"] if duty == 0.0 else 0.0) for duty, seconds in hold.lead)
        ended = clock + lead + exposed + BETWEEN_S
        means = {}
        channel = self.plan.roles.get("speed")
        if verdict is Verdict.TURNING and channel is not None:
            rpm = TOP_RPM * max(hold.duty_percent - DEAD_PERCENT, 1.0) / (100.0 - DEAD_PERCENT)
            rpm *= 1.0 + SPEED_SCATTER * self.rng.gauss(0.0, 1.0)
            means[channel] = Reading(rpm, 0.001 * rpm, "rpm", ended, channel)
        return Outcome(
            hold.number, hold, session, Status.DONE, verdict, clock, ended, now + clock, now + ended, exposed, event,
            means=means,
        )  # fmt: skip

    def _exposed(self, hold: Hold, motor: dict[str, float]) -> tuple[Verdict, float, tuple[float, float | None]]:
        """(verdict, seconds exposed, event between)."""
        purpose, duty, whole = hold.purpose, hold.duty_percent, hold.most_s
        if purpose in (Purpose.START, Purpose.KICK):
            chance = self._started(duty, motor) if purpose is Purpose.START else self._kicked(hold)
            started = self.rng.random() < chance
            return Verdict.STARTED if started else Verdict.DID_NOT_START, whole, (whole, None)
        if purpose in (Purpose.ZERO, Purpose.REST):
            return Verdict.STOPPED, whole, (whole, None)
        if hold.approach is not Approach.FALLING:
            turns = purpose is not Purpose.CURVE or self.rng.random() < self._started(duty, motor)
            exposed = self._settled(hold, motor) if purpose is Purpose.CURVE and turns else whole
            exposed = exposed if turns else max(hold.least_s, 0.5)
            return Verdict.TURNING if turns else Verdict.STOPPED, exposed, (exposed, None)
        if purpose is Purpose.CURVE:
            whole = self._settled(hold, motor)
        stops = self._stops_after(duty, motor)
        if stops >= whole:
            return Verdict.TURNING, whole, (whole, None)
        seen = min(stops + 1.0, whole)
        return Verdict.STOPPED, seen, (stops, stops + 0.2)

    def _settled(self, hold: Hold, motor: dict[str, float]) -> float:
        return min(max(motor["settle_s"], hold.least_s), hold.most_s)

    def _stops_after(self, duty: float, motor: dict[str, float]) -> float:
        hold_time_s = self.plan.stall.hold_time_s if self.plan.stall is not None else 20.0
        x = (duty - motor["stall_percent"]) / motor["stall_spread_percent"]
        hazard = LN2 / hold_time_s * math.exp(min(max(-GUMBEL_SD * x, -600.0), 600.0))
        return self.rng.expovariate(1.0) / hazard

    @staticmethod
    def _started(duty: float, motor: dict[str, float]) -> float:
        x = (duty - motor["start_percent"]) / motor["start_spread_percent"]
        return 1.0 / (1.0 + math.exp(min(max(-LOGISTIC_SD * x, -600.0), 600.0)))

    def _kicked(self, hold: Hold) -> float:
        pulse = sum(seconds for duty, seconds in hold.lead if duty > 0.0)
        x = math.log(max(pulse, 1e-6) / self.of(hold.condition)["kick_s"]) / KICK_SPREAD
        return 1.0 / (1.0 + math.exp(min(max(-LOGISTIC_SD * x, -600.0), 600.0)))
