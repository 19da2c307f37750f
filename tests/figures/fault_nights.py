"""A thousand short nights with planned faults: no wrong number without a flag, no drive left on, nothing that healthy
nights would notice. What the drive did is read from the bench's own record, never from what the run says.

python tests/figures/fault_nights.py --seed N     one night again, in words
python tests/figures/fault_nights.py --nights N   so many
"""

from __future__ import annotations

import argparse
import json
import math
import statistics
import sys
import tempfile
import traceback
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import sweeprig.simbench
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.errors import RunError, SweeprigError
from sweeprig.holds import Hold, Status
from sweeprig.job import load
from sweeprig.job.fault_models import FAULT_KINDS
from sweeprig.launch import start
from sweeprig.opened import Run, open_run
from sweeprig.simbench.bench import Bench
from sweeprig.simbench.many import many

if TYPE_CHECKING:
    from tests.figures import night_faults, night_numbers
    from tests.figures.night_faults import KINDS, Night
else:
    sys.path.insert(0, str(Path(__file__).parent))  # also in processes that are started afresh, and from the tests
    import night_faults
    import night_numbers
    from night_faults import KINDS, Night

NIGHTS, HEALTHY, REFERENCES = 1000, 50, 12
FIRST_HEALTHY, FIRST_REFERENCE = 1_000_000, 2_000_000
"""Seeds of the healthy nights, and of those that the reference is made of."""

SLACK_S = BOUNDS["cycle_s"] + BOUNDS["exchange_s"] + BOUNDS["off_s"]
"""The drive may be on for what a hold's plan says and so much longer: a reading that does not come, the question what
is wrong, and switching off each have their own longest time."""
AFTER_S = 30.0
"""The bench is left alone for so long after a run's end: nothing that is still under way may switch anything on."""
FORGIVEN = ("cr_lf", "double_terminator", "extra_terminator", "minimum_gap", "completion_at_once", "queue_overflow",
            "standing_error", "local_mode", "split_reply", "dribble", "busy", "link_limit", "brush_bounce")  # fmt: skip
"""Kinds that need not end a hold: the time to off counts from another one, where there is one."""

_LAWS = tuple(name for name, kind in KINDS.items() if not kind.plant)
"""Motors that are laws: no back-EMF shows in their current whether they turn."""
_PLANTS = tuple(name for name, kind in KINDS.items() if kind.plant)
FOR_A_SUSPICION: Mapping[str, tuple[tuple[str, ...], str]] = {
    "broken_tach_wire": (_LAWS, "no edges from a motor that turns look like a motor that stopped"),
    "loose_coupling": (_LAWS, "a wheel that runs down on a turning shaft looks like a motor that stops"),
    "brush_bounce": (_LAWS, "brushes that lift all night make it a slower motor: what is found is what that one does"),
    "motor_overheats": (_PLANTS, "a bearing that binds makes it another motor: what is found is what that one does"),
    "switch_open": (("input",), "an input that nothing pulls looks like a fan that knows no speed but its highest"),
    "switch_short": (("input",), "an input that is pulled all the time looks like a fan that knows no other speed"),
}
"""Fault → (benches, why): what nothing in such a night tells from another motor. Counted apart until a suspicion shows
it; gated from then on."""


@dataclass
class Told:
    """What became of a night. `how`: finished, parked, tripped, waiting, refused (an error that the program knows), or
    own_error. `to_off`: seconds from a fault to off, for each hold that was broken by one."""

    seed: int
    kind: str
    faults: str
    how: str
    reason: str = ""
    wrong: list[str] = field(default_factory=list)
    flagged: list[str] = field(default_factory=list)
    left_on: list[str] = field(default_factory=list)
    to_off: list[float] = field(default_factory=list)
    acted: list[str] = field(default_factory=list)
    discarded: int = 0
    condition: dict[str, Any] | None = None

    @property
    def disturbed(self) -> bool:
        return self.how != "finished" or self.discarded > 0


@contextmanager
def benches() -> Iterator[list[Bench]]:
    """The benches that are built meanwhile."""
    build, built = sweeprig.simbench.build, list[Bench]()

    def kept(*args: Any, **more: Any) -> Bench:
        built.append(build(*args, **more))
        return built[-1]

    sweeprig.simbench.build = kept
    try:
        yield built
    finally:
        sweeprig.simbench.build = build


def lived(night: Night) -> Told:
    """Work the night to its end, and look what it did."""
    told = Told(night.seed, night.kind, night.names, "own_error")
    with tempfile.TemporaryDirectory() as name, benches() as built:
        folder = Path(name)
        try:
            ending = start(night_faults.write_job(night, folder), folder / "runs").ending
            told.how, told.reason = ending.state.name.lower(), ending.reason
        except SweeprigError as error:
            told.how, told.reason = "refused", f"{type(error).__name__}: {error}"
        except Exception:  # noqa: BLE001 - the night's own result
            told.reason = traceback.format_exc()
        if not built:
            raise AssertionError(f"night {night.seed}: {told.reason}\n{night.names}")
        bench = built[-1]
        told.acted = sorted({one.kind for one in bench.struck})
        run = None
        with suppress(RunError, IndexError):
            run = open_run(next(iter((folder / "runs").iterdir())))
        _look_at_the_drive(told, night, bench, run)
        if run is not None and told.how != "own_error":
            _look_at_the_numbers(told, run)
    return told


