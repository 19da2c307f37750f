"""The true findings of a simulated motor, by brute force on the plant alone: many trials, counted.

No instrument and no formula of the analysis is used. Stops and starts are counted at duties around each wanted level;
a smooth law through the counts gives the level, with its own standard error. The trials themselves are in `trials`.
"""

from __future__ import annotations

import math
import multiprocessing
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from dataclasses import asdict, replace
from typing import Any

import numpy as np

from sweeprig.holds import Condition
from sweeprig.job.motor_models import Motor
from sweeprig.job.rig_models import Rig
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.trials import BLOCK_TRIALS, Finding, Map, Procedure, Task, perform, true_speed
from sweeprig.simbench.truth_kick import kick_truth
from sweeprig.simbench.truth_law import fit_law
from sweeprig.simbench.truth_rare import long_run, start_tail

# ---- the whole -------------------------------------------------------------------------------------------------------


def truth(
    motor: MotorTruth | Motor,
    conditions: Sequence[Condition],
    *,
    procedure: Procedure,
    seed: int = 1,
    runs: int = 3000,
    workers: int = 1,
    rig: Rig | None = None,
    rare_trials: int = 0,
) -> list[dict[str, Any]]:
    """The true findings, one JSON-able dict a condition, under the names of findings.json.

    Each finding is {"value", "u"} (u: the standard error of this counting) or {"value": None, "reason"}.

    procedure  how a trial is done
    runs       trials per threshold (stall and start each), shared over about twenty duties
    workers    processes; more than one starts fresh interpreters. The result does not depend on it.
    rig        the rig whose power stage and supply the motor hangs on; without it an ideal low-side switch
    rare_trials  forks a rung where `long_run_duty_percent`, `stop_tail` and `start_tail` take splitting; 0: no such
    """
    tasks = [Task(motor, one, procedure, "stall", 0.0, 1, (seed, number), rig) for number, one in enumerate(conditions)]
    with _workers(workers) as spread:
        found = [_condition(task, runs, spread) for task in tasks]
        if rare_trials:
            for task, one in zip(tasks, found, strict=True):
                _add_rare(replace(task, trials=rare_trials), one, spread)
    return found


@contextmanager
def _workers(number: int) -> Iterator[Map]:
    if number <= 1:
        yield map
        return
    with ProcessPoolExecutor(number, mp_context=multiprocessing.get_context("spawn")) as pool:
        yield pool.map


def _condition(task: Task, runs: int, spread: Map) -> dict[str, Any]:
    p = task.procedure
    result: dict[str, Any] = {"condition": asdict(task.condition)}
    result |= {"hold_time_s": p.hold_time_s, "start_time_s": p.start_time_s, "rest_time_s": p.rest_time_s}
    result["trials"], result["lack_of_fit_p"] = {}, {}
    stall = _threshold(replace(task, kind="stall", seed=(*task.seed, 1)), runs, spread, result)
    start = _threshold(replace(task, kind="start", seed=(*task.seed, 2)), runs, spread, result)
    result["stall_duty_percent"], result["sustain_99_duty_percent"], result["stall_spread_percent"] = stall
    result["start_duty_percent"], result["start_99_duty_percent"], result["start_spread_percent"] = start
    result["start_stall_hysteresis_percent"] = _difference(start[0], stall[0])
    sustain = stall[1]["value"]
    curve, upper = _curve(task, p.duty_low_percent if sustain is None else sustain, spread)
    high = {"high_duty_percent": upper["high_duty_percent"], "high_speed_rpm": upper["high_speed_rpm"]}
    low = {"low_duty_percent": stall[1], "low_duty_from_rest_percent": start[1]}
    if sustain is None:
        missing = stall[1]
        speeds = dict.fromkeys(("stall_speed_rpm", "stall_voltage_volts", "lowest_reliable_speed_rpm"), missing)
        turndown = missing
    else:
        stall_speed, stall_voltage = _speed_finding(task, stall[0]["value"], stall[0]["u"], spread)
        slowest, _ = _speed_finding(replace(task, seed=(*task.seed, 3)), sustain, stall[1]["u"], spread)
        speeds = {"stall_speed_rpm": stall_speed, "stall_voltage_volts": stall_voltage}
        speeds["lowest_reliable_speed_rpm"] = slowest
        turndown = _ratio(high["high_speed_rpm"], slowest)
    result |= speeds | {"top_speed_rpm": upper["top_speed_rpm"]}
    result |= kick_truth(replace(task, seed=(*task.seed, 4)), sustain, runs, spread)
    ends = {"low_speed_rpm": speeds["lowest_reliable_speed_rpm"], "turndown": turndown}
    return result | {"usable_range": low | high | ends, "speed_curve": curve}


