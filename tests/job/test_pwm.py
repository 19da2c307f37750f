"""PWM frequencies that are moved for the meters, and those of a timer that nobody sets: plan, remarks, refusals."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import Job, document, freeze, load, shipped
from sweeprig.job.pwm_choice import broken_period, frequencies
from sweeprig.job.tap_freeze import FIRST_TAPS

Change = Callable[..., Job]


@pytest.fixture
def timer(tmp_path: Path) -> Change:
    """`timer({file: {old: new}}, job="timer")`: a shipped job, loaded with texts of its files changed."""

    def changed(changes: dict[str, dict[str, str]] | None = None, job: str = "timer") -> Job:
        folder = tmp_path / "configs"
        shutil.copytree(shipped(job).parent, folder, dirs_exist_ok=True)
        for file, texts in (changes or {}).items():
            text = (folder / file).read_text(encoding="utf-8")
            for old, new in texts.items():
                assert text.count(old) == 1, (file, old)
                text = text.replace(old, new)
            (folder / file).write_text(text, encoding="utf-8")
        return load(folder / f"{job}.toml")

    return changed


def asked(pwm: str, tolerance: str, aperture: str = "0.2 s") -> dict[str, dict[str, str]]:
    return {
        "sweeps/evening.toml": {'["300 Hz", "1 kHz", "25 kHz"]': f'{pwm}\npwm_tolerance = "{tolerance}"'},
        "rigs/shelter-bench.toml": {'aperture = "0.2 s"': f'aperture = "{aperture}"'},
    }


def test_moved_to_whole_periods(timer: Change) -> None:
    """The nearest frequency within the tolerance whose periods fill the aperture is used, the asked one is on record,
    and what is whole already stays as it was. (0.2 s: multiples of 5 Hz; independent arithmetic.)"""
    job = timer(asked('["333 Hz", "1 kHz", "37 Hz"]', "10 %"), "demo")
    plan = freeze(job)
    assert [condition.pwm_hz for condition in plan.conditions] == [335.0, 1000.0, 35.0]
    assert len(plan.remarks) == 2
    assert plan.remarks[0].startswith("PWM 333 Hz was asked for and 335 Hz is used, within 10 % (pwm_tolerance)")
    assert "meter (200 ms)" in plan.remarks[0]


@pytest.mark.parametrize("pwm_hz", [31.0, 47.3, 150.7, 244.3, 333.0, 1003.0, 4001.0, 12_007.0, 24_990.0])
@pytest.mark.parametrize("aperture", ["20 ms", "0.1 s", "166.7 ms"])
def test_what_the_board_makes_is_whole(timer: Change, pwm_hz: float, aperture: str) -> None:
    """Whatever is asked for, the board's whole ticks at the frequency used leave no broken period worth mentioning, and
    it lies within the tolerance; else the readings are said to be spread, and it is used as it was asked for."""
    (one,) = frequencies(timer(asked(f'["{pwm_hz} Hz"]', "6 %", aperture), "demo"))
    seconds = {"20 ms": 0.02, "0.1 s": 0.1, "166.7 ms": 0.1667}[aperture]
    if one.spread:
        whole = [periods / seconds for periods in range(1, round(2.0 * pwm_hz * seconds))]
        near = [hz for hz in whole if abs(hz - pwm_hz) <= 0.06 * pwm_hz]
        assert one.used_hz == pwm_hz
        assert all(broken_period(seconds, made_by_the_board(hz)) > 1e-4 for hz in near)
    else:
        assert broken_period(seconds, made_by_the_board(one.used_hz)) <= 1e-4
        assert abs(one.used_hz - pwm_hz) <= 0.06 * pwm_hz


def made_by_the_board(pwm_hz: float) -> float:
    """Whole ticks of 16 MHz over 1, 8 or 64, by the table of drivers/firmware/README.md."""
    clock_hz = 16e6 / (1.0 if pwm_hz > 244.2 else 8.0 if pwm_hz > 30.52 else 64.0)
    return clock_hz / round(clock_hz / pwm_hz)


def test_never_moved_unless_allowed(timer: Change) -> None:
    """Without a tolerance the frequency is the asked one and nothing is said of it; with one that is too small it is
    used as well, and the record says that readings are spread."""
    bare = timer({"sweeps/evening.toml": {'["300 Hz", "1 kHz", "25 kHz"]': '["333 Hz"]'}}, "demo")
    assert (freeze(bare).conditions[0].pwm_hz, freeze(bare).remarks) == (333.0, ())
    assert not frequencies(bare)[0].spread


def test_too_small_a_tolerance(timer: Change) -> None:
    """Within 0.1 % of 333 Hz no frequency fits 0.2 s: the asked one stays, readings average over spread phase."""
    job = timer(asked('["333 Hz"]', "0.1 %"), "demo")
    (one,) = frequencies(job)
    assert (one.used_hz, one.spread) == (333.0, True)
    assert "average over spread phase" in freeze(job).remarks[0]


def test_the_timer_gives_its_own_frequency(timer: Change, tmp_path: Path) -> None:
    """The condition has the frequency of the timer's parts: 1/((2·2 k + 100 k)·10 nF·ln(8.5/3.5)), by hand 1083.7 Hz;
    duties lie within what it reaches, steps are no finer than a tap, and the job's text is read back alike."""
    job = timer()
    plan = freeze(job)
    assert [condition.pwm_hz for condition in plan.conditions] == [1083.7]
    assert plan.duty_low_percent == pytest.approx(100.0 * 2.0 / 104.0)
    assert max(plan.curve.duties_percent if plan.curve else ()) == pytest.approx(100.0 * 102.0 / 104.0)
    assert list(plan.duty_step_percent) == pytest.approx([100.0 * 100.0 / 104.0 / 255.0])
    assert plan.taps is not None
    assert len(plan.taps.first) == FIRST_TAPS
    assert sorted(plan.taps.first, reverse=True) == list(plan.taps.first)
    (tmp_path / "again.toml").write_text(document(job), encoding="utf-8")
    assert load(tmp_path / "again.toml") == job


