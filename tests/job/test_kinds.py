"""Kinds of motor in motor files: the shipped ones, and what is refused when a kind, its keys or the rig do not fit."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import document, load, shipped

CONFIGS = shipped("demo").parent
JOBS = {"demo": "brushed", "stirrer": "geared", "electronic": "electronic", "four-wire": "control_input",
        "prescribed": "prescribed"}  # fmt: skip


@pytest.mark.parametrize(("name", "kind"), JOBS.items())
def test_shipped_kinds(name: str, kind: str) -> None:
    """One job of each kind ships, and its true motor is of that kind."""
    job = load(shipped(name))
    assert job.motor.simulated is not None
    assert job.motor.simulated.kind == kind


def test_a_brushed_motor_need_not_say_so() -> None:
    """Existing motor files stay valid, and their frozen text does not change: no kind is written into it."""
    assert "[motor.simulated]\nresistance_ohm" in document(load(shipped("demo")))


Refused = Callable[..., str]


@pytest.fixture
def refused(tmp_path: Path) -> Refused:
    """`refused(job, old, new)`: the error of a shipped job whose motor file has `new` in place of `old`."""

    def attempt(name: str, old: str, new: str, rig: str = "") -> str:
        for folder in ("rigs", "motors", "sweeps"):
            shutil.copytree(CONFIGS / folder, tmp_path / folder)
        job = (CONFIGS / f"{name}.toml").read_text(encoding="utf-8")
        motor = tmp_path / job.split('motor = "')[1].split('"')[0]
        text = motor.read_text(encoding="utf-8")
        assert text.count(old) == 1
        motor.write_text(text.replace(old, new), encoding="utf-8")
        if rig:
            job = job.replace(job.split('rig = "')[1].split('"')[0], rig)
        (tmp_path / "job.toml").write_text(job, encoding="utf-8")
        with pytest.raises(ConfigError) as caught:
            load(tmp_path / "job.toml")
        return str(caught.value)

    return attempt


WIRED, CHOPPED, STIRRER, LAW = "four-wire", "electronic", "stirrer", "prescribed"


@pytest.mark.parametrize(
    ("name", "old", "new", "says"),
    [
        (WIRED, 'kind = "control_input"', 'kind = "controlled_input"',
         ["simulated.kind", "no such choice", '"controlled_input"', "geared", 'Did you mean "control_input"?']),
        (WIRED, "maximum_rpm = 4200.0", "maximum_rmp = 4200.0",
         ["simulated.maximum_rmp", "unknown key", 'Did you mean "maximum_rpm"?']),
        (WIRED, "maximum_rpm = 4200.0\n", "", ["simulated.maximum_rpm", "required and missing", "maximum_rpm = 1"]),
        (WIRED, "lowest_volts = 6.0", "lowest_volts = 0.0", ["simulated.lowest_volts", "above 0, up to 100"]),
        (WIRED, "minimum_rpm_percent = 22.0", "minimum_rpm_percent = 31.0",
         ["simulated.minimum_rpm_percent", "above 0, up to 30", "The specification allows 30 %"]),
        (WIRED, "minimum_duty_percent = 20.0", "minimum_duty_percent = 33.0",
         ["simulated.minimum_rpm_percent", "11 % off the duty", "near 33 (minimum_duty_percent)"]),
        (WIRED, "minimum_duty_percent = 20.0", "minimum_duty_percent = 0.0",
         ["simulated.minimum_duty_percent", "above 0, up to 100"]),
        (WIRED, 'below_minimum = "A"', 'below_minimum = "D"', ["simulated.below_minimum", '"A", "B", "C"']),
        (WIRED, 'below_minimum = "A"', 'below_minimum = "C"',
         ["simulated.fail_percent", "0, the default", "above 0, below 20"]),
        (WIRED, "bend_percent = 4.0", "bend_percent = 12.0", ["simulated.bend_percent", "-10 to 10"]),
        (WIRED, "coast_rpm_per_s = 150.0", "coast_rpm_per_s = 0.0", ["simulated.coast_rpm_per_s", "above 0"]),
        (WIRED, "full_amps = 0.35", "full_amps = 1.6", ["simulated.full_amps", "up to 1.5"]),
        (WIRED, "spike_amps = 0.9", "spike_amps = 2.3", ["simulated.spike_amps", "0 to 2.2"]),
        (WIRED, "spike_s = 0.4", "spike_s = 1.1", ["simulated.spike_s", "0 to 1", "1.0 s"]),
        (WIRED, "start_rpm_percent = 28.0", "start_rpm_percent = 31.0", ["simulated.start_rpm_percent", "0 to 30"]),
        (WIRED, "start_pulse_s = 1.0", "start_pulse_s = 2.5", ["simulated.start_pulse_s", "0 to 2"]),
        (WIRED, "own_amps = 0.02", "own_amps = -0.1", ["simulated.own_amps", "0 to 10"]),
        (WIRED, "own_amps = 0.02", "own_amps = 0.02\nspread_percent = 11.0", ["simulated.spread_percent", "0 to 10"]),
        (WIRED, "own_amps = 0.02", "own_amps = 0.02\nnominal_volts = 0.0", ["simulated.nominal_volts", "above 0"]),
        (WIRED, "own_amps = 0.02", "own_amps = 0.02\ncorrelation_s = 0.0", ["simulated.correlation_s", "above 0"]),
        (WIRED, 'kind = "with_electronics"', 'kind = "brushed"',
         ["kind", "a control input", "shelter-bench-4wire.toml:4, drive_kind", "with_electronics"]),
        (CHOPPED, 'kind = "with_electronics"', 'kind = "brushed"',
         ["simulated.kind", "not of the kind that the file states", "brushed, geared, prescribed"]),
        (CHOPPED, "wake_s = 0.4e-3", "wake_s = -1.0", ["simulated.wake_s", "0 to 10"]),
        (CHOPPED, "wake_s = 0.4e-3", "wake_s = 0.4e-3\nholdup_farad = 2.0", ["simulated.holdup_farad", "0 to 1"]),
        (CHOPPED, "wake_s = 0.4e-3", "wake_s = 0.4e-3\ncharge_ohm = 0.0", ["simulated.charge_ohm", "above 0"]),
        (CHOPPED, "wake_s = 0.4e-3", "wake_s = 0.4e-3\nsoft_start_s = 61.0", ["simulated.soft_start_s", "0 to 60"]),
        (CHOPPED, "wake_s = 0.4e-3", "wake_s = 0.4e-3\ndraught_rpm = -1.0", ["simulated.draught_rpm", "Backwards"]),
        (CHOPPED, "wake_s = 0.4e-3", "wake_s = 0.4e-3\ndraught_spread_percent = 51.0",
         ["simulated.draught_spread_percent", "0 to 50"]),
        (CHOPPED, "wake_s = 0.4e-3", "wake_s = 0.4e-3\ntach_chopped = 1",
         ["simulated.tach_chopped", "true or false is wanted"]),
        (CHOPPED, "lock_detect_s = 0.5", "lock_detect_s = 0.0", ["simulated.lock_detect_s", "above 0"]),
        (CHOPPED, "lock_rest_s = 3.0", "lock_rest_s = 0.0", ["simulated.lock_rest_s", "protects nothing"]),
        (CHOPPED, "backward_limit_rpm = 200.0", "backward_limit_rpm = -2.0", ["simulated.backward_limit_rpm"]),
        (CHOPPED, "breakaway_friction_nm = 2.5e-3", "breakaway_friction_nm = 0.1e-3",
         ["simulated.breakaway_friction_nm", "0.0005 or more"]),
        (STIRRER, "gear_ratio = 10.0", "gear_ratio = 0.5", ["simulated.gear_ratio", "1 to 10000"]),
        (STIRRER, "backlash_rad = 0.05", "backlash_rad = 1.5", ["simulated.backlash_rad", "a broken tooth"]),
        (STIRRER, "own_inertia_percent = 40.0", "own_inertia_percent = 0.0", ["simulated.own_inertia_percent"]),
        (STIRRER, "own_friction_percent = 25.0", "own_friction_percent = 101.0", ["simulated.own_friction_percent"]),
        (LAW, 'law = "exponential"', 'law = "exponentiel"', ["simulated.law", 'Did you mean "exponential"?']),
        (LAW, "stall_duty_percent = 12.0", "stall_duty_percent = 101.0", ["simulated.stall_duty_percent", "0 to 100"]),
        (LAW, "stall_spread_percent = 0.4", "stall_spread_percent = 0.0", ["simulated.stall_spread_percent"]),
        (LAW, "hold_time_s = 20.0", "hold_time_s = 0.0", ["simulated.hold_time_s", "above 0"]),
        (LAW, "start_duty_percent = 18.0", "start_duty_percent = -1.0", ["simulated.start_duty_percent"]),
        (LAW, "start_spread_percent = 0.5", "start_spread_percent = 0.0", ["simulated.start_spread_percent"]),
        (LAW, "top_rpm = 3300.0", "top_rpm = 0.0", ["simulated.top_rpm", "At full duty"]),
        (LAW, "dead_percent = 4.0", "dead_percent = 100.0", ["simulated.dead_percent", "0 to 99"]),
        (LAW, "dead_percent = 4.0", "floor_per_hour = -1.0", ["simulated.floor_per_hour"]),
        (LAW, "dead_percent = 4.0", "scatter_percent = 21.0", ["simulated.scatter_percent", "0 to 20"]),
        (LAW, "dead_percent = 4.0", "drift_percent_per_hour = 21.0", ["simulated.drift_percent_per_hour", "-20 to 20"]),
    ],
)  # fmt: skip
def test_what_a_kind_refuses(refused: Refused, name: str, old: str, new: str, says: list[str]) -> None:
    """Each key is refused outside its range, by its own name, without the marks of the models."""
    text = refused(name, old, new)
    assert [part for part in says if part not in text] == []
    assert ".toml:" in text
    assert "[control_input]" not in text


def test_a_control_input_needs_its_kind_of_rig(refused: Refused) -> None:
    """A fan with a control input on a power switch is refused, and so is the other way round, naming both files."""
    text = refused(WIRED, "maximum_rpm = 4200.0", "maximum_rpm = 4200.0", rig="rigs/shelter-bench.toml")
    assert "drive_kind is power_switch" in text
    assert "shelter-bench.toml:4, drive_kind" in text


def test_a_fan_on_a_chopped_supply_has_no_control_input(refused: Refused) -> None:
    """The other way round: electronics without a control input on a rig that drives one."""
    text = refused(CHOPPED, "wake_s = 0.4e-3", "wake_s = 0.4e-3", rig="rigs/shelter-bench-4wire.toml")
    assert "drive_kind is control_input" in text