def _add_rare(task: Task, found: dict[str, Any], spread: Map) -> None:
    """What counting does not reach, where stops and starts begin within the allowed duties."""
    sustain, width = found["sustain_99_duty_percent"], found["stall_spread_percent"]
    if sustain["value"] is None:
        found["long_run_duty_percent"] = sustain
    else:
        found["long_run_duty_percent"], found["stop_tail"] = long_run(task, sustain["value"], width["value"], spread)
    start, width = found["start_99_duty_percent"], found["start_spread_percent"]
    if start["value"] is not None:
        found["start_tail"] = start_tail(task, start["value"], width["value"], spread)


def _threshold(task: Task, runs: int, spread: Map, record: dict[str, Any]) -> tuple[Finding, Finding, Finding]:
    """(50 % duty, 99 % duty, spread) of stalling or starting: a third of the runs evenly, the rest where they count."""
    around = _bracket(replace(task, trials=24))
    if around is None:
        reason = "never_stopped" if task.kind == "stall" else "never_started"
        missing: Finding = {"value": None, "reason": reason}
        return missing, missing, missing
    middle, width = around
    even = [float(d) for d in np.linspace(middle - 1.5 * width, middle + 1.5 * width, 10)]
    counts = list(spread(perform, _spread_out(task, even, runs // 3, 10)))
    law = fit_law(counts, degrees=(2,))
    events = [0.05, 0.15, 0.3, 0.5, 0.7, 0.85, 0.93, 0.97, 0.99, 0.995]
    if task.kind == "stall":
        events = [1.0 - chance for chance in events]
    for stage in range(11, 15):
        better = [law.duty_near(chance) for chance in events]
        counts += spread(perform, _spread_out(task, better, runs - runs // 3, stage))
        law = fit_law(counts)
        if law.reaches(0.005 if task.kind == "stall" else 0.995) and law.reaches(0.5):
            break
    if not law.reaches(0.01 if task.kind == "stall" else 0.99):
        law = fit_law(counts, degrees=(2,))  # with few runs a higher degree may turn back before it gets there
    record["trials"][task.kind] = sum(c.trials for c in counts)
    record["lack_of_fit_p"][task.kind] = law.lack_of_fit_p
    half, u_half = law.duty_at(0.5)
    safe, u_safe = law.duty_at(0.01 if task.kind == "stall" else 0.99)
    # 1.283/b, the standard deviation of the stopping law exp(−T·h), h falling as exp(−b·duty)
    width_50 = math.pi / math.sqrt(6.0) / abs(law.slope(half))
    return _finding(half, u_half), _finding(safe, u_safe), {"value": width_50}


def _difference(a: Finding, b: Finding) -> Finding:
    if a["value"] is None or b["value"] is None:
        return a if a["value"] is None else b
    return _finding(a["value"] - b["value"], math.hypot(a["u"], b["u"]))


def _ratio(a: Finding, b: Finding) -> Finding:
    value = a["value"] / b["value"]
    return _finding(value, value * math.hypot(a["u"] / a["value"], b["u"] / b["value"]))


# ---- where to look ---------------------------------------------------------------------------------------------------


def _bracket(task: Task) -> tuple[float, float] | None:
    """(duty, half-width) of the range in which the outcome changes; None where it does not within the allowed duties.

    Bisection on eight trials for the middle, then outwards until nearly all trials agree.
    """
    count = 0

    def chance_of_turning(duty: float) -> float:
        nonlocal count
        count += 1
        got = perform(replace(task, duty=duty, seed=(*task.seed, count)))
        return (got.events if task.kind == "start" else got.trials - got.events) / got.trials

    low, high = task.procedure.duty_low_percent, task.procedure.duty_high_percent
    if chance_of_turning(low) > 0.5 or chance_of_turning(high) < 0.5:
        return None
    while high - low > 0.2:
        middle = 0.5 * (low + high)
        low, high = (low, middle) if chance_of_turning(middle) > 0.5 else (middle, high)
    middle, width = 0.5 * (low + high), 0.2
    while width < 12.8 and chance_of_turning(min(task.procedure.duty_high_percent, middle + width)) < 0.97:
        width *= 1.5
    return middle, width


def _spread_out(task: Task, duties: Sequence[float], runs: int, stage: int) -> list[Task]:
    """`runs` trials shared evenly over `duties`, in blocks, each with a seed of its own."""
    low, high = task.procedure.duty_low_percent, task.procedure.duty_high_percent
    blocks = max(1, round(runs / len(duties) / BLOCK_TRIALS))
    size = max(1, round(runs / len(duties) / blocks))
    return [
        replace(task, duty=min(high, max(low, duty)), trials=size, seed=(*task.seed, stage, number, block))
        for number, duty in enumerate(duties)
        for block in range(blocks)
    ]


# ---- speeds ----------------------------------------------------------------------------------------------------------


def _finding(value: float, u: float) -> Finding:
    return {"value": float(value), "u": float(u)}


def _curve(task: Task, low: float, spread: Map) -> tuple[Finding, dict[str, Finding]]:
    """The speed curve from `low` upwards and, from it, top speed and upper end of the usable range."""
    p = task.procedure
    duties = [float(d) for d in np.linspace(low, p.duty_high_percent, 15)]
    speeds = list(spread(true_speed, [replace(task, duty=d, seed=(*task.seed, 20, i)) for i, d in enumerate(duties)]))
    rpm = [s[0] for s in speeds]
    top = max(range(len(rpm)), key=rpm.__getitem__)
    wanted = rpm[top] * (1.0 - p.saturation_percent / 100.0)
    above = next(i for i, speed in enumerate(rpm) if speed >= wanted)
    left, right = (duties[above - 1], duties[above]) if above else (duties[0], duties[1])
    fine = [float(d) for d in np.linspace(left, right, 7)]
    near = list(spread(true_speed, [replace(task, duty=d, seed=(*task.seed, 21, i)) for i, d in enumerate(fine)]))
    quadratic = np.polyfit(np.array(fine) - left, [s[0] for s in near], 2)
    dense = np.linspace(0.0, right - left, 2001)
    reached = np.polyval(quadratic, dense) >= wanted
    offset = float(dense[int(np.argmax(reached))]) if bool(reached.any()) else right - left
    slope = max(1e-9, abs(float(np.polyval(np.polyder(quadratic), offset))))
    u_speed = math.hypot(max(s[1] for s in near), speeds[top][1])
    curve = {"duty_percent": duties, "speed_rpm": rpm, "u_rpm": [s[1] for s in speeds]}
    return curve, {
        "top_speed_rpm": _finding(rpm[top], speeds[top][1]),
        "high_duty_percent": _finding(left + offset, u_speed / slope),
        "high_speed_rpm": _finding(wanted, speeds[top][1]),
    }


def _speed_finding(task: Task, duty: float, u_duty: float, spread: Map) -> tuple[Finding, Finding]:
    """(speed, mean motor voltage) at a duty that is itself known to `u_duty`."""
    step = max(0.2, 2.0 * u_duty)
    tasks = [replace(task, duty=duty + d, seed=(*task.seed, 30, i)) for i, d in enumerate((0.0, step, -step, 0.0))]
    at, above, below, again = spread(true_speed, tasks)
    rpm, volts = 0.5 * (at[0] + again[0]), 0.5 * (at[2] + again[2])
    speed_slope, volt_slope = (above[0] - below[0]) / (2.0 * step), (above[2] - below[2]) / (2.0 * step)
    u_rpm = math.hypot(at[1] / math.sqrt(2.0), speed_slope * u_duty)
    return _finding(rpm, u_rpm), _finding(volts, math.hypot(0.5 * abs(at[2] - again[2]), volt_slope * u_duty))
