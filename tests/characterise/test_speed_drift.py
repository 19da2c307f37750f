"""The drift of the reference speed: found, taken out of speeds, offered to thresholds. Nights made up by formula."""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from sweeprig.characterise import characterise
from sweeprig.characterise.curve import fit_curve
from sweeprig.characterise.duties_found import STALL
from sweeprig.characterise.evidence import Chosen, Point, duties, stall_trials, turning_before
from sweeprig.characterise.findings import ConditionFindings
from sweeprig.characterise.speed_course import LEAST, Course, course
from sweeprig.characterise.speed_drift import Drift, Speeds, corrected, drift_of, expecting, speeds, with_share
from sweeprig.characterise.usable import Branch
from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.laws import Trial
from sweeprig.plan import Plan, ReferencePlan, RunIn
from sweeprig.quantities import Reading
from sweeprig.steady import STEADY_SPEED, Steady

ABOUT = {"job_hash": "ab12", "simulated": True, "motor": {"name": "fan"}, "rig": "bench", "software": "0.1"}
HOUR = 3600.0
NIGHT_S = 8.0 * HOUR
RPM = 2000.0
MakeOutcome = Callable[..., Outcome]
Shape = Callable[[float], float]


def straight(part: float) -> float:
    return 0.03 * part


def settling(part: float) -> float:
    return 0.03 * (1.0 - math.exp(-part / 0.3))


def still(part: float) -> float:
    return 0.0 * part


def a_course(shape: Shape, count: int, scatter: float, rng: random.Random) -> tuple[Course, list[float]]:
    """The course through `count` references of a night whose speed changes by `shape` (logarithm, over parts)."""
    at = [NIGHT_S * (k + 0.2 * rng.random()) / count for k in range(count)]
    logs = [math.log(RPM) + shape(t / NIGHT_S) + rng.gauss(0.0, scatter) for t in at]
    made = course(at, logs, [scatter / 3.0] * count)
    assert made is not None
    return made, at


def spread_over(course_of: Course, at: Sequence[float], moment_s: float) -> Drift:
    """A drift without its holds: what `corrected` needs of them is the reference speed."""
    change, _ = course_of.change(np.array(at), moment_s)
    found = (Steady(n, t, RPM * math.exp(float(c)), 0.1) for n, (t, c) in enumerate(zip(at, change, strict=True)))
    return Drift(tuple(found), course_of, moment_s)


# ---- the course -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("shape", [straight, settling, still], ids=["straight", "bent", "none"])
def test_the_course_holds_the_truth(shape: Shape) -> None:
    """The 95 % interval of the change over the night holds the truth in 95 % of nights. 300 nights of 17 references,
    seed 21: fewer than 85 % by chance less than once in a million (binomial, 95 %); bent courses are allowed 85 %."""
    rng, held = random.Random(21), 0
    for _ in range(300):
        made, at = a_course(shape, 17, 1e-3, rng)
        change, u = made.change(np.array([at[-1]]), at[0])
        true = shape(at[-1] / NIGHT_S) - shape(at[0] / NIGHT_S)
        held += abs(float(change[0]) - true) <= 1.96 * float(u[0])
    assert held >= 0.85 * 300


def test_the_straight_line_is_least_squares() -> None:
    """Where it is straight, the change and its u are those of a least-squares line (independent method: numpy), u for a
    scatter that is estimated, with one degree of freedom more from the readings' own u: s²·ν/(ν − 2)."""
    rng, own = random.Random(3), 1e-3 / 3.0
    at = [NIGHT_S * (k + 0.2 * rng.random()) / 12 for k in range(12)]
    logs = [math.log(RPM) + straight(t / NIGHT_S) + max(min(rng.gauss(0.0, 1e-3), 1.5e-3), -1.5e-3) for t in at]
    made = course(at, logs, [own] * 12)
    assert made is not None
    line = replace(made, fits=made.fits[:1], chances=np.array([1.0]))
    change, u = line.change(np.array([at[-1]]), at[0])
    fitted = np.polyfit(at, logs, 1)
    rest = np.array(logs) - np.polyval(fitted, at)
    spread = math.sqrt(float(np.sum((np.array(at) - np.mean(at)) ** 2)))
    sd = math.sqrt((float(rest @ rest) + own**2) / (12 - 1 - 2))
    assert float(change[0]) == pytest.approx(float(fitted[0]) * line.span_s)
    assert float(u[0]) == pytest.approx(sd / spread * line.span_s)


