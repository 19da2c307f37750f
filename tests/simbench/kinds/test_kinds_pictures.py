"""A picture of each kind's behaviour: speed against duty and frequency, starts, lock restarts, laws, lots.

Drawn into the test's folder for people to look at; what is asserted are the features that one looks for.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.figure import Figure

from sweeprig.simbench.kinds.lot import lot

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from sweeprig.simbench.kinds.stepped import Stepped
    from tests.simbench.kinds.conftest import Kinds

DUTIES = (100.0, 80.0, 60.0, 50.0, 40.0, 30.0, 25.0, 20.0, 15.0, 10.0, 7.0, 5.0, 3.0, 0.0)


def axes(title: str, x: str, y: str, count: int = 1) -> tuple[Figure, list[Axes]]:
    figure = Figure(figsize=(4.6 * count, 3.4), layout="constrained")
    made = figure.subplots(1, count, squeeze=False)[0]
    figure.suptitle(f"{title} (SIMULATED)")
    for one in made:
        one.set_xlabel(x)
        one.set_ylabel(y)
    return figure, list(made)


def save(figure: Figure, folder: Path, name: str) -> None:
    figure.savefig(folder / f"{name}.png", dpi=90)
    assert (folder / f"{name}.png").stat().st_size > 5_000


def branch(kinds: type[Kinds], machine: Stepped, pwm_hz: float, settle_s: float = 3.0) -> list[float]:
    """Speeds downwards from full duty, rpm."""
    speeds = []
    for duty in DUTIES:
        machine.set_drive(pwm_hz, duty, True)
        machine.advance(machine.now + settle_s)
        speeds.append(kinds.mean_rpm(machine, 1.0))
    return speeds


def trace(machine: Stepped, seconds: float, step: float = 0.05) -> tuple[list[float], list[float], list[float]]:
    """(time, rpm, supply current) every `step` seconds."""
    times, speeds, amps = [], [], []
    began = machine.now
    while machine.now < began + seconds:
        charge = machine.supply_amp_seconds
        machine.advance(machine.now + step)
        times.append(machine.now - began)
        speeds.append(machine.omega * 30.0 / np.pi)
        amps.append((machine.supply_amp_seconds - charge) / step)
    return times, speeds, amps


def test_picture_of_electronics_on_a_chopped_supply(kinds: type[Kinds], tmp_path: Path) -> None:
    """Without hold-up the curve begins at wake-up time × frequency; with it, speed hardly depends on duty when fast."""
    figure, (left, right) = axes("electronics on a chopped supply", "duty (%)", "speed (rpm)", 2)
    begins = []
    for pwm_hz in (30.0, 300.0, 1000.0):
        speeds = branch(kinds, kinds.electronic(), pwm_hz)
        begins.append(min(duty for duty, speed in zip(DUTIES, speeds, strict=True) if speed > 50.0))
        left.plot(DUTIES, speeds, ".-", label=f"{pwm_hz:g} Hz")
        held = branch(kinds, kinds.electronic(replace(kinds.held_up_truth, holdup_farad=100e-6)), pwm_hz * 10.0)
        right.plot(DUTIES, held, ".-", label=f"{pwm_hz * 10.0:g} Hz, 100 uF")
    left.legend()
    right.legend()
    save(figure, tmp_path, "electronic-curves")
    assert begins == sorted(begins)
    assert begins[-1] >= 40.0


def test_picture_of_starts_and_lock_restarts(kinds: type[Kinds], tmp_path: Path) -> None:
    """A soft start, and a held rotor that is pushed every 3.5 s until it is let go after 12 s."""
    figure, (left, right) = axes("starts of a fan with electronics", "time (s)", "speed (rpm), current (mA)", 2)
    for soft in (0.0, 2.0):
        fan = kinds.electronic(replace(kinds.electronic_truth, soft_start_s=soft))
        fan.set_drive(1000.0, 100.0, True)
        times, speeds, _ = trace(fan, 5.0)
        left.plot(times, speeds, label=f"soft start {soft:g} s")
    held = kinds.electronic(replace(kinds.electronic_truth, breakaway_friction_nm=1.0))
    held.set_drive(1000.0, 100.0, True)
    times, speeds, amps = trace(held, 12.0)
    held._breakaway = kinds.electronic()._breakaway
    more = trace(held, 6.0)
    right.plot(times + [12.0 + t for t in more[0]], speeds + more[1], label="speed")
    right.plot(times + [12.0 + t for t in more[0]], [1000.0 * a for a in amps + more[2]], label="current")
    left.legend()
    right.legend()
    save(figure, tmp_path, "electronic-starts")
    assert max(speeds) == 0.0
    assert more[1][-1] > 2000.0
    assert 0.1 < np.mean([a > 0.4 for a in amps]) < 0.2


def test_picture_of_four_wire_types(kinds: type[Kinds], tmp_path: Path) -> None:
    """Types A, B and C part below the minimum duty; a start shows its pulse and its spike."""
    figure, (left, right) = axes("fan with a control input", "duty (%)", "speed (rpm)", 2)
    lowest = {}
    for kind in ("A", "B", "C"):
        speeds = branch(kinds, kinds.four_wire(replace(kinds.four_wire_truth, below_minimum=kind)), 25e3)
        left.plot(DUTIES, speeds, ".-", label=f"type {kind}")
        lowest[kind] = (speeds[DUTIES.index(5.0)], speeds[-1])
    fan = kinds.four_wire(replace(kinds.four_wire_truth, below_minimum="B"))
    fan.set_drive(25e3, 20.0, True)
    times, speeds, amps = trace(fan, 5.0)
    right.plot(times, speeds, label="speed, 20 %")
    right.plot(times, [1000.0 * a for a in amps], label="current (mA)")
    right.set_xlabel("time (s)")
    left.legend()
    right.legend()
    save(figure, tmp_path, "four-wire")
    assert [round(speed / 50.0) for speed in lowest["A"]] == [18, 18]  # 22 % of 4200 rpm
    assert [round(speed / 50.0) for speed in lowest["B"]] == [18, 0]
    assert lowest["C"] == (0.0, 0.0)


def test_picture_of_prescribed_laws(kinds: type[Kinds], tmp_path: Path) -> None:
    """Survival of a hold by both laws, and by counts of 100 holds a duty, which lie on them."""
    figure, (left,) = axes("prescribed laws", "duty (%)", "holds of 20 s survived (%)")
    grid = np.linspace(10.5, 14.0, 8)
    for law in ("exponential", "gaussian"):
        truth = replace(kinds.prescribed_truth, law=law)
        motor, shares = kinds.prescribed(truth, seed=5), []
        for duty in grid:
            survived = 0
            for _ in range(100):
                motor.set_drive(1000.0, 100.0, True)
                motor.advance(motor.now + 0.1)
                motor.set_drive(1000.0, float(duty), True)
                motor.advance(motor.now + 20.0)
                survived += motor.turning
            shares.append(survived)
        expected = [100.0 * truth.survival(float(duty), 20.0) for duty in grid]
        left.plot(grid, expected, label=law)
        left.plot(grid, shares, "o")
        assert np.abs(np.array(shares) - expected).max() <= 20.0  # four standard errors of 100 at one half
    left.legend()
    save(figure, tmp_path, "prescribed")


def test_picture_of_a_gear_motors_starts(kinds: type[Kinds], tmp_path: Path) -> None:
    """A start through the play: the motor runs up alone, falls at the blow, and goes on with its load."""
    figure, (left,) = axes("gear motor, start", "time (s)", "motor speed (rpm)")
    for backlash in (0.0, 0.3):
        motor = kinds.geared(backlash)
        for duty in (80.0, 0.0):
            motor.set_drive(1000.0, duty, True)
            motor.advance(motor.now + 3.0)
        motor.set_drive(1000.0, 80.0, True)
        times, speeds, _ = trace(motor, 0.6, 0.004)
        left.plot(times, speeds, label=f"play {backlash:g} rad")
        drops = np.diff(speeds).min()
        assert bool(drops < -200.0) is (backlash > 0.0)
    left.legend()
    save(figure, tmp_path, "geared")


def test_picture_of_a_gear_motors_reversals(kinds: type[Kinds], tmp_path: Path) -> None:
    """Gate off and on again while it runs: motor and load part, meet at the other flank, and meet again."""
    figure, (left, right) = axes("gear motor, reversals of the torque", "time (s)", "speed (rpm at the motor)", 2)
    motor = kinds.geared(0.2, 80.0)
    motor.set_drive(1000.0, 100.0, True)
    motor.advance(3.0)
    times, own, load, gaps = [], [], [], []
    for step in range(600):
        motor.set_drive(1000.0, 100.0, not 50 <= step < 250)
        motor.advance(motor.now + 0.001)
        times.append(step * 0.001)
        own.append(motor.omega * 30.0 / np.pi)
        load.append(motor.load_omega * 30.0 / np.pi)
        gaps.append(motor.open_rad)
    left.plot(times, own, label="motor")
    left.plot(times, load, label="load")
    left.legend()
    right.plot(times, gaps)
    right.set_ylabel("play open (rad, as of the last cell)")
    save(figure, tmp_path, "geared-reversals")
    assert max(gaps) == 6.0
    assert gaps[-1] == 0.0
    assert max(a - b for a, b in zip(load, own, strict=True)) > 500.0


def test_picture_of_a_lot(kinds: type[Kinds], tmp_path: Path) -> None:
    """Curves of eight units of a lot scatter around the one they are drawn from."""
    figure, (left,) = axes("a lot of fans with electronics", "duty (%)", "speed (rpm)")
    units = lot(kinds.electronic_truth, {"torque_constant_nm_per_a": 3.0, "quadratic_load_nm_s2": 8.0}, 8, seed=1)
    tops = []
    for unit in units:
        speeds = branch(kinds, kinds.electronic(unit), 100.0, 1.5)
        left.plot(DUTIES, speeds, color="0.6")
        tops.append(speeds[0])
    left.plot(DUTIES, branch(kinds, kinds.electronic(), 100.0, 1.5), "k")
    save(figure, tmp_path, "lot")
    assert 0.005 < np.std(tops) / np.mean(tops) < 0.05
