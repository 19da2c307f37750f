"""How well the thresholds are known so far, and whether each condition has an answer. Pure; what is reported is fitted
by `characterise`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from sweeprig.holds import Outcome
from sweeprig.plan import Plan
from sweeprig.schedule.adaptive import PROBABILITY, Kind, kind_of
from sweeprig.schedule.history import past_of
from sweeprig.schedule.keys import key_of
from sweeprig.schedule.posterior import Prior, cells
from sweeprig.schedule.tally import Sums, Tally


def answered(plan: Plan, outcomes: Sequence[Outcome]) -> bool:
    """Whether at every condition each kind of trial that the sweep makes had a success and a failure."""
    past = past_of(outcomes, plan)
    return all(_has_answer(plan, past.conditions.get(one) or Tally()) for one in plan.conditions)


def _has_answer(plan: Plan, tally: Tally) -> bool:
    stall = plan.stall is None or both(tally.stall.sums)
    return stall and (plan.start is None or both(tally.start.sums))


def both(sums: Sums) -> bool:
    return sums.successes > 0 and sums.failures > 0


def standard_errors(plan: Plan, outcomes: Sequence[Outcome]) -> dict[str, float]:
    """Standard errors of the findings that a search can sharpen, % duty, the worst over the conditions, as the search
    reckons them; without those of which some condition has only a bound."""
    past = past_of(outcomes, plan)
    found: dict[str, float] = {}
    for name in ("stall", "start"):
        kinds = [kind_of(plan, name, past.conditions.get(one) or Tally()) for one in plan.conditions]
        if any(kind is None or not both(kind.trials.sums) for kind in kinds):
            continue
        for finding, (kind_name, probability) in PROBABILITY.items():
            if kind_name == name:
                found[finding] = max(_error(plan, kind, probability) for kind in kinds if kind is not None)
    return found


def _error(plan: Plan, kind: Kind, probability: float) -> float:
    prior = Prior(plan.duty_low_percent, plan.duty_high_percent, kind.spread_percent)
    believed = cells(kind.law, key_of(kind.trials.sums), kind.unit, prior)
    duty = np.clip(believed.duty(probability), plan.duty_low_percent, plan.duty_high_percent)
    return float(np.sqrt(believed.weight @ (duty - believed.weight @ duty) ** 2))
