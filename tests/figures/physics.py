"""The simulated bench's physics: averaged against switched, against scipy and a circuit simulator, speed and error."""

from __future__ import annotations

import itertools
import random
import time
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import numpy as np

from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.compiled import available
from sweeprig.simbench.detailed import DetailedPlant
from sweeprig.simbench.motor_truth import DetailedTruth, MotorTruth
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.stride import STRIDE
from sweeprig.simbench.switched import SwitchedWave

if TYPE_CHECKING:
    from tests.figures import spice
    from tests.figures.circuits import Circuit, one_period
    from tests.figures.switched_motor import Method, Motor, Run, mean_speed
else:  # the figures' folder is on the path, as `run.py` lies in it, and is no package
    import spice
    from circuits import Circuit, one_period
    from switched_motor import Method, Motor, Run, mean_speed

FAN = Motor(11.2, 10.5e-3, 0.0283, 7.6e-6, 0.6e-3, 1.2e-5, 4.0e-8)
RUNS = (Run(12.0, 300.0, 0.25, 4.0, 0.2), Run(12.0, 300.0, 0.60, 4.0, 0.2), Run(12.0, 1000.0, 0.40, 1.2, 0.2))
"""A short hold each, at the frequencies of the job that ships; the lower the frequency, the fewer restarts to save."""
LONG_RUNS = (
    *RUNS,
    Run(12.0, 1000.0, 0.20, 1.2, 0.2),
    Run(12.0, 100.0, 0.50, 1.2, 0.2),
    Run(9.0, 3000.0, 0.70, 1.2, 0.2),
)
TOLERANCES = (1e-2, 3e-3, 1e-3, 1e-4, 1e-5, 1e-6)
"""Tried from the loosest: the first whose error is no greater than the averaged physics' counts."""
METHODS: tuple[Method, ...] = ("RK45", "LSODA", "Radau")

STAGES = (
    ("low_side_diode", False, False, 0.0), ("half_bridge", False, False, 0.0), ("half_bridge", True, False, 2e-6),
    ("h_bridge", True, False, 2e-6), ("h_bridge", False, True, 0.0), ("h_bridge", True, True, 2e-6),
)  # fmt: skip
"""Kind, synchronous, fast decay, dead time in s."""
SUPPLY_V = 12.0
POINTS = [
    (pwm_hz, duty, emf)
    for pwm_hz, duties, emfs in (
        (300.0, (12.0, 40.0, 80.0), (0.5, 5.0)), (1000.0, (20.0, 50.0), (1.0, 8.0)), (25e3, (30.0, 60.0), (2.0,))
    )
    for duty, emf in itertools.product(duties, emfs)
]  # fmt: skip


def averaged(run: Run) -> tuple[float, float]:
    """(mean speed in rad/s, wall seconds) of the same run on the simulated bench's plant; the best of five."""
    m = FAN
    truth = MotorTruth(
        m.ohm, m.henry, m.k, m.inertia, m.quadratic, m.viscous, m.friction, 0.0, m.friction, 0.0, 0.2, 0.0, 0.0, 240.0
    )
    spent, speed = [], 0.0
    for _ in range(5):
        plant = Plant(truth, 2.0, random.Random(1))
        plant.set_supply(run.volts, 10.0, True)
        began = time.perf_counter()
        plant.set_drive(run.pwm_hz, 100.0 * run.duty, True)
        plant.advance(run.seconds - run.settled)
        before = plant.angle
        plant.advance(run.seconds)
        speed = (plant.angle - before) / run.settled
        spent.append(time.perf_counter() - began)
    return speed, min(spent)


