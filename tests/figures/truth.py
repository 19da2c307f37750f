"""The rare-event method: against plain trials where those reach, its scatter and cost where they do not; and lots."""

from __future__ import annotations

import math
import time
from collections.abc import Iterator
from typing import Any

import numpy as np

from sweeprig.holds import Condition
from sweeprig.job import load, shipped
from sweeprig.simbench.build import motor_truth
from sweeprig.simbench.kinds.lot import lot
from sweeprig.simbench.many import many
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.rare import Rate
from sweeprig.simbench.rare_chain import chain_rate_in_hold
from sweeprig.simbench.rare_starts import start_failure
from sweeprig.simbench.rare_trials import stop_rate_in_hold
from sweeprig.simbench.trials import Procedure, Task, perform

AT = Condition(25e3, 12.0)
HOLD = Procedure(hold_time_s=20.0)
START_DUTIES = (27.0, 28.0)
LOOK_S, HOLD_S = 0.25, 24.0


def fan() -> MotorTruth:
    return motor_truth(load(shipped("demo")))


def counted(duty: float, trials: int) -> tuple[float, float]:
    """(chance of a stop in a hold, its standard error), by plain trials."""
    chance = perform(Task(fan(), AT, HOLD, "stall", duty, trials, (31,))).events / trials
    return chance, math.sqrt(max(chance, 1.0 / trials) * (1.0 - chance) / trials)


def where(chance: float, trials: int) -> float:
    """The duty, to 0.1 %, at which plain trials stop about so often: by bisection."""
    low, high = 5.0, 40.0
    while high - low > 0.1:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if counted(middle, trials)[0] > chance else (low, middle)
    return 0.5 * (low + high)


def plant_night_s(hours: float) -> float:
    """Processor seconds of the plant alone for `hours` of holds of 24 s, every fifth at rest, a look each 0.25 s."""
    plant = Plant(fan(), 2.0, np.random.default_rng(1))
    plant.set_supply(12.0, 1.5, True)
    began, until = time.process_time(), 0.0
    for number in range(int(hours * 3600.0 / HOLD_S)):
        on = number % 5 != 4
        plant.set_drive(1000.0, 18.0 + number % 50, on)
        for _ in range(int(HOLD_S / LOOK_S)):
            until += LOOK_S
            plant.advance(until)
            _ = plant.edges, plant.motor_volt_seconds
    return time.process_time() - began


def one_hold(motor: MotorTruth, pair: tuple[int, int]) -> float:
    """A unit's speed after a minute at 40 %: the work of the figure of lots."""
    plant = Plant(motor, 2.0, np.random.default_rng(pair))
    plant.set_supply(12.0, 1.5, True)
    plant.set_drive(1000.0, 40.0, True)
    plant.advance(60.0)
    return plant.omega


def _rare(middle: float, trials: int) -> Iterator[dict[str, Any]]:
    """The scatter that both methods state, their cost, and how far apart they are; and starts."""
    for step in (1.0, 1.5, 2.5):
        found: dict[str, Rate] = {}
        for method in ("chain", "splitting"):
            began = time.perf_counter()
            task = Task(fan(), AT, HOLD, "stall", middle + step, trials, (33,))
            rate = found[method] = chain_rate_in_hold(task) if method == "chain" else stop_rate_in_hold(task, 6)
            yield {
                "figure": f"rare_u_log_{method}", "value": round(rate.u_log, 2), "target": "<= 0.5",
                "meets": rate.u_log <= 0.5, "n": trials, "duty_percent": round(middle + step, 2),
                "chance": rate.chance(HOLD.hold_time_s), "rare_s": round(time.perf_counter() - began, 1),
            }  # fmt: skip
        chain, split = found["chain"], found["splitting"]
        away = math.log(chain.value / split.value) / math.hypot(chain.u_log, split.u_log) if split.value else math.nan
        yield {
            "figure": "chain_against_splitting_u", "value": round(away, 2), "target": "within 3",
            "meets": abs(away) <= 3, "n": trials, "duty_percent": round(middle + step, 2),
        }  # fmt: skip
    for duty in START_DUTIES:
        began = time.perf_counter()
        start = start_failure(Task(fan(), AT, HOLD, "start", duty, 1, (34,)))
        yield {
            "figure": "rare_start_u_log", "value": round(start.u_log, 3), "target": "<= 0.5",
            "meets": start.u_log <= 0.5, "n": 1, "duty_percent": duty, "chance": start.value,
            "rare_s": round(time.perf_counter() - began, 1),
        }  # fmt: skip


def figures(full: bool) -> Iterator[dict[str, Any]]:
    trials = 600 if full else 200
    middle = where(0.3, 40)
    for step in (0.0, 0.4):
        duty = middle + step
        plain, u = counted(duty, 3000 if full else 800)
        rate = stop_rate_in_hold(Task(fan(), AT, HOLD, "stall", duty, trials, (32,)), 6)
        away = (rate.chance(HOLD.hold_time_s) - plain) / math.hypot(u, plain * rate.u_log)
        yield {
            "figure": "rare_against_counting_u", "value": round(away, 2), "target": "within 3", "meets": abs(away) <= 3,
            "n": trials, "duty_percent": round(duty, 2), "counted": plain, "split": rate.chance(HOLD.hold_time_s),
        }  # fmt: skip
    yield from _rare(middle, trials)
    hours = 8.0 if full else 2.0
    night = plant_night_s(hours) * 8.0 / hours
    yield {"figure": "plant_night_s", "value": round(night, 2), "target": "<= 1", "meets": night <= 1.0, "n": 1}
    units = lot(fan(), {"breakaway_friction_nm": 10.0, "resistance_ohm": 5.0}, 1000, 1)
    began = time.perf_counter()
    many(one_hold, units, 1)
    seconds = time.perf_counter() - began
    yield {"figure": "lot_1000_minutes_s", "value": round(seconds, 1), "target": "one call", "meets": True, "n": 1000}
