"""Sweeps on a drive by taps, through the real adapters on the simulated bench: what was told, protected and found.

What the taps truly give is read from the simulated timer, never from the run.
"""

from __future__ import annotations

import json
import shutil
import statistics
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from sweeprig.conduct import by_taps
from sweeprig.conduct.answering import DutyMeasured, FrequencyMeasured, VoltageAtDuty
from sweeprig.conduct.protection import Commanded
from sweeprig.errors import ConfigError
from sweeprig.holds import Approach, AtTap, Condition, EndsWhen, Hold, Outcome, Purpose, Status
from sweeprig.job import Job, load, shipped
from sweeprig.launch import start
from sweeprig.logbook import Reader
from sweeprig.opened import open_run
from sweeprig.quantities import Reading
from sweeprig.results import results
from sweeprig.roles import DriveSetting
from sweeprig.simbench import build
from sweeprig.simbench.truth_of_job import truth_of

SHORT = {
    'time = "2 min"': 'time = "10 s"', "points = 10": "points = 5", "holds = 30": "holds = 8",
    "trials = 30": "trials = 6",
}  # fmt: skip
Made = Callable[..., Job]


@pytest.fixture
def job_of(tmp_path: Path) -> Made:
    """`job_of("timer", {file: {old: new}}, append={file: text})`: a shipped job with changed texts."""

    def made(name: str, changes: dict[str, dict[str, str]], append: dict[str, str] | None = None) -> Job:
        folder = tmp_path / "configs"
        shutil.copytree(shipped(name).parent, folder, dirs_exist_ok=True)
        for file, texts in changes.items():
            text = (folder / file).read_text(encoding="utf-8")
            for old, new in texts.items():
                assert text.count(old) == 1, (file, old)
                text = text.replace(old, new)
            (folder / file).write_text(text, encoding="utf-8")
        for file, more in (append or {}).items():
            (folder / file).write_text((folder / file).read_text(encoding="utf-8") + more, encoding="utf-8")
        return load(folder / f"{name}.toml")

    return made


def run(job: Job, runs: Path) -> tuple[list[Outcome], dict[str, Any], Path]:
    """(outcomes, findings.json, run folder)."""
    folder = start(job, runs).path
    results(folder)
    return list(open_run(folder).outcomes), json.loads((folder / "findings.json").read_text(encoding="utf-8")), folder


def the_timer(job: Job) -> Any:
    """The simulated timer as it is fitted, errors and all."""
    board = next(one for name, one in build(job).instruments.items() if name == "board")
    return board._pwm_timer  # type: ignore[attr-defined]  # the truth of the bench


def test_findings_agree_with_the_truth(job_of: Made, tmp_path: Path) -> None:
    """A sweep by taps on parts that are 8 % off: no hold is spoilt, every hold's measured duty and frequency are those
    of its tap, and each found duty and speed has the truth in its 95 % interval. Seeded: one night, looked at once
    (common chance of a false alarm with five intervals: a quarter, for a new seed)."""
    job = job_of("timer", {})
    outcomes, findings, _ = run(job, tmp_path / "runs")
    timer = the_timer(job)
    assert {outcome.status for outcome in outcomes} == {Status.DONE}
    driven = [outcome for outcome in outcomes if outcome.hold.tap is not None]
    assert len(driven) > 80
    for outcome in driven:
        tap, duty, hz = outcome.hold.tap, outcome.means["scope.duty"], outcome.means["scope.frequency"]
        assert duty.value == pytest.approx(timer.duty_percent(tap), abs=0.15)
        assert hz.value == pytest.approx(timer.pwm_hz(tap, 35.0), rel=1e-3)
        assert outcome.means.get("board.duty_set") is None or outcome.means["board.duty_set"].value is None
        assert (
            "aperture_not_whole_periods" in outcome.means["meter.volts"].flags if "meter.volts" in outcome.means else 1
        )
    found, true = findings["conditions"][0], truth_of(job)["conditions"][0]["findings"]
    for name in ("stall_duty_percent", "sustain_99_duty_percent", "start_duty_percent", "start_99_duty_percent",
                 "stall_speed_rpm"):  # fmt: skip
        assert found[name]["low"] <= true[name]["value"] <= found[name]["high"], name
    assert findings["suspicions"] == []
    # 3300 rpm over 96 % above the dead 4 %, and the true step of one tap (independent arithmetic)
    step = timer.duty_percent(101) - timer.duty_percent(100)
    assert found["resolution_rpm_per_step"]["value"] == pytest.approx(3300.0 / 96.0 * step, rel=0.02)


