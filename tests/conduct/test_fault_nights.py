"""Short nights with planned faults, and crash points: the seeded part of what the figures do a thousand times.

Seeded with fixed numbers and no other randomness, so there are no false alarms: a failure is a change of the program.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import islice
from typing import Any

import pytest

from sweeprig.conduct.rig import RigUse
from sweeprig.job.fault_models import FAULT_KINDS
from sweeprig.simbench.bench import Happened, Struck

Load = Callable[[str], Any]
PRESCRIBED = "small, prescribed"
"""The bench whose true findings are formulas."""
STRUCK = 12
OTHERS = 5
EVERY = 270
"""Every so-many-th crash point, with an offset drawn once from a hat."""


@pytest.fixture(scope="session")
def nights(reference: Load) -> Any:
    return reference("fault_nights")


@pytest.fixture(scope="session")
def true(nights: Any) -> Any:
    """What is true on the prescribed bench; worked out before a test breaks anything."""
    return nights.references((PRESCRIBED,), 1, 6)


def drawn(nights: Any, fits: Callable[[Any], bool], count: int) -> list[Any]:
    found = (nights.night_faults.struck(seed) for seed in range(500_000, 600_000))
    return list(islice(filter(fits, found), count))


def test_nights_with_faults(nights: Any, true: Any) -> None:
    """Nights on the prescribed bench, faults alone and in pairs: no finding is off by more than three of its expanded
    uncertainties (against formulas, an independent method) without a flag, and no drive is left on."""
    acted: set[str] = set()
    for night in drawn(nights, lambda night: night.kind == PRESCRIBED, STRUCK):
        told = nights.judged(night, (0, 0), true)
        acted.update(told.acted)
        assert told.how != "own_error", f"{night}: {told.reason}"
        assert told.left_on == [], night
        assert told.wrong == [] or nights.for_a_suspicion(told), night
    assert len(acted) >= STRUCK // 2


def test_nights_on_other_benches_leave_no_drive_on(nights: Any) -> None:
    """Nights on a full rig, with a physical motor and with a control input: none leaves the motor with power."""
    for night in drawn(nights, lambda night: night.kind != PRESCRIBED, OTHERS):
        told = nights.lived(night)
        assert told.how != "own_error", f"{night}: {told.reason}"
        assert told.left_on == [], night


def test_healthy_nights_are_left_alone(nights: Any, true: Any) -> None:
    """With no fault planned nothing trips, parks or is discarded, and no number is wrong."""
    for seed in range(3):
        told = nights.judged(nights.night_faults.healthy(3_000_000 + seed, PRESCRIBED), (0, 0), true)
        assert not told.disturbed, told.reason
        assert (told.wrong, told.left_on) == ([], [])


def test_every_fault_leads_nights(nights: Any) -> None:
    """A thousand nights are led by every kind of fault at least twenty times, and every instrument of every
    rig has some; the same number draws the same night."""
    drawn_ones = [nights.night_faults.struck(seed) for seed in range(1, 1001)]
    leads = [night.faults[0]["kind"] for night in drawn_ones]
    assert min(leads.count(kind) for kind in FAULT_KINDS) >= 20
    assert drawn_ones[76] == nights.night_faults.struck(77)
    assert {len(night.faults) for night in drawn_ones} == {1, 2}
    kinds = nights.night_faults.KINDS
    there = {(kinds[night.kind].rig, fault.get("instrument")) for night in drawn_ones for fault in night.faults}
    assert there == {(kind.rig, name) for kind in kinds.values() for name in (*kind.instruments, None)}


def test_a_drive_that_is_not_switched_off_is_found(nights: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """With a program that tells nobody to be off, the very check of these nights says so."""
    monkeypatch.setattr("sweeprig.conduct.rig.OpenRig.ask_off", lambda *_: {})
    monkeypatch.setattr("sweeprig.conduct.run.prove_off", lambda *_: {})
    told = nights.lived(nights.night_faults.healthy(1, PRESCRIBED))
    assert any("planned" in words or "the run ended" in words for words in told.left_on)


def test_power_is_told_from_the_record(nights: Any) -> None:
    """Power: supply on, and the drive on, or the switch short for the time of that fault; a fan with a control input
    has it whenever its supply is on."""

    class Recorded:
        struck: tuple[Struck, ...] = ()
        record = (
            Happened(1.0, "supply_on", ""), Happened(2.0, "drive_on", ""), Happened(3.0, "drive_off", ""),
            Happened(9.0, "supply_off", ""),
        )  # fmt: skip

    night = nights.night_faults.Night
    short = ({"kind": "switch_short", "start": "4.000 s", "lasts": "1.500 s"},)
    assert nights.powered(night(1, PRESCRIBED), Recorded) == [(2.0, 3.0)]
    assert nights.powered(night(1, PRESCRIBED, short), Recorded) == [(2.0, 3.0), (4.0, 5.5)]
    assert nights.powered(night(1, "input"), Recorded) == [(1.0, 9.0)]


def test_a_wrong_number_is_found(nights: Any) -> None:
    """A finding moved by 3.1 of its own expanded uncertainties is wrong, by 2.9 it is not; with a flag that healthy
    nights do not have it is counted apart."""
    numbers = nights.night_numbers
    formula = numbers.Reference(findings={"top_speed_rpm": numbers.Value(1000.0, by_nights=False)})

    def found(value: float, *flags: str) -> Any:
        finding = {"value": value, "low": value - 10.0, "high": value + 5.0, "bound": "two_sided", "flags": flags}
        curve: dict[str, list[float]] = {"branch": [], "duty_percent": [], "speed_rpm": [], "u_rpm": []}
        return numbers.wrong_numbers({"top_speed_rpm": finding, "speed_curve": curve}, formula)

    assert [len(found(value)[0]) for value in (1029.0, 1031.0, 985.5, 984.5)] == [0, 1, 0, 1]
    assert [len(some) for some in found(1031.0, "odd")] == [0, 1]


def test_a_night_with_wrong_numbers_is_found(nights: Any, true: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """A program that takes two edges a revolution for three makes every speed of a whole night wrong, and is found."""
    of_job = RigUse.of_job
    monkeypatch.setattr(RigUse, "of_job", lambda job: replace(of_job(job), pulses_per_revolution=3.0))
    told = nights.judged(nights.night_faults.healthy(1, PRESCRIBED), (0, 0), true)
    assert any("top_speed_rpm" in words for words in told.wrong)
    assert any("curve at" in words for words in told.wrong)


def test_a_supply_that_leaves_its_voltage_for_a_second_is_seen(nights: Any) -> None:
    """On a rig where another meter reads the current the supply is read all the same: an excursion of 1.6 s ends the
    run instead of passing for the motor's scatter; found by night 315."""
    away = {"kind": "supply_pumped_up", "start": "61.542 s", "lasts": "1.570 s", "voltage": "19.9 V"}
    told = nights.lived(nights.night_faults.Night(315, "full, fan", (away,)))
    assert (told.how, told.reason.partition(":")[0]) == ("tripped", "supply_pumped_up")


