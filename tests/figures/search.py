"""The search against the ladder, against a plain binary likelihood, and without bias; and the time of a decision.

How each figure is taken is said in definitions.md, "Reference ladder". Motors and their nights are in `search_motors`.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from multiprocessing import get_context
from typing import TYPE_CHECKING, Any

import numpy as np

from sweeprig.characterise.combine import summary
from sweeprig.characterise.explained import fit
from sweeprig.characterise.thresholds import STALL_PRIOR
from sweeprig.holds import Hold, Outcome, Purpose, Status, Verdict
from sweeprig.job import freeze, load, shipped
from sweeprig.laws import STALL_LAWS, summed
from sweeprig.schedule import History, next_hold
from sweeprig.schedule.keys import key_of
from sweeprig.schedule.search import best

if TYPE_CHECKING:
    from tests.figures.search_motors import CHARGED, PARTS, Night, bound, ladder, night, question, spread_of
else:
    # the folder of this script is on the path, and spawned processes find it there
    from search_motors import CHARGED, PARTS, Night, bound, ladder, night, question, spread_of

PROCESSES = 2
MOTORS, NIGHTS = 50, 4
STALL_ERROR, SUSTAIN_ERROR = 0.2, 0.25
MANY_HOLDS, NEAR_ABOVE = 10, 4.0
BIAS_MOTORS = 600
LOWEST = -1.26
"""In spreads below the stall duty: there 97 % of whole holds fail, and the search goes no lower."""
SEED = 20261201
Row = dict[str, float]


def timed(index: int) -> list[Row]:
    """Some nights of one motor: search to STALL_ERROR, and both ladders."""
    spread, rows = spread_of(index, MOTORS), []
    for number in range(NIGHTS):
        motor = night(spread, (SEED, 1, index, number))
        turned = motor.coarse()
        choice = motor.search(question(0.5, STALL_ERROR))
        usual = ladder(night(spread, (SEED, 2, index, number)), 10.0, STALL_ERROR)
        near = ladder(night(spread, (SEED, 3, index, number)), turned - motor.median + NEAR_ABOVE, STALL_ERROR)
        found = judged(motor, 0.5)
        rows.append(
            found | {"spread": spread, "search": motor.search_s, "coarse": motor.coarse_s, "holds": motor.holds,
            "ladder": usual.seconds, "near": near.seconds, "ladder_bias": usual.bias, "own_u": choice.u[0.5],
            "bound": bound(spread, STALL_ERROR), "bound_near": bound(spread, STALL_ERROR, LOWEST)}
        )  # fmt: skip
    return rows


def judged(motor: Night, probability: float) -> Row:
    """What the findings say of it: value less the truth, and u (hull over the laws); u_law: under the law alone."""
    fitted = fit(STALL_LAWS, summed(motor.trials), STALL_PRIOR)
    samples = fitted.at(probability)
    shown = summary(samples)
    return {"error": shown.value - motor.truth(probability), "u": shown.u, "u_law": float(samples[0].std())}


def sustained(index: int) -> list[Row]:
    """Some nights of one motor to SUSTAIN_ERROR of the 99 % duty, by survival and by binary likelihood."""
    spread, rows = spread_of(index, MOTORS), []
    for number in range(NIGHTS):
        row: Row = {"spread": spread}
        for name in ("survival", "binary"):
            plain = name == "binary"
            motor = night(spread, (SEED, 4, index, number), binary=plain)
            motor.coarse()
            motor.search(question(0.99, SUSTAIN_ERROR, binary=plain))
            row |= {name: motor.search_s, f"{name}_holds": motor.holds}
        rows.append(row)
    return rows


def biased(index: int) -> list[Row]:
    """One night of one motor each to STALL_ERROR and SUSTAIN_ERROR."""
    rows = []
    for probability, error in ((0.5, STALL_ERROR), (0.99, SUSTAIN_ERROR)):
        motor = night(spread_of(index, BIAS_MOTORS), (SEED, 5, index, round(100 * probability)))
        motor.coarse()
        motor.search(question(probability, error))
        rows.append(judged(motor, probability) | {"probability": probability})
    return rows


def all_of(work: Callable[[int], list[Row]], motors: int) -> dict[str, np.ndarray]:
    with ProcessPoolExecutor(PROCESSES, mp_context=get_context("spawn")) as pool:
        rows = [row for found in pool.map(work, range(motors), chunksize=5) for row in found]
    return {key: np.array([row[key] for row in rows]) for key in rows[0]}


def figure(key: str, value: float, target: str | None = None, **more: Any) -> dict[str, Any]:
    meets = None if target is None else value <= float(target.removeprefix("<= "))
    return {"figure": key, "value": round(value, 4), "target": target, "meets": meets, **more}


def by_motor(values: np.ndarray) -> np.ndarray:
    """Mean over the nights of each motor."""
    return np.asarray(values.reshape(-1, NIGHTS).mean(axis=1))


def rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2)))


def against_the_ladder() -> Iterator[dict[str, Any]]:
    got = all_of(timed, MOTORS)
    search, usual = by_motor(got["search"]), by_motor(got["ladder"])
    ratio = search / usual
    count: dict[str, Any] = {"n": MOTORS, "nights_each": NIGHTS, "charged": CHARGED}
    yield figure("search_time_ratio", float(ratio.mean()), "<= 0.125", parts=PARTS, coarse_pass="not counted", **count)
    coarse = (search + by_motor(got["coarse"])) / usual
    yield figure("search_time_ratio_coarse_counted", float(coarse.mean()), **count)
    yield figure("search_time_ratio_of_totals", float(search.sum() / usual.sum()), **count)
    yield figure("search_time_ratio_near_ladder", float((search / by_motor(got["near"])).mean()), **count)
    spread = by_motor(got["spread"])
    for low, high in ((0.1, 0.2), (0.2, 0.4), (0.4, 0.8)):
        inside = (spread >= low) & (spread < high)
        yield figure(f"search_time_ratio_spread_{low:g}_to_{high:g}", float(ratio[inside].mean()), n=int(inside.sum()))
    bias = by_motor(got["ladder_bias"])
    yield figure("ladder_bias_percent", float(np.abs(bias).mean()), least=round(float(bias.min()), 3),
                 most=round(float(bias.max()), 3))  # fmt: skip
    yield figure("search_error_ratio", rms(got["error"]) / rms(got["own_u"]), "<= 1.2", reported="the search's own",
                 n=got["error"].size)  # fmt: skip
    yield figure("search_error_ratio_findings", rms(got["error"]) / rms(got["u"]), "<= 1.2",
                 u_percent=round(rms(got["u"]), 3), reported="the findings'")  # fmt: skip
    yield from against_the_bound(got)


def against_the_bound(got: dict[str, np.ndarray]) -> Iterator[dict[str, Any]]:
    """Motors to which the search gives more than ten holds: their bench time over the bound's. The bound knows the
    spread, so to it a stop far below, which comes at once, tells as much of the place as one that took its time."""
    made = by_motor(got["holds"]) > MANY_HOLDS
    search = by_motor(got["search"])
    for key, name, target in (
        ("search_over_bound", "bound", "<= 2"), ("search_over_bound_duties_of_the_search", "bound_near", None),
    ):  # fmt: skip
        yield figure(key, float((search / by_motor(got[name]))[made].mean()), target, n=int(made.sum()))


def against_binary() -> Iterator[dict[str, Any]]:
    got = all_of(sustained, MOTORS)
    survival, binary = by_motor(got["survival"]), by_motor(got["binary"])
    more: dict[str, Any] = {"n": MOTORS, "nights_each": NIGHTS, "charged": CHARGED}
    more |= {"survival_s": round(float(survival.mean())), "binary_s": round(float(binary.mean()))}
    more["of_totals"] = round(float(survival.sum() / binary.sum()), 3)
    yield figure("sustain_time_ratio", float((survival / binary).mean()), "<= 0.5", **more)


def bias() -> Iterator[dict[str, Any]]:
    got = all_of(biased, BIAS_MOTORS)
    for key, probability in (("search_bias", 0.5), ("search_bias_sustain_99", 0.99)):
        mine = got["probability"] == probability
        error, u = got["error"][mine], got["u"][mine]
        scatter = float(error.std(ddof=1)) / error.size**0.5
        yield figure(key, (abs(float(error.mean())) + 2.0 * scatter) / float(u.mean()), "<= 0.25", n=error.size,
                     mean_error_percent=round(float(error.mean()), 4), mean_u_percent=round(float(u.mean()), 4),
                     error_ratio=round(rms(error) / rms(u), 3),
                     law_alone=round((abs(float(error.mean())) + 2.0 * scatter) / float(got["u_law"][mine].mean()), 3),
                     )  # fmt: skip


def fresh(full: bool) -> Iterator[dict[str, Any]]:
    """A choice that is not remembered, after a night of many duties."""
    motor = night(0.4, (SEED, 6))
    motor.coarse()
    for duty in np.linspace(motor.median - 1.0, motor.median + 2.0, 60):
        motor.expose(round(float(duty), 3), 20.0)
    asked, repeats = question(0.99, SUSTAIN_ERROR), 500 if full else 100
    key = key_of(motor.sums)
    began = time.process_time()
    for _ in range(repeats):
        best.__wrapped__(asked, key)
    mean_ms = (time.process_time() - began) / repeats * 1000.0
    yield figure("search_choice_ms", mean_ms, "<= 1.5", n=repeats, duties=len(key[0]), clock="processor time")


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
    for number in range(1, count + 1):
        old = template[(number - 1) % len(template)]
        outcomes.append(replace(old, number=number, hold=replace(old.hold, number=number)))
    return plan, outcomes


def decisions(full: bool) -> Iterator[dict[str, Any]]:
    repeats = 200 if full else 50
    for count in (100, 3_000):
        plan, outcomes = history(count)
        night_so_far = History(outcomes)  # as conduct keeps them
        next_hold(plan, night_so_far, 0.0)
        began = time.perf_counter()
        for _ in range(repeats):
            next_hold(plan, night_so_far, 0.0)
        mean_ms = (time.perf_counter() - began) / repeats * 1000.0
        key = "decision_ms" if count == 3_000 else f"decision_ms_at_{count}"
        yield {"figure": key, "value": round(mean_ms, 3), "target": "<= 3", "meets": mean_ms <= 3.0, "n": repeats}


def figures(full: bool) -> Iterator[dict[str, Any]]:
    yield from decisions(full)
    yield from fresh(full)
    yield from against_the_ladder()
    yield from against_binary()
    yield from bias()
