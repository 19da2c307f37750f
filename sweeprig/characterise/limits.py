"""A finding against a limit: pass, fail or not decided, with a guard band. Pure.

Guarded acceptance and rejection after JCGM 106:2012 (from memory): the guard on either side of a limit is
w = U (two limits, 95 %) or 1.645·u (one limit, 95 % one-sided). A bound decides only the side that it bounds.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any, Literal

from sweeprig.characterise.findings import EXTRAPOLATED, ConditionFindings, Finding
from sweeprig.plan import Plan

Verdict = Literal["pass", "fail", "not_decided"]
ONE_SIDED = 1.645
"""Normal quantile of 0.95."""

TWO_SIDED = 1.960
"""Normal quantile of 0.975: the guard for a finding that states no coverage factor of its own."""


@dataclass(frozen=True, slots=True)
class Judged:
    """verdict, and the rule in words with the guard put in; where not decided, how many more holds may decide."""

    verdict: Verdict
    rule: str


def judge(finding: Finding, at_least: float | None, at_most: float | None) -> Judged:
    """Judge one finding. `at_least`, `at_most`: the limits, in its unit; None where there is none on that side."""
    if finding.value is None:
        return Judged("not_decided", f"the finding was not found: {finding.reason}")
    if EXTRAPOLATED in finding.flags:
        return Judged("not_decided", "no hold of the service time supports it: an extrapolation decides nothing")
    if finding.bound != "two_sided":
        return _judge_bound(finding, finding.value, at_least, at_most)
    if finding.u is None:
        return Judged("not_decided", "the finding states no uncertainty")
    both = at_least is not None and at_most is not None
    factor = (finding.coverage_factor or TWO_SIDED) if both else ONE_SIDED
    guard = factor * finding.u
    rule = f"guarded acceptance and rejection, w = {'U' if both else '1.645 u'} = {guard:.3g}"
    inside = min(_margins(finding.value, at_least, at_most))
    if inside >= guard:
        return Judged("pass", rule)
    if inside <= -guard:
        return Judged("fail", rule)
    return Judged("not_decided", f"{rule}; {_more_holds(len(finding.holds), guard, inside)}")


def _margins(value: float, at_least: float | None, at_most: float | None) -> tuple[float, float]:
    """How far inside each limit the value lies; infinite where there is none."""
    return (
        math.inf if at_least is None else value - at_least,
        math.inf if at_most is None else at_most - value,
    )


def _judge_bound(finding: Finding, value: float, at_least: float | None, at_most: float | None) -> Judged:
    """An upper bound below the upper limit passes that limit; below the lower limit it fails that one; and mirrored."""
    rule = f"the finding is a one-sided 95 % {finding.bound} bound: it decides only the side that it bounds"
    upper = finding.bound == "upper"
    lower_margin, upper_margin = _margins(value, at_least, at_most)
    if (upper and lower_margin < 0) or (not upper and upper_margin < 0):
        return Judged("fail", rule)
    open_side = at_least if upper else at_most
    passed = (upper_margin if upper else lower_margin) >= 0
    return Judged("pass" if passed and open_side is None else "not_decided", rule)


def _more_holds(holds: int, guard: float, inside: float) -> str:
    """u falls with the square root of the number of holds: so many more bring the guard down to the distance."""
    if inside == 0 or holds == 0:
        return "the value lies on the limit: more holds are not foreseen to decide"
    more = math.ceil(holds * ((guard / abs(inside)) ** 2 - 1.0) - 1e-6)
    return f"about {more} more holds would decide, if the value stays"


def judge_all(plan: Plan, conditions: Sequence[ConditionFindings]) -> tuple[Mapping[str, Any], ...]:
    """Every limit of the plan for every condition, as rows of findings.json."""
    rows = []
    for name, (at_least, at_most) in plan.limits.items():
        for found in conditions:
            judged = judge(found.finding(name), at_least, at_most)
            limit = {key: value for key, value in (("at_least", at_least), ("at_most", at_most)) if value is not None}
            condition = asdict(found.condition)
            rows.append({"finding": name, "condition": condition, "limit": limit, "verdict": judged.verdict,
                         "rule": judged.rule})  # fmt: skip
    return tuple(rows)