def raced(run: Run) -> dict[str, Any]:
    """The averaged physics' error, and how many times as long the fastest integrator takes at no greater error."""
    exact = mean_speed(FAN, run, "DOP853", 1e-9)
    speed, seconds = averaged(run)
    error = abs(speed / exact - 1.0)
    taken: dict[str, float] = {}
    for method, rtol in itertools.product(METHODS, TOLERANCES):
        if method in taken:
            continue
        found, spent = _timed(run, method, rtol)
        if abs(found / exact - 1.0) <= max(error, 1e-6):
            taken[method] = min(spent, _timed(run, method, rtol)[1])
    return {"error_percent": 100.0 * error, "ratio": min(taken.values()) / seconds, "taken": taken}


def _timed(run: Run, method: Method, rtol: float) -> tuple[float, float]:
    began = time.perf_counter()
    return mean_speed(FAN, run, method, rtol), time.perf_counter() - began


def case(stage: tuple[str, bool, bool, float], pwm_hz: float, duty: float, emf: float) -> tuple[Circuit, SwitchedWave]:
    """The circuit for the reference, and the simulated bench's waveform of it."""
    kind, synchronous, fast, dead = stage
    henry = 3e-3 if pwm_hz < 5e3 else 0.6e-3  # a shorter time constant spares the circuit simulator periods
    circuit = Circuit(kind, SUPPLY_V, 6.0, henry, pwm_hz, duty, 0.15, 0.6, 0.08, 0.2, dead, synchronous, fast)
    parts = SwitchedStage(kind, synchronous, fast, 0.15, 0.6, 0.08, dead, 0.0, 0.2)  # type: ignore[arg-type]  # a kind
    return circuit, parts.setting(SUPPLY_V, 6.0, henry, pwm_hz, duty, True).wave(emf)


def deviations(found: dict[str, float], shape: SwitchedWave) -> dict[str, float]:
    """Percent: means of themselves (of a tenth of peak or supply where they nearly cancel), valley of the peak."""
    peak = max(shape.peak_amps, -shape.valley_amps)
    mean, volts = max(abs(shape.mean_motor_amps), 0.1 * peak), max(abs(shape.mean_motor_volts), 0.1 * SUPPLY_V)
    return {
        "current": 100.0 * abs(found["amps"] - shape.mean_motor_amps) / mean,
        "voltage": 100.0 * abs(found["volts"] - shape.mean_motor_volts) / volts,
        "valley": 100.0 * abs(found["valley"] - shape.valley_amps) / peak,
    }


def against(reference: str) -> dict[str, float]:
    """The greatest deviations over all cases from "scipy" or "spice", and how many cases there were."""
    worst = {"current": 0.0, "voltage": 0.0, "valley": 0.0}
    cases = list(itertools.product(STAGES, POINTS))
    for stage, point in cases:
        circuit, shape = case(stage, *point)
        begin = shape.value("motor_lead", 0.0)
        found = (
            one_period(circuit, point[2], begin)
            if reference == "scipy"
            else spice.solve(circuit, point[2], 0.9 * begin)
        )
        for name, percent in deviations(found, shape).items():
            worst[name] = max(worst[name], percent)
    return worst | {"n": len(cases)}


COGGED = DetailedTruth(
    FAN.ohm, FAN.henry, FAN.k, FAN.inertia, FAN.quadratic, FAN.viscous, 1.5e-3, 15.0, 2.5e-3, 5.0, 0.2, 0.5, 20.0,
    240.0, cogging=Cogging(2e-3, 12),
)  # fmt: skip
NIGHT_HZ = (50.0, 300.0, 1000.0, 25e3)
NIGHT_DUTIES = (60.0, 40.0, 25.0, 18.0, 14.0, 12.0, 11.0, 10.0, 9.0, 8.0, 7.0, 6.0, 5.0)
"""Down through the detents' reach, percent; held for 20 s each, over and over for a quarter of the night each."""
HOLD_S, NIGHT_S = 20, 28_800