def test_targets_come_to_the_right_taps(job_of: Made, tmp_path: Path) -> None:
    """Once the map is known the tap chosen gives the wanted duty to half a step, and what is expected of it to three u;
    the first holds of the map go to their stated taps."""
    job = job_of("timer", {"sweeps/timer.toml": SHORT})
    outcomes, _, _ = run(job, tmp_path / "runs")
    timer = the_timer(job)
    step = timer.duty_percent(101) - timer.duty_percent(100)
    assert [outcome.hold.tap for outcome in outcomes if outcome.hold.purpose is Purpose.TAP_MAP] == [
        255, 214, 173, 132, 90
    ]  # fmt: skip
    for outcome in outcomes:
        for at in outcome.hold.taps:
            assert abs(at.duty_percent - timer.duty_percent(at.tap)) <= 3.0 * at.u_percent
            if (
                outcome.hold.purpose in (Purpose.STALL, Purpose.START)
                and timer.duty_percent(0) < at.asked_percent < 98.0
            ):
                assert abs(timer.duty_percent(at.tap) - at.asked_percent) <= 0.75 * step


def test_a_broken_ladder_is_noticed(job_of: Made, tmp_path: Path) -> None:
    """From tap 190 on the wiper sits 60 taps lower: the sweep goes on at the duties that were measured, says which taps
    are out of order, flags its duties, and still has the truth in their intervals."""
    fault = "wiper_skips_from = 190\nwiper_skips_taps = 60\n"
    job = job_of("timer", {"sweeps/timer.toml": SHORT}, {"rigs/timer-bench.toml": fault})
    outcomes, findings, _ = run(job, tmp_path / "runs")
    found, true = findings["conditions"][0], truth_of(job)["conditions"][0]["findings"]
    assert {doubt["rule"] for doubt in findings["suspicions"]} == {"tap_map_not_monotone"}
    assert all("out of order" in doubt["what"] for doubt in findings["suspicions"])
    for name in ("stall_duty_percent", "start_duty_percent"):
        assert "tap_map_not_monotone" in found[name]["flags"]
        low, high = found[name]["low"], found[name]["high"]
        assert low is None or low <= true[name]["value"]
        assert high is None or true[name]["value"] <= high
    assert sum(outcome.status is Status.DISCARDED for outcome in outcomes) < 6


def test_a_tap_that_gives_another_duty_is_learned(job_of: Made, tmp_path: Path) -> None:
    """At the very first tap the wiper sits 60 taps lower: the run-in there is discarded and says what the tap gave; the
    next one is at a tap that gives the wanted duty, and the sweep goes on."""
    fault = "wiper_skips_from = 150\nwiper_skips_taps = 60\n"
    job = job_of("timer", {"sweeps/timer.toml": SHORT}, {"rigs/timer-bench.toml": fault})
    outcomes, findings, _ = run(job, tmp_path / "runs")
    timer = the_timer(job)
    warm = [outcome for outcome in outcomes if outcome.hold.purpose is Purpose.RUN_IN]
    assert warm[0].status is Status.DISCARDED
    assert warm[0].means["scope.duty"].value == pytest.approx(timer.duty_percent(warm[0].hold.tap), abs=0.15)
    assert warm[-1].status is Status.DONE
    assert warm[-1].means["scope.duty"].value == pytest.approx(60.0, abs=3.0)
    assert findings["conditions"][0]["stall_duty_percent"]["value"] == pytest.approx(12.0, abs=1.5)


def test_moved_frequency(job_of: Made, tmp_path: Path) -> None:
    """333 Hz is moved to 335 Hz: the scope sees that, readings are of whole periods, and both record and findings say
    what was asked for. Not moved, the rig is refused as ever; with too small a tolerance readings say that they are
    spread."""
    glance = {'sweep = "sweeps/evening.toml"': 'sweep = "sweeps/glance.toml"'}

    def with_pwm(text: str) -> Job:
        return job_of("prescribed", {"prescribed.toml": glance, "sweeps/glance.toml": {'pwm = ["1 kHz"]': text}})

    outcomes, findings, folder = run(with_pwm('pwm = ["333 Hz"]\npwm_tolerance = "1 %"'), tmp_path / "moved")
    read = [outcome.means for outcome in outcomes if "meter.volts" in outcome.means and outcome.hold.duty_percent > 0]
    assert statistics.median(means["scope.frequency"].value or 0.0 for means in read if "scope.frequency" in means) == (
        pytest.approx(335.0, rel=1e-3)
    )
    assert all("aperture_not_whole_periods" not in means["meter.volts"].flags for means in read)
    said = "PWM 333 Hz was asked for and 335 Hz is used"
    assert findings["conditions"][0]["pwm_hz"] == 335.0
    assert findings["advice"][0]["note"].startswith(said)
    events = Reader(folder / "logbook.sqlite").events()
    notices = [str(event.data.get("text", "")) for event in events if event.kind == "notice"]
    assert any(text.startswith(said) for text in notices)
    shutil.rmtree(tmp_path / "configs")
    with pytest.raises(ConfigError, match=r"not a whole number of PWM periods(?s:.*)pwm_tolerance"):
        start(with_pwm('pwm = ["333 Hz"]'), tmp_path / "never")
    shutil.rmtree(tmp_path / "configs")
    outcomes, _, _ = run(with_pwm('pwm = ["333 Hz"]\npwm_tolerance = "0.1 %"'), tmp_path / "spread")
    read = [outcome.means for outcome in outcomes if outcome.hold.purpose is Purpose.CURVE]
    assert any("aperture_not_whole_periods" in means["meter.volts"].flags for means in read if "meter.volts" in means)


