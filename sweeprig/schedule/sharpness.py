"""How well the thresholds are known so far, and whether each condition has an answer. Pure; what is reported is fitted
by `characterise`.
"""

from __future__ import annotations

from collections.abc import Sequence

from sweeprig.holds import Outcome
from sweeprig.plan import Plan
from sweeprig.schedule.history import past_of
from sweeprig.schedule.quick_fit import contrast, key_of, quick_fit
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
    """Standard errors of the findings that a search can sharpen, % duty, the worst over the conditions; without those
    of which some condition has only a bound."""
    past = past_of(outcomes, plan)
    found: dict[str, float] = {}
    if plan.stall is None:
        return found
    for condition in plan.conditions:
        sums = (past.conditions.get(condition) or Tally()).stall.sums
        if not contrast(sums):
            return {}
        fitted = quick_fit(key_of(sums), plan.stall.hold_time_s)
        for name, probability in (("stall_duty_percent", 0.5), ("sustain_99_duty_percent", 0.99)):
            place = fitted.median + fitted.law.offset(probability) * fitted.spread
            mean = (place * fitted.weight).sum()
            u = float(((place - mean) ** 2 * fitted.weight).sum()) ** 0.5
            found[name] = max(found.get(name, 0.0), u)
    return found
