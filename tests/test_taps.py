"""The map from taps to duty: what few readings make of it, and wipers that break the order."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from sweeprig.holds import Approach, AtTap, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.plan import TapPlan
from sweeprig.quantities import Reading
from sweeprig.taps import Seen, TapsSeen, by_parts, out_of_order, tap_map

PLAN = TapPlan((2.0, 98.0), 255, (0.0, 100.0), 1000.0, (255, 128), 5.0)
STEP = 96.0 / 255.0


def true_duty(tap: int | np.ndarray) -> np.ndarray:
    """A potentiometer 20 % off and bent by a step and a half: (1 + x)/(2 + x) of its parts, own formula."""
    x = np.asarray(tap) / 255.0
    end = 100.0 * 1.0 / (2.0 + 57.6)
    return end + (100.0 - 2.0 * end) * x + 1.5 * STEP * np.sin(2.0 * np.pi * x)


def seen(taps: list[int], off: dict[int, float] | None = None) -> dict[int, Seen]:
    return {tap: Seen(0.0, 2, 2.0 * (float(true_duty(tap)) + (off or {}).get(tap, 0.0)), 0.06) for tap in taps}


def test_nothing_measured() -> None:
    """Before anything was measured the parts are believed, by a few percent, and nothing is at fault."""
    found = tap_map(PLAN, {})
    assert found.duty == pytest.approx(by_parts(PLAN))
    assert (found.measured, found.faulty) == ((), ())
    assert float(found.u.min()) == pytest.approx(float(np.hypot(3.0, STEP)))
    assert found.hz[0] == 1000.0
    assert found.u_hz[0] == pytest.approx(150.0)


def test_map_covers_the_truth() -> None:
    """With five taps measured every tap lies within three of the stated u, at the measured ones within the readings'
    own, and the map rises throughout. (Independent: the true duty is a formula that the map does not know.)"""
    found = tap_map(PLAN, seen([255, 200, 150, 100, 60]))
    off = np.abs(found.duty - true_duty(np.arange(256))) / found.u
    assert float(off.max()) < 3.0
    assert found.u[100] == pytest.approx(np.hypot(0.03, 0.05 / np.sqrt(3.0)))
    assert np.all(np.diff(found.duty) > 0.0)


def test_more_readings_pin_the_map() -> None:
    """Readings at neighbouring taps bring the worst error between them below a tenth of a step."""
    found = tap_map(PLAN, seen(list(range(10, 250, 8))))
    inside = slice(10, 243)
    assert float(np.abs(found.duty - true_duty(np.arange(256)))[inside].max()) < 0.1 * STEP


def test_nearest() -> None:
    """The nearest tap by what it gives; of equals the lower; never one beyond the allowed duties, faulty or avoided."""
    found = tap_map(PLAN, {})
    assert found.nearest(50.0, 0.0, 100.0) == 127  # 127 and 128 lie equally far
    assert found.nearest(99.0, 0.0, 60.0) == int((60.0 - 2.0) / STEP)
    assert found.nearest(50.0, 0.0, 100.0, avoid=(127,)) == 128
    assert found.nearest(50.0, 99.0, 100.0) == 127  # no tap lies within: the nearest of all
    bad = tap_map(PLAN, seen([90, 100, 110, 120], {100: 9.0}))
    assert bad.faulty == (100,)
    assert bad.nearest(float(true_duty(100)), 0.0, 100.0) in (99, 101)


@pytest.mark.parametrize("off", [9.0, -9.0, 60.0])
def test_one_bad_tap(off: float) -> None:
    """A tap that gives what no neighbour allows is found, alone, whichever side it errs to; the map passes it by."""
    taps = list(range(40, 200, 5))
    found = tap_map(PLAN, seen(taps, {100: off}))
    assert found.faulty == (100,)
    assert found.duty[100] == pytest.approx(float(true_duty(100)), abs=STEP)


def test_broken_ladder() -> None:
    """From tap 150 on the wiper sits forty taps lower: the fewer ones, which contradict the others, are found."""
    taps = list(range(20, 240, 10))
    wrong = {tap: float(true_duty(tap - 40) - true_duty(tap)) for tap in taps if tap >= 150}
    found = tap_map(PLAN, seen(taps, wrong))
    assert found.faulty
    assert set(found.faulty) <= {110, 120, 130, 140, *wrong}
    left = [tap for tap in taps if tap not in found.faulty]
    kept = np.array([float(true_duty(tap)) + wrong.get(tap, 0.0) for tap in left])
    assert np.all(np.diff(kept) > 0.0)


def test_stuck_wiper() -> None:
    """A wiper that stays where it is while taps are stepped is found; a step of half its size is none of that."""
    parts = by_parts(PLAN)
    duty = {tap: float(parts[tap]) for tap in range(100, 120, 4)}
    assert out_of_order(parts, duty) == ()
    assert out_of_order(parts, duty | {104: duty[100] + 2.0 * STEP}) == ()
    assert out_of_order(parts, duty | dict.fromkeys((104, 108), duty[100])) != ()


def test_frequency_by_tap() -> None:
    """The frequency is what was measured at the tap, in between between, and far off known less well."""
    one, other = Seen(0.0, counted_hz=2, hz=2080.0), Seen(0.0, counted_hz=1, hz=1000.0)
    found = tap_map(PLAN, {0: one, 128: other})
    assert found.hz[[0, 64, 128, 255]] == pytest.approx([1040.0, 1020.0, 1000.0, 1000.0])
    assert found.u_hz[128] == pytest.approx(5.0)
    assert found.u_hz[255] == pytest.approx(1000.0 * (0.005 + 0.001 * 127.0 * STEP))


def outcome(tap: int | None, duty: float | None, asked: float = 30.0) -> Outcome:
    at = () if tap is None else (AtTap(asked, tap, asked + 0.1, 0.2, 1000.0, 5.0),)
    hold = Hold(
        1, Purpose.STALL, Approach.FALLING, Condition(1000.0, 12.0), asked, 0.0, 5.0, EndsWhen.STOPPED, (), "", (), tap,
        at,
    )  # fmt: skip
    means = {} if duty is None else {"s.duty": Reading(duty, 0.03, "%", 0.0, "s.duty")}
    return Outcome(1, hold, 1, Status.DONE, Verdict.TURNING, 0.0, 1.0, 0.0, 1.0, means=means)


def test_holds_of_one_tap_are_counted_together() -> None:
    """All holds of a tap have one duty to be summed under, the first measured there, whatever was asked; without a tap
    it is what was asked, and where nothing was measured yet what is expected."""
    known = TapsSeen("s.duty")
    assert known.add(outcome(7, 30.05)) == 30.05
    assert known.add(outcome(7, 30.07, asked=29.9)) == 30.05
    assert known.add(outcome(8, None)) == pytest.approx(30.1)
    assert known.add(outcome(None, 30.0)) == 30.0
    assert known.taps[7].count == 2
    assert known.taps[7].duty == pytest.approx(60.12)


def test_spoilt_holds_tell_of_surprises_only() -> None:
    """Of a discarded hold the duty counts where it is another one than was expected, and for nothing else."""
    known = TapsSeen("s.duty")
    for duty in (30.5, 20.0):
        known.add(replace(outcome(7, duty), status=Status.DISCARDED))
    assert (known.taps[7].count, known.taps[7].duty) == (1, 20.0)