AT = Condition(1000.0, 12.0)
TOLD = AtTap(30.0, 74, 30.2, 0.5, 1040.0, 20.0)


def hold_at(tap: int | None) -> Hold:
    at = () if tap is None else (TOLD,)
    return Hold(1, Purpose.STALL, Approach.FALLING, AT, 30.0, 0.0, 5.0, EndsWhen.STOPPED, (), "", (), tap, at)


def told_by(hold: Hold, at: float = 2.0) -> tuple[by_taps.Told, DriveSetting, Commanded]:
    told = by_taps.Told()
    told.begin(hold)
    return told, *told.settings(AT, 30.0, at)


def test_what_the_drive_is_told() -> None:
    """By taps: the tap, and protection expects what the map does, of a hold that learns the map nothing; without, the
    duty as ever."""
    _, setting, commanded = told_by(hold_at(74))
    assert (setting.tap, setting.duty_percent, setting.pwm_hz) == (74, 30.2, 1000.0)
    assert commanded == Commanded(True, 30.2, 1040.0, 12.0, 2.0, 0.5, 20.0)
    _, setting, commanded = told_by(hold_at(None))
    assert (setting.tap, setting.duty_percent) == (None, 30.0)
    assert commanded == Commanded(True, 30.0, 1000.0, 12.0, 2.0)
    _, setting, commanded = told_by(replace(hold_at(74), purpose=Purpose.TAP_MAP))
    assert (setting.tap, commanded.least_duty_percent) == (74, 0.0)


def reading(at: float, value: float | None) -> Reading:
    return Reading(value, 0.03, "%", at, "scope.duty")


def test_a_short_hold_says_what_its_tap_gave() -> None:
    """The duty is the mean of all readings after the target was told, those before it (the lead's) and those without a
    value left out; what the means have already stays; a hold without a tap, one whose target was never told, and
    another one than was performed get nothing."""
    roles = {"duty": "scope.duty", "pwm_frequency": "scope.frequency"}
    readings = [reading(1.0, 90.0), reading(3.0, 30.0), reading(4.0, 31.0), reading(5.0, None)]
    hold = hold_at(74)
    told, _, _ = told_by(hold)
    found = told.given(hold, roles, readings, {})
    assert set(found) == {"scope.duty"}
    assert found["scope.duty"].value == 30.5
    assert told.given(hold, roles, readings, {"scope.duty": readings[1]}) == {}
    assert told.given(replace(hold, number=2), roles, readings, {}) == {}
    bare = hold_at(None)
    assert told_by(bare)[0].given(bare, roles, readings, {}) == {}
    never = by_taps.Told()
    never.begin(hold)
    never.settings(AT, 42.0, 2.0)
    assert never.given(hold, roles, readings, {}) == {}


@pytest.mark.parametrize(("u", "trips"), [(0.0, True), (0.3, True), (1.0, False)])
def test_protection_knows_how_well_a_tap_is_known(u: float, trips: bool) -> None:
    """A measured duty 2 % off what is expected discards the hold where the tap is known to 0.3 %, not to 1 %; of the
    frequency likewise (50 Hz off 1000 Hz, u a hundredth)."""
    duty, hz = DutyMeasured("scope.duty"), FrequencyMeasured("scope.frequency")
    commanded = Commanded(True, 30.0, 1000.0, 12.0, 0.0, u, 20.0 * u)
    seen = [
        (policy.judge(Reading(value, 0.0, unit, float(at), policy.channel), commanded)) is not None
        for policy, value, unit in ((duty, 32.0, "%"), (hz, 1050.0, "Hz"))
        for at in range(4)
    ]
    assert (any(seen[:4]), any(seen[4:])) == (trips, trips)


def test_a_badly_known_duty_is_no_short() -> None:
    """Full voltage at what may be 89 % is no switch that failed short; at what is 77 % for sure it is."""
    for u, short in ((0.1, True), (4.0, False)):
        policy = VoltageAtDuty("meter.volts")
        commanded = Commanded(True, 77.0, 1000.0, 12.0, 0.0, u)
        values = [6.0, *[11.9] * 5]
        trips = [
            policy.judge(Reading(value, 0.0, "V", float(at), "meter.volts"), commanded)
            for at, value in enumerate(values)
        ]
        assert any(trip is not None for trip in trips) is short
