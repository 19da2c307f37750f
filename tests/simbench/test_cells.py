"""Many cells in one go: the same history as one by one, compiled or not; what leaving ripple and cogging out costs."""

import json
import math
import os
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest

from sweeprig.simbench import closer, loaded
from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.closer import CloserPlant
from sweeprig.simbench.cogging import Cogging
from sweeprig.simbench.compiled import SWITCHED_OFF_BY, available
from sweeprig.simbench.detailed import DetailedPlant
from sweeprig.simbench.load import Load
from sweeprig.simbench.motor_truth import DetailedTruth
from sweeprig.simbench.stage import Stage

RPM = 30.0 / math.pi
PITCH = 2.0 * math.pi / 12.0
WANDERING = DetailedTruth(
    11.2, 10.5e-3, 0.0283, 7.6e-6, 4e-8, 1.2e-5, 1.5e-3, 15.0, 2.5e-3, 5.0, 0.2, 0.5, 20.0, 240.0,
    cogging=Cogging(2e-3, 12),
)  # fmt: skip
STEADY = replace(WANDERING, running_friction_spread_percent=0.0, breakaway_friction_spread_percent=0.0)
WINDY = replace(
    WANDERING, running_friction_nm=0.2e-3, breakaway_friction_nm=0.3e-3, cogging=Cogging(0.3e-3, 12),
    load=Load(
        constant_nm=1e-5, draught_rpm=700.0, draught_spread_percent=40.0, curve_rpm=(100.0, 900.0),
        curve_nm=(0.0, 2e-4), stiction_percent_per_decade=8.0,
    ),
)  # fmt: skip
SMOOTH = replace(
    WANDERING, cogging=None, running_friction_nm=0.6e-3, breakaway_friction_nm=0.9e-3,
)  # fmt: skip
SWEEP = (60.0, 25.0, 14.0, 12.0, 11.0, 10.0, 9.0, 8.0, 6.0, 4.0, 18.0, 0.0)
BRIDGE = SwitchedStage("half_bridge", synchronous=True, switch_ohms=0.05, supply_ohms=0.1, holds_bus=True)
DIODES = SwitchedStage("half_bridge", switch_ohms=0.05, diode_ohms=0.02)


def history(
    kind: type[CloserPlant], truth: DetailedTruth, pwm_hz: float, stage: Stage | None = None, amps: float = 3.0
) -> Iterator[dict[str, float]]:
    """What a plant reads every 1.7 s through a sweep of the duty down to nothing and up again."""
    plant = kind(truth, 2.0, np.random.default_rng(7), stage=stage)
    plant.set_supply(12.0, amps, True)
    for duty in SWEEP:
        plant.set_drive(pwm_hz, duty, duty > 0.0)
        for _ in range(3):
            plant.advance(plant.now + 1.7)
            yield {
                name: float(getattr(plant, name))
                for name in (
                    "omega", "position", "angle", "edges", "last_edge_at", "motor_volt_seconds", "motor_amp_seconds",
                    "supply_amp_seconds", "supply_volt_seconds", "stops", "stopped_at", "turning", "resolved",
                    "winding_degc",
                )
            }  # fmt: skip


@pytest.mark.parametrize(
    ("truth", "pwm_hz", "stage", "amps"),
    [
        (WANDERING, 25e3, None, 3.0), (WANDERING, 1000.0, None, 3.0), (WANDERING, 300.0, None, 3.0),
        (WANDERING, 50.0, None, 3.0), (WINDY, 1000.0, None, 3.0), (SMOOTH, 400.0, None, 3.0), (SMOOTH, 50.0, None, 3.0),
        (WANDERING, 1000.0, BRIDGE, 3.0), (WANDERING, 1000.0, DIODES, 3.0), (WANDERING, 1000.0, None, 0.05),
    ],
)  # fmt: skip
def test_many_cells_are_the_cells_one_by_one(
    truth: DetailedTruth, pwm_hz: float, stage: Stage | None, amps: float
) -> None:
    """In one go or cell by cell the history is the same to 1e-8: averaged, stepped, chopped, stopped and started again.

    Independent method: `closer` works cell by cell from the laws of load, cogging and stage themselves.
    """
    fast, slow = (history(kind, truth, pwm_hz, stage, amps) for kind in (DetailedPlant, CloserPlant))
    for here, there in zip(fast, slow, strict=True):
        assert here == pytest.approx(there, rel=1e-8, abs=1e-9)
    assert there["edges"] > 20.0