def test_no_more_than_the_references_support() -> None:
    """A straight drift keeps at least the half chance that it had of being straight; a clear bend takes it away."""
    rng = random.Random(8)
    assert float(a_course(straight, 17, 1e-3, rng)[0].chances[0]) > 0.5
    assert float(a_course(settling, 17, 1e-4, rng)[0].chances[0]) < 0.01


def test_one_wild_reference_hardly_counts() -> None:
    """A reference 3 % off among seventeen that scatter by 0.1 % moves the change over the night by less than 0.3 %."""
    rng = random.Random(13)
    at = [NIGHT_S * k / 16 for k in range(17)]
    logs = [math.log(RPM) + straight(t / NIGHT_S) + rng.gauss(0.0, 1e-3) for t in at]
    logs[13] -= 0.03
    made = course(at, logs, [3e-4] * 17)
    assert made is not None
    assert float(made.change(np.array([at[-1]]), at[0])[0][0]) == pytest.approx(0.03, abs=0.003)


def test_few_references_are_no_course() -> None:
    """Fewer than four, or all at one time, show no drift."""
    assert course([0.0, 1.0, 2.0], [7.0] * 3, [1e-3] * 3) is None
    assert course([5.0] * LEAST, [7.0] * LEAST, [1e-3] * LEAST) is None


def test_certainty_goes_beyond_the_references_with_growing_doubt() -> None:
    """Before the first reference and after the last the change is carried on, and u grows with the distance."""
    made, at = a_course(straight, 12, 1e-3, random.Random(2))
    _, u = made.change(np.array([at[-1], at[-1] + HOUR, at[-1] + 3.0 * HOUR]), at[5])
    assert u[0] < u[1] < u[2]


# ---- speeds ---------------------------------------------------------------------------------------------------------


def points(law: Callable[[float, float], float], rng: random.Random, scatter: float = 5e-4) -> list[Point]:
    """Falling holds over the night: a curve at its beginning, and duties near a stall again and again. law(speed at
    half of the night, time) → speed read."""
    made = []
    for number, duty in enumerate((100.0, 80.0, 60.0, 40.0, 20.0)):
        made.append((duty, 60.0 * number))
    made += [(10.0 + 0.5 * (k % 3), NIGHT_S * (k + 0.5) / 60.0) for k in range(60)]
    return [
        Point(n, duty, law(40.0 * duty - 200.0, at) * (1.0 + rng.gauss(0.0, scatter)), 0.5, 20.0, at_s=at)
        for n, (duty, at) in enumerate(made)
    ]


def in_proportion(speed: float, at: float) -> float:
    return speed * math.exp(straight(at / NIGHT_S - 0.5))


def by_rpm(speed: float, at: float) -> float:
    return speed + RPM * math.expm1(straight(at / NIGHT_S - 0.5))


@pytest.mark.parametrize(("law", "share"), [(in_proportion, 0.0), (by_rpm, 1.0)], ids=["magnet", "friction"])
def test_speeds_come_to_the_moment(law: Callable[[float, float], float], share: float) -> None:
    """However the drift goes over to other speeds, it is learned from the repeated holds, and each speed is what it was
    in the middle of the night within 3.3 u of the correction (65 points, seed 4: by chance about once in 16 times were
    they independent; the seed was not chosen)."""
    rng = random.Random(4)
    made, at = a_course(straight, 17, 5e-4, rng)
    bare = points(law, rng)
    drift = with_share(spread_over(made, at, NIGHT_S / 2.0), bare)
    assert drift.share == pytest.approx(share, abs=3.0 * drift.u_share)
    assert drift.u_share < 0.2
    for point in corrected(drift, bare):
        true = 40.0 * point.duty_percent - 200.0
        assert abs(point.value - true) < 3.3 * point.u
    uncorrected = max(abs(p.value - (40.0 * p.duty_percent - 200.0)) for p in bare)
    left = max(abs(p.value - (40.0 * p.duty_percent - 200.0)) for p in corrected(drift, bare) if p.duty_percent <= 60.0)
    assert left < uncorrected / 4.0


def test_the_correction_carries_its_u() -> None:
    """u is never below the instrument's own, has the scatter of one reference in it, and grows away from the moment."""
    made, at = a_course(straight, 17, 1e-3, random.Random(6))
    drift = spread_over(made, at, NIGHT_S / 2.0)
    near, far = (Point(1, 30.0, 1000.0, 0.5, 20.0, at_s=t) for t in (NIGHT_S / 2.0, NIGHT_S))
    u_near, u_far = (one.u for one in corrected(drift, [near, far]))
    assert u_near >= math.hypot(0.5, 1000.0 * made.scatter) * (1.0 - 1e-9)
    assert u_far > u_near


