"""Do the 95 % intervals hold the truth? Cheap motors with a prescribed law, whole way from outcomes to findings.

A smoke of 200 motors; the full figure (1,000 motors and more) belongs to the benchmarks. The truth here comes from the
laws' own formulas (own earlier output is none of it: each law is checked against scipy in `test_laws`).
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from sweeprig.characterise import ConditionFindings, Finding, characterise
from sweeprig.holds import Approach, Outcome, Purpose, Verdict
from sweeprig.laws import EXPONENTIAL, GAUSSIAN, LOGISTIC, Law
from sweeprig.plan import Plan

ABOUT = {"job_hash": "0", "simulated": True, "motor": "m", "rig": "r", "software": "s"}
MakeOutcome = Callable[..., Outcome]
HOLD_S, DUTY_U, SPEED_U, SPEED_SCATTER = 20.0, 0.03, 3.0, 4.0
EDGE_S = 0.25
TRIALS = 24


class CheapMotor:
    """Prescribed stall and start law, a smooth speed curve, and instruments with one error each for the whole night."""

    def __init__(self, rng: np.random.Generator, stall_law: Law, start_law: Law, outcome: MakeOutcome) -> None:
        self.rng, self.stall_law, self.start_law, self.outcome = rng, stall_law, start_law, outcome
        self.stall_duty = rng.uniform(12.0, 25.0)
        self.stall_spread = math.exp(rng.uniform(math.log(0.1), math.log(0.8)))
        self.start_duty = self.stall_duty + rng.uniform(4.0, 8.0)
        self.start_spread = math.exp(rng.uniform(math.log(0.3), math.log(2.0)))
        self.duty_error, self.speed_error = rng.normal(0.0, DUTY_U), rng.normal(0.0, SPEED_U)
        # What "settled within 1 % with 99 % confidence" leaves open, the same all night.
        self.creep = 1.0 + rng.normal(0.0, 0.01 / 2.576)
        self.made: list[Outcome] = []

    def speed(self, duty: float) -> float:
        return 4000.0 * (1.0 - math.exp(-(duty - 5.0) / 40.0))

    def read(self, duty: float) -> dict[str, tuple[float, float, str]]:
        speed = self.speed(duty) * self.creep + self.speed_error + self.rng.normal(0.0, SPEED_SCATTER)
        return {"scope.duty": (duty + self.duty_error, DUTY_U, "%"), "board.speed": (speed, SPEED_U, "rpm")}

    def add(self, purpose: Purpose, duty: float, verdict: Verdict, **more: object) -> None:
        self.made.append(self.outcome(len(self.made), purpose, duty, verdict, **more))

    def curve(self) -> None:
        for approach in (Approach.FALLING, Approach.RISING):
            for duty in np.linspace(100.0, self.stall_duty + 4.0, 12).tolist()[:: 1 if approach == "falling" else -1]:
                self.add(Purpose.CURVE, duty, Verdict.TURNING, approach=approach, values=self.read(duty))

    def stall(self) -> None:
        """Ladder in steps of 0.5 % at a random phase, down until it stops, then from the top again."""
        top = self.stall_duty + 4.0 + self.rng.uniform(-0.25, 0.25)
        duty = top
        for _ in range(TRIALS):
            hazard = float(self.stall_law.cumulative(np.array((duty - self.stall_duty) / self.stall_spread))) / HOLD_S
            stop_s = self.rng.exponential() / max(hazard, 1e-12)
            if stop_s > HOLD_S:
                self.add(Purpose.STALL, duty, Verdict.TURNING, values=self.read(duty))
                duty -= 0.5
                continue
            last = min(math.floor(stop_s / EDGE_S) * EDGE_S, HOLD_S - EDGE_S)
            between = (last, last + EDGE_S)
            self.add(Purpose.STALL, duty, Verdict.STOPPED, event_between_s=between, exposed_s=last + EDGE_S)
            duty = top

    def start(self) -> None:
        top = self.start_duty + 3.0 + self.rng.uniform(-0.25, 0.25)
        duty = top
        for _ in range(TRIALS):
            chance = math.exp(-float(self.start_law.cumulative(np.array((duty - self.start_duty) / self.start_spread))))
            started = self.rng.uniform() < chance
            verdict = Verdict.STARTED if started else Verdict.DID_NOT_START
            self.add(Purpose.START, duty, verdict, approach=Approach.FROM_REST, values=self.read(duty))
            duty = duty - 0.5 if started else top

    def truths(self) -> dict[str, float]:
        sustain = self.stall_duty + self.stall_law.offset(0.99) * self.stall_spread
        start = self.start_duty + self.start_law.offset(0.99) * self.start_spread
        return {
            "stall_duty_percent": self.stall_duty,
            "sustain_99_duty_percent": sustain,
            "start_duty_percent": self.start_duty,
            "start_99_duty_percent": start,
            "start_stall_hysteresis_percent": self.start_duty - self.stall_duty,
            "stall_speed_rpm": self.speed(self.stall_duty),
            "lowest_reliable_speed_rpm": self.speed(sustain),
            "top_speed_rpm": self.speed(100.0),
            "low_duty_percent": sustain,
            "low_duty_from_rest_percent": start,
        }


def covers(finding: Finding, truth: float) -> bool:
    low = -math.inf if finding.low is None else finding.low
    high = math.inf if finding.high is None else finding.high
    return low <= truth <= high


def cover_percent(plan: Plan, outcome: MakeOutcome, motors: int, seed: int, laws: tuple[Law, Law]) -> dict[str, float]:
    """Percent of `motors` whose interval (or bound) holds the truth, for each finding."""
    measured = replace(plan, roles={**plan.roles, "duty": "scope.duty"})
    hits: Counter[str] = Counter()
    for index in range(motors):
        motor = CheapMotor(np.random.default_rng((seed, index)), *laws, outcome)
        motor.curve()
        motor.stall()
        motor.start()
        found: ConditionFindings = characterise(measured, motor.made, ABOUT).conditions[0]
        hits.update(name for name, truth in motor.truths().items() if covers(found.finding(name), truth))
    return {name: 100.0 * hits[name] / motors for name in motor.truths()}


NOT_IN_THE_TAIL = ("stall_duty_percent", "start_duty_percent", "stall_speed_rpm", "top_speed_rpm")


@pytest.mark.slow
@pytest.mark.timeout(600)  # 200 whole nights are fitted; on a busy machine two minutes are not enough
def test_intervals_hold_the_truth(plan: Plan, outcome: MakeOutcome) -> None:
    """Of 200 motors, half after each pair of laws, each 95 % interval or bound holds the truth often enough.

    Gates 90.5 and 98.5 %. False alarm of one gate at 95 % true coverage: 0.27 % below, 0.23 % above (binomial), so 4 %
    for all 14 at the most; the seeds are fixed. The upper gate is asked of 50 % duties and speeds: in the tail the laws
    lie apart, so that their hull covers more by design; so do a bound and a difference of two such.
    """
    halves = [
        cover_percent(plan, outcome, 100, seed, laws)
        for seed, laws in ((11, (EXPONENTIAL, LOGISTIC)), (12, (GAUSSIAN, GAUSSIAN)))
    ]
    covered = {name: (halves[0][name] + halves[1][name]) / 2.0 for name in halves[0]}
    assert {name: value for name, value in covered.items() if value < 90.5} == {}
    assert {name: covered[name] for name in NOT_IN_THE_TAIL if covered[name] > 98.5} == {}
