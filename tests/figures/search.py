"""The schedule's decision time. (The search itself is still the ladder; its figures come with the search.)"""

from __future__ import annotations

import time
from collections.abc import Iterator
from typing import Any

from sweeprig.holds import Hold, Outcome, Purpose, Status, Verdict
from sweeprig.job import freeze, load, shipped
from sweeprig.schedule import next_hold


def history(count: int) -> tuple[Any, list[Outcome]]:
    """`count` outcomes that the schedule asked for itself, over a sweep large enough never to finish."""
    plan = freeze(load(shipped("night")))
    assert plan.stall is not None
    outcomes: list[Outcome] = []
    template: list[Outcome] = []
    while len(template) < 200:
        decision = next_hold(plan, template, 0.0)
        if not isinstance(decision, Hold):
            break
        turns = decision.duty_percent >= 12.0
        verdict = Verdict.TURNING if turns else Verdict.STOPPED
        if decision.purpose is Purpose.START:
            verdict = Verdict.STARTED if turns else Verdict.DID_NOT_START
        n = decision.number
        template.append(Outcome(n, decision, 1, Status.DONE, verdict, n, n + 1, n, n + 1, 20.0, (20.0, None)))
    from dataclasses import replace

    for number in range(1, count + 1):
        old = template[(number - 1) % len(template)]
        outcomes.append(replace(old, number=number, hold=replace(old.hold, number=number)))
    return plan, outcomes


def figures(full: bool) -> Iterator[dict[str, Any]]:
    repeats = 200 if full else 50
    for count in (100, 3_000):
        plan, outcomes = history(count)
        began = time.perf_counter()
        for _ in range(repeats):
            next_hold(plan, outcomes, 0.0)
        mean_ms = (time.perf_counter() - began) / repeats * 1000.0
        key = "decision_ms" if count == 3_000 else f"decision_ms_at_{count}"
        yield {"figure": key, "value": round(mean_ms, 3), "target": "<= 3", "meets": mean_ms <= 3.0, "n": repeats}
