"""What an earlier run tells of a motor before the next one: its findings and the times of its holds. For the preview.

Pure: findings and outcomes in, Expected out.
"""

from __future__ import annotations

import math
import statistics
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from sweeprig.holds import Approach, Condition, Outcome, Purpose, Status, Verdict
from sweeprig.laws import EXPONENTIAL, LOGISTIC, Law
from sweeprig.plan import Expected, Likely

NIGHTS_DIFFER = 0.02
"""Scatter of the logarithm of a duty from one night of a motor to the next (guess); the run's own u is added."""
TIMES_SCATTER = 0.15
SPREAD_UNKNOWN = 0.5
"""A spread from one night: known to a factor of 1.6 at worst, else as well as the distance of its two duties."""
TAIL = 0.99


def learned(
    findings: Sequence[Mapping[str, Any]], outcomes: Sequence[Outcome], source: str
) -> dict[Condition, Expected]:
    """What is expected at each condition of the earlier run. findings: the conditions of its findings.json."""
    found = {}
    for one in findings:
        condition = Condition(**{name: one[name] for name in Condition.__dataclass_fields__})
        own = [o for o in outcomes if o.hold.condition == condition and o.status is Status.DONE]
        known: dict[str, Any] = {
            **_threshold(one, "stall", "stall_duty_percent", "sustain_99_duty_percent", EXPONENTIAL),
            **_threshold(one, "start", "start_duty_percent", "start_99_duty_percent", LOGISTIC),
            **_times(own),
        }
        if known:
            found[condition] = replace(Expected(source=source), **known)
    return found


def _threshold(one: Mapping[str, Any], kind: str, half: str, tail: str, law: Law) -> dict[str, Likely]:
    """Place and spread of a law from the duties at 50 % and 99 %; nothing where the half is only a bound."""
    place, above = one[half], one[tail]
    if place["value"] is None or place["u"] is None or place["value"] <= 0.0:
        return {}
    known = {f"{kind}_percent": (place["value"], math.hypot(place["u"] / place["value"], NIGHTS_DIFFER))}
    if above["value"] is not None and above["value"] > place["value"]:
        between = above["value"] - place["value"]
        unknown = SPREAD_UNKNOWN if above["u"] is None else min(above["u"] / between, SPREAD_UNKNOWN)
        known[f"{kind}_spread_percent"] = (between / law.offset(TAIL), unknown)
    return known


def _times(outcomes: Sequence[Outcome]) -> dict[str, Likely]:
    settled = [o.exposed_s for o in outcomes if o.hold.purpose is Purpose.CURVE and o.verdict is Verdict.TURNING]
    coasted = [
        coast for o in outcomes if o.hold.purpose is Purpose.START and o.hold.approach is Approach.FROM_REST
        for coast in (o.ended - o.began - o.exposed_s - sum(seconds for _, seconds in o.hold.lead),) if coast > 0.0
    ]  # fmt: skip
    return {
        name: (statistics.median(times), TIMES_SCATTER)
        for name, times in (("settle_s", settled), ("coast_s", coasted)) if times
    }  # fmt: skip