def test_the_sweep_meets_everything() -> None:
    """The compared histories do contain stops, starts after a stop, stepping and averaging."""
    for pwm_hz in (1000.0, 25e3):
        seen = list(history(DetailedPlant, WANDERING, pwm_hz))
        assert {moment["resolved"] for moment in seen} == {0.0, 1.0}
        still = [moment["stops"] > 0.0 and not moment["turning"] for moment in seen]
        assert any(still)
        assert any(moment["turning"] for moment in seen[still.index(True) :])


@pytest.mark.parametrize("seed", range(5))
def test_a_rotor_at_rest_sets_out_at_the_same_time(seed: int) -> None:
    """Stuck harder the longer it has rested, it starts in the very cell in which it does one by one."""
    sticky = replace(STEADY, breakaway_friction_spread_percent=30.0, load=Load(stiction_percent_per_decade=10.0))
    starts = []
    for kind in (DetailedPlant, CloserPlant):
        plant = kind(sticky, 2.0, np.random.default_rng(seed))
        plant.set_supply(12.0, 3.0, True)
        plant.set_drive(25e3, 10.5, True)
        while plant.position == 0.0 and plant.now < 60.0:
            plant.advance(plant.now + 0.1)
        starts.append((plant.now, plant.position))
    assert starts[0] == pytest.approx(starts[1], rel=1e-9)
    assert 0.0 < starts[0][0] < 60.0


def test_partings_do_not_matter() -> None:
    """Advanced in one go or in steps of 7 ms, 20 ms or 0.33 s, the plant is bit-equal afterwards."""
    found = []
    for part in (40.0, 0.007, 0.02, 0.33):
        plant = DetailedPlant(WANDERING, 2.0, np.random.default_rng(3))
        plant.set_supply(12.0, 3.0, True)
        for duty, until in ((60.0, 3.0), (12.0, 9.0), (10.0, 15.0), (14.0, 20.0)):
            plant.set_drive(1000.0, duty, True)
            while plant.now + part < until:
                plant.advance(plant.now + part)
            plant.advance(until)
        found.append((plant.angle, plant.omega, plant.edges, plant.last_edge_at, plant.motor_amp_seconds, plant.stops))
    assert found == [found[0]] * 4


_NIGHT = """
import json, sys
from tests.simbench.test_cells import WANDERING, WINDY, history
from sweeprig.simbench.compiled import available
from sweeprig.simbench.detailed import DetailedPlant
runs = [list(history(DetailedPlant, truth, hz)) for truth in (WANDERING, WINDY) for hz in (50.0, 300.0, 1000.0, 25e3)]
print(json.dumps({"compiled": available(), "runs": runs}))
"""


@pytest.mark.skipif(not available(), reason="the extra `fast` is not installed, or switched off")
@pytest.mark.slow
def test_compiled_and_plain_are_the_same() -> None:
    """Eight sweeps compiled, and in another process plain, agree to 1e-9 in all speeds, edges, sums and stops."""
    done = []
    for plain in ("1", "0"):
        env = os.environ | {SWITCHED_OFF_BY: plain}
        run = subprocess.run([sys.executable, "-c", _NIGHT], env=env, check=True, capture_output=True, text=True)
        done.append(json.loads(run.stdout))
    assert [one["compiled"] for one in done] == [False, True]
    for plain_run, fast_run in zip(done[0]["runs"], done[1]["runs"], strict=True):
        for plain_here, fast_here in zip(plain_run, fast_run, strict=True):
            assert fast_here == pytest.approx(plain_here, rel=1e-9, abs=1e-9)


def speed(truth: DetailedTruth, pwm_hz: float, duty: float, seconds: float = 6.0) -> float:
    """rpm over `seconds`, after a run at 60 % and 3 s to settle."""
    plant = DetailedPlant(truth, 2.0, np.random.default_rng(1))
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(pwm_hz, 60.0, True)
    plant.advance(1.5)
    plant.set_drive(pwm_hz, duty, True)
    plant.advance(4.5)
    angle = plant.angle
    plant.advance(4.5 + seconds)
    return (plant.angle - angle) / seconds * RPM


