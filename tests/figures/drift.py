"""Does drift masquerade as a finding? And is the drift that was found the true one?

Nights of the demo's fan at one PWM frequency while its friction and magnet change so much that the reference speed
moves by about 3 %, beside the same nights (same seeds) of a fan that does not change and is what the drifting one is at
the moment that its findings are of.

A night's thresholds scatter by their own u whether it drifts or not, so one pair of nights shows nothing: compared is
the mean difference over the pairs, printed with its standard error, in parts of the finding's u.
"""

from __future__ import annotations

import math
import multiprocessing
import statistics
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from sweeprig.characterise.evidence import duties, stall_trials, turning_before
from sweeprig.characterise.findings import FINDING_NAMES, RANGE_NAMES
from sweeprig.characterise.speed_drift import Drift, speeds
from sweeprig.holds import Status
from sweeprig.job import Job, freeze, load, shipped
from sweeprig.job.simulated_details import SimulatedDrift
from sweeprig.job.simulated_models import SimulatedMotor
from sweeprig.job.sweep_models import Reference
from sweeprig.launch import start
from sweeprig.opened import open_run
from sweeprig.results import fit
from sweeprig.simbench import aging_plant
from sweeprig.simbench.build import motor_truth
from sweeprig.simbench.trials import Procedure, Task, true_speed

PROCESSES = 2
DUTY, EVERY_S, TIME_S, TRIALS = 60.0, 600.0, 60.0, 200
CASES = {"friction_and_magnet": (-8.0, -3.0), "friction_alone": (38.0, 0.0)}
"""Percent an hour of turning of frictions and magnet. The first: a bearing that runs loose, a magnet that warms. The
second moves the start duty by fifteen percent duty; it is printed, not judged: no straight law follows that far."""
PAIRS = {"friction_and_magnet": 8, "friction_alone": 4}
_TRUE_SPEEDS = 6


@dataclass
class Night:
    """findings: name → (value, u); hours_at: hours turned by then, of a run clock's times."""

    findings: dict[str, tuple[float, float | None]]
    drift: Drift
    finding: Mapping[str, float]
    ages: list[tuple[float, float]] = field(default_factory=list)

    def hours_at(self, at_s: float) -> float:
        return float(np.interp(at_s, [at for at, _ in self.ages], [hours for _, hours in self.ages]))


LADDER = {"search": "ladder", "step": 0.5, "standard_error": None}
"""As many trials with drift as without: what differs is the motor and not the plan of the night."""


def job_of(seed: int, friction: float = 0.0, magnet: float = 0.0, hours: float = 0.0) -> Job:
    """The demo at its last PWM frequency with reference holds.

    friction, magnet: percent an hour of turning by which the motor changes. hours: it has done so for so long, and
    stays as it is from now on; 0: it begins to change."""
    job = load(shipped("demo"))
    motor, sweep = job.motor.simulated, job.sweep
    assert isinstance(motor, SimulatedMotor)
    assert sweep.stall is not None
    assert sweep.start is not None
    more, weaker = (1.0 + friction / 100.0) ** hours, (1.0 + magnet / 100.0) ** hours
    still = hours != 0.0
    changed = {
        "torque_constant_nm_per_a": motor.torque_constant_nm_per_a * weaker,
        "running_friction_nm": motor.running_friction_nm * more,
        "breakaway_friction_nm": motor.breakaway_friction_nm * more,
        "drift": SimulatedDrift(
            friction_percent_per_hour=0.0 if still else friction, magnet_percent_per_hour=0.0 if still else magnet
        ),
    }
    asked = {
        "seed": seed, "pwm": sweep.pwm[-1:],
        "stall": sweep.stall.model_copy(update={**LADDER, "holds": TRIALS}),
        "start": sweep.start.model_copy(update={**LADDER, "trials": TRIALS}),
        "reference": Reference.model_construct(duty=DUTY, every=EVERY_S, time=TIME_S),
    }  # fmt: skip
    simulated = motor.model_copy(update=changed)
    return job.model_copy(update={
        "sweep": sweep.model_copy(update=asked), "motor": job.motor.model_copy(update={"simulated": simulated}),
    })  # fmt: skip


def night_of(job: Job) -> Night:
    """Perform the job on the simulated bench; how old the motor was at each moment is seen in the plant itself."""
    ages: list[tuple[float, float]] = []
    grow = aging_plant.AgingPlant._grow_older

    def seen(self: aging_plant.AgingPlant, seconds: float) -> None:
        grow(self, seconds)
        ages.append((self._at, self._age.hours))

    aging_plant.AgingPlant._grow_older = seen  # type: ignore[method-assign]  # put back below
    try:
        with tempfile.TemporaryDirectory() as folder:
            path = start(job, Path(folder)).path
            run, found = open_run(path), fit(path).findings.conditions[0]
            plan, outcomes = run.plan, run.outcomes  # read while the folder is there
    finally:
        aging_plant.AgingPlant._grow_older = grow  # type: ignore[method-assign]
    done = [o for o in outcomes if o.status is Status.DONE and o.hold.condition == found.condition]
    known = duties(plan, found.condition, done)
    drift = speeds(plan, known, done, stall_trials(plan, known, done, turning_before(outcomes))).drift
    assert drift is not None
    named = {name: found.finding(name) for name in (*FINDING_NAMES, *RANGE_NAMES)}
    values = {name: (one.value, one.u) for name, one in named.items() if one.value is not None}
    return Night(values, drift, named["drift_percent_per_hour"].as_json(), ages)


