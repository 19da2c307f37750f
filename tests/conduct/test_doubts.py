"""Whole short runs on a bench where something of the rig fails: switch, supply, leads, tachometer, a meter. No wrong
verdict counts, causes are named, and what can hurt ends the run. Healthy benches are not doubted."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import pytest

from sweeprig.conduct.states import State
from sweeprig.holds import Outcome, Purpose, Status, Verdict
from sweeprig.job import shipped
from sweeprig.launch import start
from sweeprig.opened import open_run
from tests.conduct import conftest

if TYPE_CHECKING:
    from tests.conduct.conftest import Bed, Exchange, Tapped

MakeBed = Callable[[], "Bed"]


class Killed(BaseException):
    """Stands for the end of the process: nothing in the program may catch it."""


_CALM: dict[str, Any] = {}
"""The undisturbed run: on the simulated bench it is the same every time."""


def calm(make_bed: MakeBed) -> tuple[list[Outcome], list[Exchange]]:
    if not _CALM:
        bed = make_bed()
        assert bed.start().ending.state is State.FINISHED
        _CALM.update(outcomes=open_run(bed.path).outcomes, log=bed.log)
    return _CALM["outcomes"], _CALM["log"]


def struck_hold(outcomes: list[Outcome], which: str) -> Outcome:
    """A hold of the undisturbed run that the fault will strike."""
    done = {
        "zero": (Purpose.ZERO, Verdict.STOPPED), "curve": (Purpose.CURVE, Verdict.TURNING),
        "stall": (Purpose.STALL, Verdict.TURNING), "start": (Purpose.START, Verdict.STARTED),
    }  # fmt: skip
    return next(each for each in outcomes if (each.hold.purpose, each.verdict) == done[which])


def with_fault(bed: Bed, kind: str, start_s: float, lasts_s: float | None) -> None:
    rig = bed.job.parent / "shelter-bench.toml"
    lasts = "" if lasts_s is None else f'lasts = "{lasts_s} s"\n'
    fault = f'\n[[simulated_faults]]\nkind = "{kind}"\nstart = "{start_s:.2f} s"\n{lasts}'
    rig.write_text(rig.read_text("utf-8") + fault, "utf-8")


def moment_of(hold: Outcome, where: str) -> float:
    exposure_began = hold.ended - hold.exposed_s
    return {
        "lead": hold.began + 0.3, "before": exposure_began - 0.3, "early": exposure_began + 2.0,
        "middle": exposure_began + 0.6 * hold.exposed_s,
    }[where]  # fmt: skip


def test_a_healthy_run_is_not_doubted(make_bed: MakeBed) -> None:
    """No hold of the undisturbed short run is discarded."""
    outcomes, _ = calm(make_bed)
    assert {outcome.status for outcome in outcomes} == {Status.DONE}
    assert {Verdict.TURNING, Verdict.STOPPED, Verdict.STARTED} <= {outcome.verdict for outcome in outcomes}


@pytest.mark.parametrize("name", ["full-bench", "four-wire"])
def test_healthy_shipped_benches_are_not_doubted(tmp_path: Path, name: str) -> None:
    """The short ones of the shipped jobs run without a doubt and without a rest: every hold is done."""
    outcomes = open_run(start(shipped(name), tmp_path).path).outcomes
    assert {outcome.status for outcome in outcomes} == {Status.DONE}
    assert Purpose.REST not in {outcome.hold.purpose for outcome in outcomes}


@pytest.mark.parametrize(
    ("kind", "which", "where", "rule"),
    [
        ("switch_short", "zero", "early", "switch_short"), ("switch_short", "start", "lead", "switch_short"),
        ("switch_short", "stall", "middle", "switch_short"),
        ("supply_pumped_up", "stall", "middle", "supply_pumped_up"),
        ("supply_pumped_up", "start", "lead", "supply_pumped_up"),
    ],
)  # fmt: skip
def test_what_can_hurt_ends_the_run(make_bed: MakeBed, kind: str, which: str, where: str, rule: str) -> None:
    """A switch that fails short, also with the drive off, and a supply that is pumped up trip. The trip has readings
    and a reaction time that the bench's own record confirms, and drive and supply are off."""
    hold = struck_hold(calm(make_bed)[0], which)
    bed = make_bed()
    with_fault(bed, kind, min(moment_of(hold, where), hold.ended - 1.0), None)
    launched = bed.start()
    assert launched.ending.state is State.TRIPPED
    assert launched.ending.reason.startswith(f"{rule}: ")
    last = open_run(bed.path).outcomes[-1]
    assert (last.number, last.status, last.reason) == (hold.number, Status.TRIPPED, launched.ending.reason)
    (trip,) = [event for event in bed.events if event.kind == "trip"]
    readings = cast("list[dict[str, Any]]", trip.data["readings"])
    reaction_s = cast(float, trip.data["reaction_s"])
    assert trip.data["rule"] == rule
    assert len(readings) >= 2
    assert f"off confirmed {reaction_s:.2f} s later" in last.reason
    off_at = min(each.at for each in bed.bench.record if each.what == "supply_off" and each.at >= readings[-1]["at"])
    assert 0.0 <= off_at - readings[-1]["at"] <= reaction_s <= 2.0
    assert not bed.drive_is_on()
    assert not bed.supply_is_on()