def least_duty(pwm_hz: float, begin: float) -> float:
    """The least duty (to 0.02 %) at which it starts from rest (begin 0), or goes on when lowered from `begin`."""
    low, high = 3.0, 20.0
    while high - low > 0.02:
        duty = 0.5 * (low + high)
        plant = DetailedPlant(STEADY, 2.0, np.random.default_rng(1))
        plant.set_supply(12.0, 3.0, True)
        if begin > 0.0:
            plant.set_drive(pwm_hz, begin, True)
            plant.advance(1.0)
        plant.set_drive(pwm_hz, duty, True)
        plant.advance(plant.now + 3.0)
        angle = plant.angle
        plant.advance(plant.now + 2.0)
        low, high = (low, duty) if plant.angle - angle > PITCH else (duty, high)
    return high


@pytest.mark.slow
def test_what_leaving_the_ripple_out_changes(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where stepping drops the ripple, the duties of starting and of stalling move by less than 1 % of themselves.

    Independent method: the same with the ripple stepped through. The stated bound is `loaded.SHORT`'s.
    """
    plant, bound_hz = DetailedPlant(STEADY, 2.0, np.random.default_rng(1)), 500.0
    plant.set_supply(12.0, 3.0, True)
    while bound_hz == 500.0 or plant._chops:
        bound_hz *= 1.05
        plant.set_drive(bound_hz, 14.0, True)
    assert 1000.0 < bound_hz < 2500.0
    found = {}
    for short in (math.inf, 0.0):
        monkeypatch.setattr(loaded, "SHORT", short)
        found[short] = least_duty(bound_hz, 0.0), least_duty(bound_hz, 16.0), speed(STEADY, bound_hz, 11.5)
    assert found[math.inf] != found[0.0]
    assert found[math.inf] == pytest.approx(found[0.0], rel=0.01)


def test_what_leaving_the_cogging_out_changes(monkeypatch: pytest.MonkeyPatch) -> None:
    """At slow PWM the slowest rotor whose cogging is left out has the speed that it has with it, within 0.1 %."""
    plant, duty = DetailedPlant(STEADY, 2.0, np.random.default_rng(1)), 5.0
    plant.set_supply(12.0, 3.0, True)
    while not plant._blurred:
        duty += 0.5
        plant.set_drive(50.0, duty, True)
        plant.advance(plant.now + 2.0)
    left_out = speed(STEADY, 50.0, duty)
    monkeypatch.setattr(closer, "BLURRED_BELOW", -1.0)
    monkeypatch.setattr(closer, "SHARP_FROM", -1.0)
    taken_in = speed(STEADY, 50.0, duty)
    assert left_out != taken_in
    assert left_out == pytest.approx(taken_in, rel=1e-3)


def test_leaving_the_cogging_out_and_back_keeps_the_energy(monkeypatch: pytest.MonkeyPatch) -> None:
    """Either way kinetic plus detent energy and the angle stay what they were, to 1e-12."""
    plant, detents = DetailedPlant(STEADY, 2.0, np.random.default_rng(1)), Cogging(2e-3, 12)
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(50.0, 25.0, True)
    monkeypatch.setattr(closer, "BLURRED_BELOW", -1.0)
    monkeypatch.setattr(closer, "SHARP_FROM", -1.0)
    plant.advance(1.013)
    energy = 0.5 * 7.6e-6 * plant.omega**2 + detents.energy(plant.position)
    position = plant.position
    monkeypatch.setattr(closer, "BLURRED_BELOW", 10.0)
    monkeypatch.setattr(closer, "UNLOCKED", 0.0)
    plant.set_drive(50.0, 25.1, True)
    assert 0.5 * 7.6e-6 * plant.omega**2 == pytest.approx(energy, rel=1e-12)
    assert abs(detents.energy(position)) > 1e-6 * energy
    plant.set_drive(50.0, 25.0, True)
    assert 0.5 * 7.6e-6 * plant.omega**2 + detents.energy(plant.position) == pytest.approx(energy, rel=1e-12)
    assert plant.position == position


def test_a_standing_rotor_is_not_stepped(monkeypatch: pytest.MonkeyPatch) -> None:
    """With a drive too weak to move it, or none, a night passes without a single step."""
    steps = []
    monkeypatch.setattr(closer, "run", lambda *_: steps.append(1))
    plant = DetailedPlant(WANDERING, 2.0, np.random.default_rng(1))
    plant.set_supply(12.0, 3.0, True)
    plant.set_drive(25e3, 3.0, True)
    plant.advance(600.0)
    plant.set_drive(25e3, 3.0, False)
    plant.advance(28_800.0)
    assert not plant.turning
    assert (plant.angle, plant.stops, steps) == (0.0, 0, [])
    assert plant.motor_amp_seconds > 0.1
