"""Findings from the speed curve, against curves whose answer is known in closed form."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from sweeprig.characterise import usable
from sweeprig.characterise.curve import fit_curve
from sweeprig.characterise.duties_found import STALL, START, Threshold, threshold
from sweeprig.characterise.evidence import Chosen, Point
from sweeprig.laws import Trial

ACCURACY = 10.0
LADDER = (
    *(Trial(i, duty, 1.0) for i, duty in enumerate((12.0, 11.5, 11.0, 10.5, 10.0) * 4)),
    *(Trial(30 + i, duty, 0.4, 0.0125) for i, duty in enumerate((9.5, 10.0, 9.5, 9.0, 9.5))),
)


def speed_of(duty: float) -> float:
    """Rises by 40 rpm a percent up to 70 %, then by 1 rpm."""
    return 40.0 * min(duty, 70.0) + max(duty - 70.0, 0.0)


def points(duties: list[float], *, offset: float = 0.0, spread: float = 1.0) -> list[Point]:
    return [
        Point(index, duty, speed_of(duty) + offset + sign * spread, ACCURACY, 20.0)
        for index, duty in enumerate(duties)
        for sign in (-1.0, 1.0)
    ]


DUTIES = [9.0, 9.5, 10.0, 10.5, 11.0, 12.0, 20.0, 30.0, 40.0, 50.0, 60.0, 70.0, 80.0, 90.0, 100.0]


def branch(duties: list[float] | None = None, sure: float | None = 10.5) -> usable.Branch:
    curve = fit_curve(points(DUTIES if duties is None else duties), monotone=True)
    assert curve is not None
    return usable.Branch(curve, sure)


def stall() -> Threshold:
    return threshold(STALL, Chosen(LADDER), 0.2)


def start() -> Threshold:
    trials = (
        *(Trial(i, 17.0 + i % 4, 1.0) for i in range(12)),
        *(Trial(20 + i, 15.0 + i % 2, 0.0, 1.0) for i in range(8)),
    )
    return threshold(START, Chosen(trials), 0.2)


def test_stall_speed_carries_the_stall_duty() -> None:
    """On a straight curve its value follows the stall duty, and u adds slope × u(duty), accuracy and scatter."""
    sample = stall().sample(0.5)
    assert sample is not None
    found = usable.at_stall(branch(), stall(), "speed")
    u_duty = float(np.std(sample))
    # exact: a straight line; scatter of two holds √2 / √2 = 1 rpm
    assert found.value == pytest.approx(40.0 * float(np.median(sample)), abs=1.0)
    assert found.u == pytest.approx(math.sqrt((40.0 * u_duty) ** 2 + ACCURACY**2 + 1.0), rel=0.03)
    assert "from_survivors" in found.flags
    assert "extrapolated" not in found.flags


def test_stall_speed_below_all_readings_is_marked() -> None:
    """Where no reading reaches down to the stall duty the speed is extrapolated, says so, and is less sure."""
    short = usable.at_stall(branch([20.0, 30.0, 40.0, 100.0], sure=20.0), stall(), "speed")
    full = usable.at_stall(branch(), stall(), "speed")
    assert "extrapolated" in short.flags
    assert short.u is not None
    assert full.u is not None
    assert short.u > 5.0 * full.u


def test_stall_speed_of_a_motor_that_never_stopped_is_a_bound() -> None:
    """When no stop was seen, the speed at the stall duty is one-sided as the duty is."""
    never = threshold(STALL, Chosen(tuple(Trial(i, 12.0, 1.0) for i in range(6))), 0.0)
    found = usable.at_stall(branch(), never, "speed")
    assert (found.bound, found.low) == ("upper", None)
    assert found.value == found.high
    assert "never_stopped" in found.flags


def test_lowest_reliable_speed_is_the_speed_at_the_bound() -> None:
    """It is the fitted speed at the upper bound of sustain_99, with no lower end; accuracy of duty left out."""
    found = usable.lowest_reliable_speed(branch(), stall())
    assert found.value == pytest.approx(40.0 * stall().bound(0.99, widen=False), abs=1.0)
    assert (found.bound, found.low, found.high) == ("upper", None, found.value)


def test_top_speed_has_the_accuracy() -> None:
    """The top speed is that of full duty, and its u is never below the tachometer's."""
    found = usable.top_speed(branch())
    assert found.value == pytest.approx(2830.0)
    assert found.u == pytest.approx(math.hypot(ACCURACY, 1.0))  # exact: accuracy and 1 rpm of scatter
    assert found.high == pytest.approx(2830.0 + 1.959964 * math.hypot(ACCURACY, 1.0))