def cogging_night(pwm_hz: tuple[float, ...], seconds: int) -> dict[str, Any]:
    """Wall seconds of a night of a motor with cogging, the plant alone and looked at once a second; what it did."""
    plant = DetailedPlant(COGGED, 2.0, np.random.default_rng(1))
    plant.set_supply(12.0, 3.0, True)
    stepped = still = edges = 0
    began = time.perf_counter()
    for hold in range(seconds // HOLD_S):
        hz = pwm_hz[hold * HOLD_S * len(pwm_hz) // seconds]
        plant.set_drive(hz, NIGHT_DUTIES[hold % len(NIGHT_DUTIES)], True)
        for second in range(HOLD_S):
            plant.advance(float(hold * HOLD_S + second + 1))
            stepped, still, edges = stepped + plant.resolved, still + (not plant.turning), plant.edges
    spent = time.perf_counter() - began
    share = {"stepped_percent": 100.0 * stepped / seconds, "still_percent": 100.0 * still / seconds}
    return {"wall_s": spent, "edges": edges, "stops": plant.stops, **share}


def night_s() -> float:
    """Wall seconds of 8 h of a wandering motor's averaged physics alone, without instruments; the best of two."""
    m, spent = FAN, []
    truth = MotorTruth(
        m.ohm, m.henry, m.k, m.inertia, m.quadratic, m.viscous, m.friction, 24.0, m.friction, 3.5, 0.2, 0.0, 12.0, 240.0
    )
    for _ in range(2):
        plant = Plant(truth, 2.0, random.Random(1))
        plant.set_supply(12.0, 10.0, True)
        plant.set_drive(300.0, 40.0, True)
        began = time.perf_counter()
        while plant.now < 8.0 * 3600.0:
            plant.advance(plant.now + 1.0)
        spent.append(time.perf_counter() - began)
    return min(spent)


def figures(full: bool) -> Iterator[dict[str, Any]]:
    # a process compiles once it has asked for enough; here that has happened before the races, where the extra is
    STRIDE.hasten()
    averaged(RUNS[0])
    races = [raced(run) for run in (LONG_RUNS if full else RUNS)]
    ratio, error = min(race["ratio"] for race in races), max(race["error_percent"] for race in races)
    yield {
        "figure": "physics_speed_ratio", "value": round(ratio), "target": ">= 1000", "meets": ratio >= 1000.0,
        "n": len(races), "each": [round(race["ratio"]) for race in races], "compiled": STRIDE.quick,
    }  # fmt: skip
    alone = night_s()
    yield {
        "figure": "physics_night_s", "value": round(alone, 2), "target": "<= 1", "meets": alone <= 1.0, "n": 1,
        "simulated_hours": 8.0, "compiled": STRIDE.quick,
    }  # fmt: skip
    yield {
        "figure": "physics_error_percent", "value": round(error, 4), "target": "<= 0.1", "meets": error <= 0.1,
        "n": len(races), "each": [round(race["error_percent"], 4) for race in races],
    }  # fmt: skip
    cogging_night(NIGHT_HZ, 400)  # compiles, where that is wanted
    night = cogging_night(NIGHT_HZ, NIGHT_S)
    wall = night.pop("wall_s")
    yield {
        "figure": "cogging_night_s", "value": round(wall, 2), "target": "<= 5", "meets": wall <= 5.0, "n": 1,
        "compiled": available(), **{name: round(value, 1) for name, value in night.items()},
    }  # fmt: skip
    for reference in ("scipy", "spice"):
        key = f"physics_{reference}_percent"
        if reference == "spice" and spice.found() is None:
            yield {"figure": key, "value": None, "target": "<= 0.1", "meets": None, "n": 0, "why": "no ngspice here"}
            continue
        worst = against(reference)
        cases = worst.pop("n")
        most = max(worst.values())
        yield {
            "figure": key, "value": round(most, 6), "target": "<= 0.1", "meets": most <= 0.1, "n": cases,
            "each": {name: round(percent, 6) for name, percent in worst.items()},
        }  # fmt: skip
