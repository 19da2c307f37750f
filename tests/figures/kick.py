"""Does the bound of the kick hold the truth? Cheap motors with a prescribed start law on the logarithm of pulse time.

Whole way: pulses are placed by the schedule's own source, and judged by the findings' own function. The link's error in
timing is in the outcomes, the same for a whole night.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from typing import Any

import numpy as np
from scipy import stats

from sweeprig.characterise.kick import kicks as found_kicks
from sweeprig.exposures import KICK_PULSE
from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.laws import GAUSSIAN, LOGISTIC, Law
from sweeprig.plan import KickPlan, Plan, SettlePlan, StallPlan
from sweeprig.quantities import Reading
from sweeprig.schedule.history import History, past_of
from sweeprig.schedule.kick import kicks
from sweeprig.schedule.proposal import Here

PROCESSES = 2
MOTORS = 1000
AT = Condition(1000.0, 12.0)
KICK = KickPlan((100.0,), 1.0, 0.005, 2.0, 5.0, 10.0, 40)
PLAN = Plan(
    seed=1, conditions=(AT,), roles={"drive": "board", "speed": "board.speed"}, duty_low_percent=0.0,
    duty_high_percent=100.0, time_constant_s=0.2, lowest_rpm=60.0, zero_time_s=0.0, run_in=None, curve=None,
    stall=StallPlan("ladder", 20.0, 0.5, 24, 12.0, 4.0), start=None, settle=SettlePlan(1.0), kick=KICK,
)  # fmt: skip
TIMING_U_S = 0.002
LAWS: dict[str, Law] = {"logistic": LOGISTIC, "gaussian": GAUSSIAN}


def outcome(hold: Hold, verdict: Verdict, means: dict[str, Reading]) -> Outcome:
    at = 60.0 * hold.number
    return Outcome(
        hold.number, hold, 1, Status.DONE, verdict, at, at, at, at, hold.most_s, (hold.most_s, None), means=means
    )


def one(index: int) -> dict[str, Any]:
    """ln of the bound over the truth, the motor's law (in turn) and its spread, and the trials done."""
    name = tuple(LAWS)[index % len(LAWS)]
    law, rng = LAWS[name], np.random.default_rng((20261201, index))
    median = math.exp(rng.uniform(math.log(0.03), math.log(0.4)))
    spread = math.exp(rng.uniform(math.log(0.1), math.log(0.6)))
    error = rng.normal(0.0, TIMING_U_S)
    coarse = Hold(1, Purpose.STALL, Approach.FALLING, AT, 15.0, 0.0, 20.0, EndsWhen.STOPPED, (), "", ((27.0, 4.0),))
    made = History([outcome(coarse, Verdict.TURNING, {})])
    while True:
        past = past_of(made, PLAN)
        proposal = kicks(PLAN, Here(AT, past.conditions[AT], past, len(made) + 1, 60.0 * len(made)))
        if proposal is None:
            break
        asked = proposal.hold.lead[-1][1]
        chance = math.exp(-float(law.cumulative(np.array(math.log(asked / median) / spread))))
        verdict = Verdict.STARTED if rng.uniform() < chance else Verdict.DID_NOT_START
        timed = Reading(max(asked + error, 1e-4), TIMING_U_S, "s", 0.0, KICK_PULSE)
        made.append(outcome(proposal.hold, verdict, {KICK_PULSE: timed}))
    found = found_kicks(PLAN, list(made))[0].pulse
    truth = math.log(median) + law.offset(0.99) * spread
    excess = math.nan if found.value is None else math.log(found.value) - truth
    return {"excess": excess, "spread": spread, "trials": float(len(made) - 1), "law": name}


def figures(full: bool) -> Iterator[dict[str, Any]]:
    motors = 4000 if full else MOTORS
    with ProcessPoolExecutor(PROCESSES, mp_context=get_context("spawn")) as pool:
        rows = list(pool.map(one, range(motors), chunksize=25))
    excess, spread = np.array([row["excess"] for row in rows]), np.array([row["spread"] for row in rows])
    law = np.array([row["law"] for row in rows])
    hits = int(np.sum(excess >= 0.0))
    interval = stats.binomtest(hits, motors).proportion_ci(0.95, method="exact")
    value = percent(excess)
    yield {
        "figure": "coverage_kick_99_s", "value": value, "target": ">= 92.5", "meets": value >= 92.5, "n": motors,
        "interval": [round(100.0 * interval.low, 1), round(100.0 * interval.high, 1)],
        "by_law": {name: percent(excess[law == name]) for name in LAWS},
        "by_spread": {"0.1 to 0.25": percent(excess[spread < 0.25]), "0.25 to 0.6": percent(excess[spread >= 0.25])},
        "median_excess_percent": round(100.0 * math.expm1(float(np.nanmedian(excess))), 1),
        "trials": round(float(np.mean([row["trials"] for row in rows])), 1),
    }  # fmt: skip


def percent(excess: np.ndarray) -> float:
    """Of the motors whose bound lies at or above the truth; one without a bound is not covered."""
    return round(100.0 * float(np.mean(excess >= 0.0)), 1)