def test_high_duty_is_where_more_duty_gives_little() -> None:
    """On a speed that saturates as 1 − exp(−D / 30) the duty for 98 % of the top is found, not beyond the curve."""
    made = [
        Point(0, duty, 3000.0 * (1.0 - math.exp(-duty / 30.0)) + sign, ACCURACY, 20.0)
        for duty in np.linspace(10.0, 100.0, 13).tolist()
        for sign in (-1.0, 1.0)
    ]
    curve = fit_curve(made, monotone=True)
    assert curve is not None
    found = usable.high_duty(usable.Branch(curve, 10.0), 2.0, 0.0)
    truth = -30.0 * math.log(1.0 - 0.98 * (1.0 - math.exp(-100.0 / 30.0)))  # exact: closed form
    assert found.value == pytest.approx(truth, abs=0.3)
    assert found.low is not None
    assert found.high is not None
    assert found.low < truth < found.high <= 100.0


def test_high_duty_is_as_sure_as_the_speeds_over_the_slope() -> None:
    """On a straight line u is the scatter of both speeds over the slope, without the accuracy they share."""
    line = [Point(0, duty, 40.0 * duty + sign, ACCURACY, 1.0) for duty in (20.0, 60.0, 98.0, 100.0) for sign in (-1, 1)]
    curve = fit_curve(line, monotone=True)
    assert curve is not None
    found = usable.high_duty(usable.Branch(curve, 20.0), 2.0, 0.03)
    assert found.value == pytest.approx(98.0)
    assert found.u == pytest.approx(math.hypot(math.hypot(1.0, 0.98) / 40.0, 0.03), rel=1e-3)  # exact


def test_high_duty_holds_a_bend_between_levels() -> None:
    """A speed that jumps in the last percents, between two levels, has its true place within the interval."""
    made = [Point(0, duty, 2000.0 + 6.0 * duty + 200.0 * (duty > 99.0), 1.0, 1.0) for duty in (60.0, 70.0, 83.0, 100.0)]
    curve = fit_curve(made * 2, monotone=True)
    assert curve is not None
    found = usable.high_duty(usable.Branch(curve, 60.0), 2.0, 0.0)
    assert found.low is not None
    assert found.high is not None
    assert found.low < 99.0 < found.high  # exact: 2 % of 2800 is 56, less than the jump, so the place is the jump's


def test_speed_is_never_below_zero() -> None:
    """A stall speed read off far below the readings may be nothing, and is not negative."""
    found = usable.at_stall(branch([14.0, 20.0, 30.0, 100.0], sure=14.0), stall(), "speed")
    steep = [Point(0, duty, 500.0 * (duty - 11.0), 1.0, 1.0) for duty in (11.5, 12.0, 30.0) for _ in (0, 1)]
    curve = fit_curve(steep, monotone=True)
    assert curve is not None
    assert usable.at_stall(usable.Branch(curve, 11.5), stall(), "speed").low == 0.0
    assert found.low is not None
    assert found.low >= 0.0