# ---- a whole night --------------------------------------------------------------------------------------------------


def with_references(night: list[Outcome], outcome: MakeOutcome, drift: Shape, count: int = 9) -> list[Outcome]:
    """The night's holds with reference holds spread among them; all speeds drift in proportion."""
    span = night[-1].ended
    rng = random.Random(9)

    def drifted(one: Outcome) -> Outcome:
        factor = math.exp(drift(one.began / span))
        means = {
            name: replace(read, value=read.value * factor) if name == "board.speed" and read.value is not None else read
            for name, read in one.means.items()
        }
        return replace(one, means=means)

    made = [drifted(one) for one in night]
    for k in range(count):
        began = span * k / (count - 1)
        speed = 2400.0 * math.exp(drift((began + 15.0) / span)) * (1.0 + rng.gauss(0.0, 2e-4))
        hold = outcome(len(night) + k, Purpose.REFERENCE, 60.0, Verdict.TURNING)
        means = {STEADY_SPEED: Reading(speed, 0.3, "rpm", began + 20.0, STEADY_SPEED)}
        made.append(replace(hold, began=began, ended=began + 20.0, means=means))
    return made


REFERENCE = ReferencePlan(60.0, 600.0, 20.0)


def of(plan: Plan, outcomes: list[Outcome]) -> ConditionFindings:
    return characterise(plan, outcomes, ABOUT).conditions[0]


def test_the_drift_is_a_finding(plan: Plan, night: list[Outcome], outcome: MakeOutcome) -> None:
    """3 % over the night, found within its 95 % interval, resting on the reference holds."""
    found = of(replace(plan, reference=REFERENCE), with_references(night, outcome, straight))
    drift = found.finding("drift_percent_per_hour")
    true = 3.0 / (night[-1].ended / HOUR)
    assert drift.low is not None
    assert drift.high is not None
    assert drift.low < true < drift.high
    assert drift.value == pytest.approx(true, rel=0.05)
    assert drift.holds == tuple(range(len(night), len(night) + 9))


def test_without_references_all_is_as_before(plan: Plan, night: list[Outcome]) -> None:
    """No reference holds: the drift says so, and speeds carry the settling tolerance: 1 % / 2.576 of 4,000 rpm."""
    found = of(plan, night)
    assert found.finding("drift_percent_per_hour").reason == "the sweep asks for no reference holds"
    u = found.finding("top_speed_rpm").u
    assert u is not None
    assert u >= 4000.0 * 0.01 / 2.576


def test_references_stand_in_the_place_of_the_tolerance(plan: Plan, night: list[Outcome], outcome: MakeOutcome) -> None:
    """A motor that the references show to be steady has speeds known better than the tolerance, but no better than the
    instruments' own u."""
    found = of(replace(plan, reference=REFERENCE), with_references(night, outcome, still))
    u = found.finding("top_speed_rpm").u
    assert u is not None
    assert 0.5 < u < 4000.0 * 0.01 / 2.576 / 2.0


def test_a_few_references_change_nothing(plan: Plan, night: list[Outcome], outcome: MakeOutcome) -> None:
    """Three references are too few: the finding says how many there were, and speeds are as without them."""
    few = of(replace(plan, reference=REFERENCE), with_references(night, outcome, still, count=3))
    assert "4 reference holds that gave a speed; there were 3" in few.finding("drift_percent_per_hour").reason
    assert few.finding("top_speed_rpm") == of(plan, night).finding("top_speed_rpm")


def test_speed_findings_do_not_move_with_the_drift(plan: Plan, night: list[Outcome], outcome: MakeOutcome) -> None:
    """The same night with and without a drift of 3 % (0 in its middle): no speed differs by more than its u."""
    plan = replace(plan, reference=REFERENCE)
    calm = of(plan, with_references(night, outcome, still))
    known = duties(plan, plan.conditions[0], night)
    exposures = stall_trials(plan, known, night, turning_before(night))
    read = speeds(plan, known, with_references(night, outcome, straight), exposures)
    assert read.drift is not None
    middle = read.drift.moment_s / night[-1].ended
    moved = of(plan, with_references(night, outcome, lambda part: straight(part - middle)))
    for name in ("top_speed_rpm", "stall_speed_rpm", "lowest_reliable_speed_rpm", "curve_hysteresis_rpm"):
        with_drift, without = moved.finding(name), calm.finding(name)
        assert with_drift.value is not None
        assert without.value is not None
        assert with_drift.u is not None
        assert abs(with_drift.value - without.value) <= with_drift.u, name