@pytest.mark.parametrize(
    ("kind", "lasts_s", "which", "where", "cause"),
    [
        ("switch_open", 2.0, "stall", "middle", "switch_open"),
        ("switch_open", 4.0, "curve", "early", "voltage_impossible|switch_open"),
        ("switch_open", 7.0, "start", "before", "switch_open"),
        ("supply_dropout", 2.0, "stall", "middle", "switch_open|supply_too_low"),
        ("reverse_rotation", 6.0, "curve", "early", "leads_reversed"),
        ("broken_tach_wire", 2.0, "stall", "middle", "rotation_contradicted"),
        ("broken_tach_wire", 4.0, "curve", "early", "rotation_contradicted"),
        ("broken_tach_wire", 7.0, "start", "before", "rotation_contradicted"),
    ],
)
def test_what_spoils_a_hold_discards_it(
    make_bed: MakeBed, kind: str, lasts_s: float, which: str, where: str, cause: str
) -> None:
    """The hold that was struck is discarded with the cause, not taken for a motor that stopped or did not start; the
    rig is healed, the hold is asked for again, and the run finishes."""
    outcomes, _ = calm(make_bed)
    hold = struck_hold(outcomes, which)
    bed = make_bed()
    with_fault(bed, kind, moment_of(hold, where), lasts_s)
    assert bed.start().ending.state is State.FINISHED
    found = open_run(bed.path).outcomes
    spoilt = next(each for each in found if each.number == hold.number)
    assert (spoilt.status, spoilt.verdict) == (Status.DISCARDED, Verdict.UNDECIDED)
    assert re.match(f"({cause}): ", spoilt.reason)
    assert sum(each.status is Status.DONE and each.hold.same_setting(hold.hold) for each in found) >= 1
    proved = [event.at for event in bed.events if event.kind == "off" and event.data["proved"]]
    assert any(spoilt.ended <= at <= spoilt.ended + 60.0 for at in proved)
    assert not bed.drive_is_on()


def test_six_doubts_in_a_row_park(make_bed: MakeBed) -> None:
    """Leads that stay swapped: every hold is doubted, and after six the run parks with the reason."""
    began = struck_hold(calm(make_bed)[0], "curve").began
    bed = make_bed()
    with_fault(bed, "reverse_rotation", began, None)
    ending = bed.start().ending
    assert ending.state is State.PARKED
    assert "6 holds in a row" in ending.reason
    assert "leads_reversed" in ending.reason