def test_adaptive_steps_are_taps(timer: Change) -> None:
    """An adaptive search, which would take duties a tenth of a percent apart, takes them a tap apart."""
    job = timer({"sweeps/timer.toml": {
        'search = "ladder"\nhold_time = "20 s"\nholds = 30': 'search = "adaptive"\nhold_time = "20 s"'
    }})  # fmt: skip
    plan = freeze(job)
    assert plan.stall is not None
    assert plan.stall.step_percent == pytest.approx(100.0 * 100.0 / 104.0 / 255.0)


REFUSED = [
    ("frequency", {"sweeps/timer.toml": {'["timer"]': '["1 kHz"]'}},
     ("nobody sets the frequency of the rig's timer", "about 1.084 kHz", 'allowed: ["timer"]', "timer.toml")),
    ("two", {"sweeps/timer.toml": {'["timer"]': '["timer", "1 kHz"]'}}, ("nobody sets the frequency",)),
    ("tolerance", {"sweeps/timer.toml": {'["timer"]': '["timer"]\npwm_tolerance = "2 %"'}},
     ("a timer's frequency cannot be moved", "Remove it")),
    ("no duty", {"rigs/timer-bench.toml": {'duty = "scope.duty"\n': ""}},
     ("offers no duty", "known only by measuring it", 'Add for example duty = "scope.duty"')),
    ("no frequency", {"rigs/timer-bench.toml": {'pwm_frequency = "scope.frequency"\n': ""}}, ("no pwm_frequency",)),
    ("step", {"sweeps/timer.toml": {'hold_time = "20 s"': 'hold_time = "20 s"\nstep = "0.2 %"'}},
     ("finer than one tap", "0.3771 % or more", "Leave it out")),
    ("run-in", {"sweeps/timer.toml": {'duty = "60 %"': 'duty = "99 %"'}},
     ("beyond what the rig's timer gives by its parts", "1.923 % to 98.08 %")),
    ("range", {"sweeps/timer.toml": {'[run_in]\nduty = "60 %"\ntime = "2 min"\n': "",
                                     'lowest_speed': 'duty = { low = "99 %", high = "100 %" }\nlowest_speed'}},
     ("no duty that the rig's timer gives",)),
]  # fmt: skip


@pytest.mark.parametrize(("changes", "says"), [case[1:] for case in REFUSED], ids=[case[0] for case in REFUSED])
def test_refusals(timer: Change, changes: dict[str, dict[str, str]], says: tuple[str, ...]) -> None:
    """What a timer cannot give, or nobody could know of it, is refused with the reason, the range and the remedy."""
    with pytest.raises(ConfigError) as caught:
        timer(changes)
    assert [part for part in says if part not in str(caught.value)] == []


def test_the_word_wants_a_timer(timer: Change) -> None:
    """A rig that sets its frequency is not asked for what "the timer" gives."""
    with pytest.raises(ConfigError, match=r"the rig has no \[pwm_timer\]"):
        timer({"sweeps/evening.toml": {'["300 Hz", "1 kHz", "25 kHz"]': '["timer"]'}}, "demo")


def test_two_that_become_one(timer: Change) -> None:
    """Two frequencies that would be moved to the same one are refused: it would be measured twice under one name."""
    with pytest.raises(ConfigError, match="this and 333 Hz both become 335 Hz"):
        timer(asked('["333 Hz", "336 Hz"]', "2 %"), "demo")