def test_a_run_in_that_was_cut_short_is_flagged(plan: Plan, night: list[Outcome], outcome: MakeOutcome) -> None:
    """A run-in that reached its longest time while the speed still drifted flags the drift, and says how fast."""
    pieces = [
        replace(
            outcome(500 + k, Purpose.RUN_IN, 60.0, Verdict.TURNING, approach=Approach.FROM_REST),
            began=20.0 * k, ended=20.0 * (k + 1),
            means={STEADY_SPEED: Reading(1800.0 + 9.0 * k, 0.3, "rpm", 20.0 * k, STEADY_SPEED)},
        )
        for k in range(4)
    ]  # fmt: skip
    asked = replace(plan, reference=REFERENCE, run_in=RunIn(60.0, 20.0, 1.0, 80.0))
    drift = of(asked, [*with_references(night, outcome, straight), *pieces]).finding("drift_percent_per_hour")
    assert drift.flags == ("still_warming",)
    assert any("run-in of session 1: after 80 s the speed drifted by" in one for one in drift.assumes)


# ---- what thresholds may expect -------------------------------------------------------------------------------------


def expected(shape: Shape, duty: float) -> Chosen:
    """What is expected of trials at `duty` through a night of the shape; curve 40 rpm/% with a dead band of 5 %."""
    made, at = a_course(shape, 17, 1e-4, random.Random(5))
    levels = [Point(n, d, 40.0 * (d - 5.0), 0.5, 20.0) for n, d in enumerate((10.0, 55.0, 100.0))]
    curve = fit_curve(levels, monotone=True)
    assert curve is not None
    read = Speeds((), (), spread_over(made, at, NIGHT_S / 2.0))
    trials = tuple(Trial(n, duty, 1.0, None, NIGHT_S * n / 40.0) for n in range(41))
    return expecting(read, Branch(curve, None), [_reference_hold()], Chosen(trials), STALL.prior.median_percent)


def _reference_hold() -> Outcome:
    hold = Hold(0, Purpose.REFERENCE, Approach.FALLING, Condition(300.0, 12.0), 55.0, 20.0, 20.0, EndsWhen.TIME, (), "")
    return Outcome(0, hold, 1, Status.DONE, Verdict.TURNING, 0.0, 20.0, 0.0, 20.0)


def test_thresholds_may_expect_what_friction_would_do() -> None:
    """2,000 rpm less 3 % at 40 rpm/% is the curve shifted by 1.5 % duty, 30 % of its dead band: a threshold at 20 %
    duty may have moved by 30 % of it, 6 % duty. Without a drift it is what was expected before (0.3 %)."""
    moving = expected(lambda part: -0.03 * part, 20.0).drift_percent
    assert moving == pytest.approx(6.1, rel=0.1)
    assert expected(still, 20.0).drift_percent == pytest.approx(STALL.prior.median_percent, rel=0.2)


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["faster", "slower"])
def test_thresholds_move_with_the_course(sign: float) -> None:
    """Times of trials pass as the reference changes where it surely does: a course that comes to rest has trials
    crowded at its end. Without a change they stay as they are."""
    times: NDArray[np.float64] = np.array(
        [trial.at_s for trial in expected(lambda part: sign * settling(part), 20.0).trials]
    )
    assert times[0] == pytest.approx(0.0)
    assert times[-1] == pytest.approx(NIGHT_S)
    true = np.array([settling(k / 40.0) for k in range(41)]) / settling(1.0) * NIGHT_S
    assert np.max(np.abs(times - true)) < 0.02 * NIGHT_S
    unmoved = np.array([trial.at_s for trial in expected(still, 20.0).trials])
    assert np.array_equal(unmoved, NIGHT_S * np.arange(41) / 40.0)


def test_the_moment_is_where_the_course_is_at_its_mean() -> None:
    """For a course that comes to rest it lies before the middle of the trials' times; for a straight one in it."""
    for shape, early in ((settling, True), (straight, False)):
        made, at = a_course(shape, 33, 1e-4, random.Random(17))
        holds = [replace(_reference_hold(), number=n, began=t, ended=t, means={
            STEADY_SPEED: Reading(RPM * math.exp(shape(t / NIGHT_S)), 0.1, "rpm", t, STEADY_SPEED)})
            for n, t in enumerate(at)]  # fmt: skip
        drift = drift_of(holds, [NIGHT_S * k / 40.0 for k in range(41)])
        assert drift is not None
        mean = float(np.mean([shape(k / 40.0) for k in range(41)]))
        assert shape(drift.moment_s / NIGHT_S) == pytest.approx(mean, abs=5e-4)
        assert (drift.moment_s < 0.45 * NIGHT_S) is early
        assert made.span_s > 0.0