# -- numbers ---------------------------------------------------------------------------------------------------------


def _look_at_the_numbers(told: Told, run: Run) -> None:
    told.discarded = sum(outcome.status is not Status.DONE for outcome in run.outcomes)
    try:
        told.condition = run.findings.as_json()["conditions"][0]
    except Exception:  # noqa: BLE001 - the night's own result
        told.how, told.reason = "own_error", traceback.format_exc()


def judged(night: Night, pair: tuple[int, int], true: Mapping[str, night_numbers.Reference]) -> Told:
    """`lived`, and its numbers held against what is true."""
    del pair
    told = lived(night)
    if told.condition is not None:
        told.wrong, told.flagged = night_numbers.wrong_numbers(told.condition, true[night.kind])
    told.condition = None
    return told


def _lived(night: Night, pair: tuple[int, int]) -> Told:
    del pair
    return lived(night)


def _truth(kind: str, pair: tuple[int, int]) -> dict[str, Any]:
    from sweeprig.simbench.truth_of_job import truth_of

    del pair
    with tempfile.TemporaryDirectory() as name:
        job = load(night_faults.write_job(Night(1, kind), Path(name)))
        return dict(truth_of(job, night_numbers.TRIALS, workers=1, rare_trials=0)["conditions"][0])


def references(
    kinds: Sequence[str], workers: int | None, count: int = REFERENCES
) -> dict[str, night_numbers.Reference]:
    """What is true on each of these benches, with so many healthy nights for each."""
    nights = [Night(FIRST_REFERENCE + number, kind) for kind in kinds for number in range(count)]
    tolds = many(_lived, nights, 0, workers)
    truths = many(_truth, list(kinds), 0, workers)
    return {
        kind: night_numbers.reference(
            truth, [told.condition for told in tolds if told.kind == kind and told.condition is not None]
        )
        for kind, truth in zip(kinds, truths, strict=True)
    }


# -- the drive -------------------------------------------------------------------------------------------------------


def _look_at_the_drive(told: Told, night: Night, bench: Bench, run: Run | None) -> None:
    end = bench.now
    try:
        bench.advance(end + AFTER_S)
    except Exception:  # noqa: BLE001 - the night's own result
        told.how, told.reason = "own_error", traceback.format_exc()
    on = powered(night, bench)
    for began, ended in on:
        if ended > end:
            told.left_on.append(f"on from {began:.3f} s to {ended:.3f} s, the run ended at {end:.3f} s")
    holds = _holds(run)
    for began, ended in on:
        longest = sum(_longest(hold) for at, until, hold in holds if at < ended and until > began)
        if ended - began > longest + SLACK_S:
            told.left_on.append(f"on for {ended - began:.1f} s from {began:.3f} s, planned {longest:.1f} s")
    if run is not None:
        told.to_off.extend(_times_to_off(run, bench, on))


def powered(night: Night, bench: Bench) -> list[tuple[float, float]]:
    """(from, to) of each time in which the motor had power: supply on, and the switch driven or short."""
    moments: list[tuple[float, str, bool]] = [
        (each.at, each.what.partition("_")[0], each.what.endswith("_on")) for each in bench.record
    ]
    for fault in night.faults:
        if fault["kind"] == "switch_short":
            at = float(fault["start"].split()[0])
            moments.append((at, "short", True))
            if "lasts" in fault:
                moments.append((at + float(fault["lasts"].split()[0]), "short", False))
    state = {"drive": KINDS[night.kind].input, "supply": False, "short": False}
    found: list[tuple[float, float]] = []
    since: float | None = None
    for at, what, now_on in sorted(moments, key=lambda each: each[0]):
        if what != "drive" or not KINDS[night.kind].input:
            state[what] = now_on
        power = state["supply"] and (state["drive"] or state["short"])
        if power and since is None:
            since = at
        elif not power and since is not None:
            found.append((since, at))
            since = None
    return found if since is None else [*found, (since, math.inf)]


def _holds(run: Run | None) -> list[tuple[float, float, Hold]]:
    """(began, ended, hold) of every hold, also of one without an outcome."""
    if run is None:
        return []
    done = [(each.began, each.ended, each.hold) for each in run.outcomes]
    return done + [(each.began, math.inf, each.hold) for each in run.unfinished]


def _longest(hold: Hold) -> float:
    return hold.most_s + sum(seconds for duty, seconds in hold.lead if duty > 0)