def pair(work: tuple[str, int]) -> dict[str, Any]:
    """A drifting night and the still one beside it; with the true drift between first and last reference."""
    case, seed = work
    friction, magnet = CASES[case]
    moved = night_of(job_of(seed, friction, magnet))
    still = night_of(job_of(seed, friction, magnet, moved.hours_at(moved.drift.moment_s)))
    at = moved.drift.course.at_s
    ends = [
        _true_log_speed(job_of(seed, friction, magnet, moved.hours_at(t)), seed) for t in (float(at[0]), float(at[-1]))
    ]
    hours = moved.drift.course.span_s / 3600.0
    true = 100.0 * (ends[1][0] - ends[0][0]) / hours
    u_true = 100.0 * math.hypot(ends[0][1], ends[1][1]) / hours
    low, high = moved.finding["low"] - 2.0 * u_true, moved.finding["high"] + 2.0 * u_true
    return {
        "case": case, "moved": moved.findings, "still": still.findings, "true": true, "u_true": u_true,
        "held": low <= true <= high, "found": moved.finding["value"], "u": moved.finding["u"],
        "percent": 100.0 * math.expm1(ends[1][0] - ends[0][0]),
    }  # fmt: skip


def _true_log_speed(job: Job, seed: int) -> tuple[float, float]:
    """Logarithm of the settled speed at the reference duty of a motor that stays as it is, and its u."""
    task = Task(motor_truth(job), freeze(job).conditions[0], Procedure(), "stop", DUTY, 1, (seed,), job.rig)
    rpm = [true_speed(replace(task, seed=(seed, n)))[0] for n in range(_TRUE_SPEEDS)]
    mean = statistics.fmean(rpm)
    return math.log(mean), statistics.stdev(rpm) / mean / math.sqrt(len(rpm))


def compared(pairs: Sequence[Mapping[str, Any]]) -> dict[str, tuple[float, float]]:
    """Finding → (mean difference, its standard error), in parts of u: the mean over both nights of all pairs."""
    rows: dict[str, tuple[float, float]] = {}
    for name in pairs[0]["moved"]:
        if name == "drift_percent_per_hour" or not all(name in one["moved"] and name in one["still"] for one in pairs):
            continue
        off = [one["moved"][name][0] - one["still"][name][0] for one in pairs]
        u = statistics.fmean(u_of(name, one[which]) for one in pairs for which in ("moved", "still"))
        rows[name] = statistics.fmean(off) / u, statistics.stdev(off) / math.sqrt(len(off)) / u
    return rows


def u_of(name: str, found: Mapping[str, tuple[float, float | None]]) -> float:
    """The finding's u. A bound has none, and scatters as what it bounds: the 99 % duties, carried to speeds by the
    slope from the stall; a bound of something about 0 as a normal's 95 %, one of a standard deviation by a tenth."""
    value, u = found[name]
    sustain, stall = found["sustain_99_duty_percent"], found["stall_duty_percent"]
    if name in ("low_speed_rpm", "lowest_reliable_speed_rpm", "turndown"):
        (speed, own), (stall_speed, _) = found["lowest_reliable_speed_rpm"], found["stall_speed_rpm"]
        slope = (speed - stall_speed) / (found["low_duty_percent"][0] - stall[0])
        u_speed = math.hypot(own or 0.0, slope * (sustain[1] or 0.0))
        return value / speed * u_speed if name == "turndown" else u_speed
    if u is not None:
        return u
    like = {"low_duty_percent": sustain, "low_duty_from_rest_percent": found["start_99_duty_percent"]}
    return like[name][1] or 0.0 if name in like else value / (1.645 if name == "lapse" else 10.0)


def figures(full: bool) -> Iterator[dict[str, Any]]:
    work = [(case, seed) for case, count in PAIRS.items() for seed in range(1, (20 if full else count) + 1)]
    with ProcessPoolExecutor(PROCESSES, mp_context=multiprocessing.get_context("spawn")) as pool:
        every = list(pool.map(pair, work))
    for case in CASES:
        pairs = [one for one in every if one["case"] == case]
        rows = compared(pairs)
        worst = max(rows, key=lambda name: abs(rows[name][0]))
        judged = case == next(iter(CASES))
        yield {
            "figure": f"drift_moves_findings_{case}", "value": round(abs(rows[worst][0]), 2),
            "target": "<= 1 u" if judged else "printed", "meets": not judged or abs(rows[worst][0]) <= 1.0,
            "n": len(pairs),
            "worst": worst, "reference_moved_percent": round(statistics.fmean(one["percent"] for one in pairs), 2),
            "difference_in_u": {name: [round(off, 2), round(se, 2)] for name, (off, se) in rows.items()},
        }  # fmt: skip
        held = sum(one["held"] for one in pairs)
        yield {
            "figure": f"drift_found_{case}", "value": round(100.0 * held / len(pairs), 1), "target": ">= 80 % (95 %)",
            "meets": held >= 0.8 * len(pairs), "n": len(pairs),
            "found_true_u": [[round(one[key], 3) for key in ("found", "true", "u")] for one in pairs],
        }  # fmt: skip
