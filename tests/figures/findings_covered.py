"""Do the intervals of the thresholds hold the truth? A thousand cheap motors, by spread, and disturbed ones beside."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import stats

from sweeprig.characterise.disturbed import lapse_finding
from sweeprig.characterise.duties_found import STALL, START, threshold
from sweeprig.characterise.evidence import Chosen
from sweeprig.characterise.findings import Finding
from sweeprig.simbench.many import many

if TYPE_CHECKING:
    from tests.figures.coverage_motors import Motor, Placing, adaptive, ladder, motor, naive_stopping_duty
else:
    # the folder of this script is on the path, and spawned processes find it there
    from coverage_motors import Motor, Placing, adaptive, ladder, motor, naive_stopping_duty

MOTORS, MOTORS_BESIDE, SEED = 1_000, 150, 20261201
PASSES = 8
NAMES = {("stall", 0.5): "stall", ("stall", 0.99): "sustain_99", ("start", 0.5): "start", ("start", 0.99): "start_99"}
BOUNDS = {"stall": "low_duty", "start": "low_duty_from_rest"}
SPREADS = {"stall": (0.1, 0.3, 0.8, 1.6), "start": (0.3, 0.8, 2.0)}
DISTURBED = {
    "scatter of one spread": {"spread": 0.4, "scatter": 0.4},
    "drift of three spreads an hour": {"spread": 0.4, "drift": 1.2},
    "lapse of 3 %": {"spread": 0.4, "lapse": 0.03},
}
Row = dict[str, float]


def covers(finding: Finding, true: float) -> bool:
    low = -math.inf if finding.low is None else finding.low
    high = math.inf if finding.high is None else finding.high
    return low <= true <= high


def judged(placing: Placing, made: Motor) -> Row:
    """For each finding: whether it covers (1 or 0), its width and its error; percent duty."""
    trials = placing(made.attempt, made.kind, made.coarse())
    found = threshold(STALL if made.kind == "stall" else START, Chosen(trials), 0.0)
    row: Row = {"trials": float(len(trials))}
    middle_s = (trials[0].at_s + trials[-1].at_s) / 2.0
    for probability in (0.5, 0.99):
        name, one = NAMES[made.kind, probability], found.finding(probability)
        true = made.truth(probability) + made.drift * middle_s / 3600.0
        row[name] = float(covers(one, true))
        if one.low is not None and one.high is not None and one.value is not None:
            row |= {f"{name} width": one.high - one.low, f"{name} error": one.value - true}
        if probability > 0.5:
            upper = found.upper(probability)
            row[BOUNDS[made.kind]] = float(upper.found and covers(upper, true))
    if made.kind == "stall":
        lapse = lapse_finding(found.fitted, found.evidence)
        row["lapse"] = float(covers(lapse, 1.0 - math.exp(-made.lapse)))
    return row


def one_motor(placing: Placing, more: dict[str, float], kind: str, seed: tuple[int, int]) -> Row:
    return judged(placing, motor(kind, seed, **more))


def lot(placing: Placing, kind: str, count: int, more: dict[str, float], seed: int) -> dict[str, list[float]]:
    """Name of a finding → what `judged` says of each motor."""
    rows = many(partial(one_motor, placing, more), [kind] * count, seed)
    return {name: [row[name] for row in rows if name in row] for name in dict.fromkeys(k for row in rows for k in row)}


def binomial_interval(hits: Sequence[float]) -> list[float]:
    """95 % interval of a share, percent (Clopper and Pearson 1934)."""
    n, k = len(hits), int(sum(hits))
    low = 0.0 if k == 0 else float(stats.beta.ppf(0.025, k, n - k + 1))
    high = 1.0 if k == n else float(stats.beta.ppf(0.975, k + 1, n - k))
    return [round(100.0 * low, 1), round(100.0 * high, 1)]


def coverage(name: str, hits: Sequence[float], *, gated: bool, two_sided: bool = True) -> dict[str, Any]:
    percent = 100.0 * float(np.mean(hits))
    most = 97.5 if two_sided else 100.0
    target = "92.5 to 97.5" if two_sided else ">= 92.5 (one-sided)"
    return {
        "figure": f"coverage_{name}", "value": round(percent, 1), "n": len(hits),
        "binomial_95": binomial_interval(hits),
        **({"target": target, "meets": 92.5 <= percent <= most} if gated else {"target": "printed", "meets": True}),
    }  # fmt: skip


def of_kind(placing: Placing, kind: str) -> Iterator[dict[str, Any]]:
    """Spread drawn log-uniform: the gated figures; then at single spreads."""
    seen = lot(placing, kind, MOTORS, {}, SEED)
    for (of, _), name in NAMES.items():
        if of == kind:
            width = {"median_width_percent": round(float(np.median(seen[f"{name} width"])), 3)}
            yield coverage(name, seen[name], gated=True) | width | {"median_trials": float(np.median(seen["trials"]))}
    yield coverage(BOUNDS[kind], seen[BOUNDS[kind]], gated=True, two_sided=False)
    for spread in SPREADS[kind]:
        seen = lot(placing, kind, MOTORS_BESIDE, {"spread": spread}, SEED + 1)
        for name in (*(n for (of, _), n in NAMES.items() if of == kind), BOUNDS[kind]):
            yield coverage(f"{name}_at_spread_{spread:g}", seen[name], gated=False)


def disturbed(placing: Placing) -> Iterator[dict[str, Any]]:
    """Motors with scatter, drift, lapse: printed, not gated."""
    for what, more in DISTURBED.items():
        seen = lot(placing, "stall", MOTORS_BESIDE, more, SEED + 2)
        for name in ("stall", "sustain_99", "lapse"):
            error = {"mean_error_percent": round(float(np.mean(seen[f"{name} error"])), 3)} if name != "lapse" else {}
            yield coverage(f"{name}_with_{what.replace(' ', '_')}", seen[name], gated=False) | error


def naive(spread: float, seed: tuple[int, int]) -> tuple[float, float]:
    """Errors of the mean stopping duty of ladders down, and of the finding from the same trials, percent duty."""
    made = motor("stall", seed, spread=spread)
    stopping, trials = naive_stopping_duty(made.attempt, made.median + 10.0 + made.rng.uniform(0.0, 0.5), PASSES)
    value = threshold(STALL, Chosen(trials), 0.0).finding(0.5).value
    return stopping - made.median, math.nan if value is None else value - made.median


def ladder_bias() -> Iterator[dict[str, Any]]:
    """The bias of the ladder as everyone reads it, beside that of the finding from the same holds."""
    for spread in (0.1, 0.2, 0.4, 0.8):
        errors = np.array(many(naive, [spread] * MOTORS_BESIDE, SEED + 3))
        mean, u = np.nanmean(errors, axis=0), np.nanstd(errors, axis=0) / math.sqrt(len(errors))
        yield {
            "figure": f"ladder_bias_percent_at_spread_{spread:g}", "value": round(float(mean[1]), 3),
            "u": round(float(u[1]), 3), "naive_mean_stopping_duty": round(float(mean[0]), 3),
            "naive_u": round(float(u[0]), 3), "n": len(errors), "target": "printed", "meets": True,
        }  # fmt: skip


def figures(full: bool, placing: Placing = adaptive) -> Iterator[dict[str, Any]]:
    """placing: how a search places its trials. The tool's own search is gated; the ladder is printed beside it."""
    for kind in ("stall", "start"):
        yield from of_kind(placing, kind)
        for name, seen in lot(ladder, kind, MOTORS if full else MOTORS_BESIDE, {}, SEED).items():
            if name in (*NAMES.values(), *BOUNDS.values()):
                yield coverage(f"{name}_after_a_ladder", seen, gated=False)
    yield from disturbed(placing)
    yield from ladder_bias()