def _times_to_off(run: Run, bench: Bench, on: Sequence[tuple[float, float]]) -> Iterator[float]:
    """For each hold that a fault has broken: from the fault (or the power, of one that was there before) to off."""
    for outcome in run.outcomes:
        if outcome.status not in (Status.DISCARDED, Status.TRIPPED):
            continue
        strikes = [one for one in bench.struck if outcome.began <= one.at <= outcome.ended]
        breaking = [one for one in strikes if one.kind not in FORGIVEN] or strikes
        for began, ended in on:
            if ended > outcome.began and began < outcome.ended:
                first = min((one.at for one in breaking if one.at <= ended), default=-math.inf)
                yield ended - max(first, began, outcome.began)


# -- figures ---------------------------------------------------------------------------------------------------------


def all_nights(count: int, workers: int | None = None) -> tuple[list[Told], list[Told]]:
    """(struck, healthy), judged."""
    true = references(tuple(KINDS), workers)
    healthy = [night_faults.healthy(FIRST_HEALTHY + number) for number in range(max(5, HEALTHY * count // NIGHTS))]
    struck = [night_faults.struck(seed) for seed in range(1, count + 1)]
    tolds = many(partial(judged, true=true), [*struck, *healthy], 0, workers)
    return tolds[: len(struck)], tolds[len(struck) :]


def for_a_suspicion(told: Told) -> bool:
    """Wrong, and by a fault that nothing in such a night can tell."""
    return bool(told.wrong) and any(told.kind in FOR_A_SUSPICION.get(fault, ((), ""))[0] for fault in told.acted)


def figures(full: bool, count: int | None = None, workers: int | None = None) -> Iterator[dict[str, Any]]:
    count = count or (NIGHTS if full else NIGHTS // 10)
    struck, healthy = all_nights(count, workers)
    wrong = [told for told in (*struck, *healthy) if told.wrong and not for_a_suspicion(told)]
    yield _none("nights_wrong_number", wrong, len(struck) + len(healthy))
    later = [told for told in struck if for_a_suspicion(told)]
    why = {fault: words for fault, (_, words) in FOR_A_SUSPICION.items()}
    yield {"figure": "nights_for_a_suspicion", "value": len(later), "why": why, "n": count,
           "nights": [_shown(told) for told in later]}  # fmt: skip
    yield _none("nights_drive_left_on", [told for told in (*struck, *healthy) if told.left_on], len(struck))
    yield _none("nights_healthy_disturbed", [told for told in healthy if told.disturbed], len(healthy))
    yield _none("nights_own_error", [told for told in (*struck, *healthy) if told.how == "own_error"], len(struck))
    times = sorted((time, told.seed) for told in struck for time in told.to_off)
    if times:
        worst, seed = times[-1]
        yield {"figure": "fault_to_off_worst_s", "value": round(worst, 2), "n": len(times), "night": seed}
        median = statistics.median(time for time, _ in times)
        yield {"figure": "fault_to_off_median_s", "value": round(median, 2), "n": len(times)}
    acted = Counter(kind for told in struck for kind in told.acted)
    asked = [kind for kind in FAULT_KINDS if kind not in night_faults.NEVER_ASKED]
    rarest = min(asked, key=lambda kind: acted[kind])
    least = 10 if full else 1
    yield {"figure": "nights_of_each_fault", "value": acted[rarest], "target": f">= {least}", "n": count,
           "meets": acted[rarest] >= least, "rarest": rarest,
           "never_asked": list(night_faults.NEVER_ASKED)}  # fmt: skip
    yield {"figure": "nights_by_class", "value": dict(Counter(told.how for told in struck)), "n": count,
           "with_discards": sum(told.discarded > 0 for told in struck),
           "flagged": sum(bool(told.flagged) for told in struck)}  # fmt: skip


def _none(name: str, nights: Sequence[Told], count: int) -> dict[str, Any]:
    return {"figure": name, "value": len(nights), "target": "0", "meets": not nights, "n": count,
            "nights": [_shown(told) for told in nights]}  # fmt: skip


def _shown(told: Told) -> dict[str, Any]:
    what = [*told.wrong, *told.left_on][:6] or [told.reason[-600:]]
    return {"seed": told.seed, "bench": told.kind, "faults": told.faults, "how": told.how, "what": what}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seed", type=int, help="one night again")
    parser.add_argument("--nights", type=int, default=NIGHTS)
    given = parser.parse_args()
    if given.seed is None:
        for figure in figures(True, given.nights):
            print(json.dumps(figure), flush=True)
        return
    night = night_faults.struck(given.seed) if given.seed < FIRST_HEALTHY else night_faults.healthy(given.seed)
    told = judged(night, (0, 0), references([night.kind], None))
    for key in ("kind", "faults", "how", "reason", "acted", "discarded", "to_off", "wrong", "flagged", "left_on"):
        print(f"{key:10} {getattr(told, key)}")


if __name__ == "__main__":
    main()