def test_a_switch_that_fails_short_above_half_duty_is_seen(nights: Any) -> None:
    """A switch that fails short while the drive is at 60 % ends the run in that hold: no speed at full voltage passes
    for one at 60 %; found by night 361."""
    short = {"kind": "switch_short", "start": "20.000 s"}
    told = nights.lived(nights.night_faults.Night(361, PRESCRIBED, (short,)))
    assert (told.how, told.reason.partition(":")[0]) == ("tripped", "switch_short")
    assert "60 %" in told.reason
    assert [duty for _, duty, _, _ in nights.night_numbers.points(told.condition)] == []


def test_a_rig_that_only_gets_through_the_zero_check_is_given_up(nights: Any) -> None:
    """An instrument that is lost again and again, with now and then a zero check between: the time parked goes on, and
    the run ends; found by night 520, which was still at it after four simulated days."""
    gap = {"kind": "minimum_gap", "instrument": "meter", "exchange": 91, "delay": "0.020 s"}
    lost = {"kind": "node_moves", "instrument": "scope", "probability": "11.6 %", "delay": "4.297 s"}
    with nights.benches() as built:
        told = nights.lived(nights.night_faults.Night(520, PRESCRIBED, (gap, lost)))
    assert told.how == "refused"
    assert "parked for 8" in told.reason
    assert built[-1].now < 10 * 3600.0
    assert told.left_on == []


def test_crash_points(reference: Load) -> None:
    """Killed or interrupted at messages and commits spread over a whole run, then resumed: no outcome is lost or
    doubled, the hold in hand is counted as abandoned, and the drive went off."""
    crash = reference("crash_points")
    some = crash.points(EVERY, first=67)
    assert {point.where for point in some} == {"exchange", "interrupt", "before", "after"}
    for point in some:
        made = crash.crashed(point, (0, 0))
        assert (made.lost, made.doubled, made.left_on) == ([], [], []), point