def test_high_duty_of_a_flat_top() -> None:
    """Where the speed no longer rises the place is known no better than the width of the curve, and stays within it."""
    flat = fit_curve([Point(0, duty, 1000.0, 1.0, 1.0) for duty in (20.0, 60.0, 100.0)], monotone=True)
    assert flat is not None
    found = usable.high_duty(usable.Branch(flat, 20.0), 2.0, 0.0)
    assert found.value == 20.0
    assert found.u == pytest.approx(80.0 / math.sqrt(12.0))  # exact: rectangle
    assert found.high == pytest.approx(20.0 + 1.959964 * 80.0 / math.sqrt(12.0))


def test_usable_range_and_turndown() -> None:
    """The range runs from the bounds of sustain_99 and start_99 upwards; its turndown is a bound too."""
    found = usable.usable_range(branch(), stall(), start(), 2.0, 0.2)
    assert found.low_duty_percent == stall().upper(0.99)
    assert found.low_duty_from_rest_percent == start().upper(0.99)
    assert found.high_speed_rpm.value is not None
    assert found.low_speed_rpm.value is not None
    assert found.turndown.value == pytest.approx(found.high_speed_rpm.value / found.low_speed_rpm.value)
    assert found.turndown.bound == "lower"


def test_linearity_of_a_bent_line() -> None:
    """For a curve through two straight pieces the distance from the best line is that of plain least squares."""
    within = usable.usable_range(branch(), stall(), start(), 2.0, 0.0)
    low, high = within.low_duty_percent.value, within.high_duty_percent.value
    assert low is not None
    assert high is not None
    duty, speed = branch().curve.dense(low, high)
    line = stats.linregress(duty, speed)
    away = float(np.max(np.abs(speed - line.intercept - line.slope * duty)))
    found = usable.linearity(branch(), within)
    assert found.value == pytest.approx(100.0 * away / float(speed[-1] - speed[0]), rel=1e-6)  # independent method


def test_resolution_is_step_times_slope() -> None:
    """One step of 0.1 % at 40 rpm a percent is 4 rpm; without a stated step there is none."""
    within = usable.usable_range(branch(), stall(), start(), 2.0, 0.0)
    assert usable.resolution(branch(), within, 0.1).value == pytest.approx(4.0, rel=0.02)
    assert "duty step" in usable.resolution(branch(), within, None).reason


def test_hysteresis_between_branches() -> None:
    """A rising branch 30 rpm above the falling one is a hysteresis of 30 rpm; the common accuracy is not in its u."""
    rising = points([20.0, 50.0, 100.0], offset=30.0)
    found = usable.curve_hysteresis(branch(), rising)
    assert found.value == pytest.approx(30.0)
    assert found.u == pytest.approx(math.sqrt(2.0))  # exact: 1 rpm of scatter on either side
    assert "rising above falling" in found.method
    assert not usable.curve_hysteresis(branch(), []).found


def test_repeatability_is_the_worst_segment_bounded() -> None:
    """The bound is the chi-square one of the segment with the largest scatter, degrees of freedom pooled in it."""
    rows = {10.0: (0.0, 2.0), 12.0: (0.0, 2.0), 15.0: (0.0, 2.0), 50.0: (0.0, 0.2, 0.1), 90.0: (0.0, 0.4, 0.2)}
    made = [Point(0, duty, value, 1.0, 1.0) for duty, row in rows.items() for value in row]
    found = usable.repeatability(made)
    # independent method: scipy's chi-square; s = √2 with 3 degrees of freedom
    assert found.value == pytest.approx(math.sqrt(2.0 * 3.0 / stats.chi2.ppf(0.05, 3)))
    assert found.flags == ()
    assert not usable.repeatability(made[:1]).found


def test_what_is_missing_has_its_reason() -> None:
    """Without a speed curve every speed finding keeps its name and says why it is not there."""
    within = usable.usable_range(None, stall(), start(), 2.0, 0.0)
    for found in (
        usable.at_stall(None, stall(), "speed"),
        usable.top_speed(None),
        usable.linearity(None, within),
        usable.resolution(None, within, 0.1),
        within.low_speed_rpm,
        within.high_duty_percent,
        within.turndown,
    ):
        assert not found.found
        assert found.reason
    assert within.low_duty_percent.found