def test_one_wild_reading_is_no_data(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """The meter says a thousand times too much, once, in the run-in: the hold is done, that reading is flagged and has
    no value but its text, and the mean is that of the others."""
    outcomes, log = calm(make_bed)
    wild = [each for each in log if each.name == "meter" and b"READ" in each.message and each.moment == "exposure"][30]

    def thousandfold(_: Tapped, raw: bytes) -> bytes:
        return b"%+.8E\n" % (float(raw) * 1000.0)

    monkeypatch.setitem(conftest.FAULTS, "thousandfold", thousandfold)
    bed = make_bed()
    bed.faults = {("meter", wild.own): "thousandfold"}
    assert bed.start().ending.state is State.FINISHED
    found = open_run(bed.path)
    run_in, before = found.outcomes[1], outcomes[1]
    flagged = [each for each in found.contents.readings(run_in.number) if "no_data:jump" in each.flags]
    assert [(each.channel, each.value) for each in flagged] == [("meter.volts", None)]
    assert "E+03" in flagged[0].raw
    assert (run_in.hold.purpose, run_in.status) == (Purpose.RUN_IN, Status.DONE)
    volts, known = run_in.means["meter.volts"], before.means["meter.volts"]
    assert volts.value == pytest.approx(known.value, abs=5.0 * known.u)


def test_a_frozen_meter_is_doubted(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Through the curve's first two duties the meter repeats one plausible voltage: the second is doubted as frozen,
    and once the meter reads again, the run goes on to its end."""
    _, log = calm(make_bed)
    there = [each for each in log if each.name == "meter" and b"READ" in each.message and each.moment == "settling"]

    def frozen(port: Tapped, raw: bytes) -> bytes:
        own = next(each for each in reversed(port.bed.log) if each.name == "meter")
        return b"+6.90000000E+00\n" if b"READ" in own.message else raw

    monkeypatch.setitem(conftest.FAULTS, "frozen", frozen)
    bed = make_bed()
    bed.faults = {("meter", own): "frozen" for own in range(there[0].own, there[0].own + 50)}
    assert bed.start().ending.state is State.FINISHED
    found = open_run(bed.path).outcomes
    reasons = [each.reason for each in found if each.status is Status.DISCARDED]
    assert any(reason.startswith("frozen: meter.volts says the same 6.9 V") for reason in reasons)


def test_a_resume_after_an_abandoned_start_rests_first(make_bed: MakeBed) -> None:
    """The process is gone in a start trial at high duty: the hold counts as if the rotor had stood locked in all of it,
    so the next session, after its zero check, rests with the drive off before the run-in. How long, by hand: 5 s and at
    most 6 s at 80 % of 12 V where 13.5 V are allowed are 3.16 s and 3.79 s locked; 6 s are allowed."""
    bed = make_bed()
    folder = bed.job.parent
    motor, sweep = folder / "aspirator-fan.toml", folder / "short.toml"
    motor.write_text(motor.read_text("utf-8").replace('rotor_time = "30 s"', 'rotor_time = "6 s"'), "utf-8")
    text = sweep.read_text("utf-8").replace('low = "0 %"', 'low = "80 %"').replace('duty = "60 %"', 'duty = "80 %"')
    sweep.write_text(re.sub("duties = .*", 'duties = ["100 %", "90 %", "80 %"]', text), "utf-8")
    starts = []

    def strike(now: Exchange) -> None:
        held = next((e for e in reversed(bed.events) if e.kind == "hold_began"), None)
        if held is not None and held.data["purpose"] == "start" and now.moment == "exposure":
            starts.append(now)
            if len(starts) >= 30:
                raise Killed

    bed.before, bed.commit = strike, lambda _, when: gone() if len(starts) >= 30 and when == "before" else None
    with pytest.raises(Killed):
        bed.start()
    bed.calm()
    assert bed.resume().ending.state is State.FINISHED
    found = open_run(bed.path).outcomes
    abandoned = next(each for each in found if each.status is Status.ABANDONED)
    assert (abandoned.hold.purpose, abandoned.hold.duty_percent >= 80.0) == (Purpose.START, True)
    second = [each for each in found if each.session == 2][:3]
    assert [each.hold.purpose for each in second] == [Purpose.ZERO, Purpose.REST, Purpose.RUN_IN]
    rest = second[1]
    assert (rest.status, rest.verdict) == (Status.DONE, Verdict.STOPPED)
    part = abandoned.hold.duty_percent / 100.0 * (12.0 / 13.5) ** 2
    since = rest.began_utc - abandoned.ended_utc
    needed = 120.0 * math.log(5.0 * part * math.exp(-since / 120.0) / (6.0 - 6.0 * 0.8 * (12.0 / 13.5) ** 2))
    assert needed <= rest.exposed_s <= needed + 3.0
    on = [each for each in bed.bench.record if each.what == "drive_on" and rest.began < each.at < rest.ended]
    assert on == []


def gone() -> None:
    raise Killed
