"""Every instrument fails in every way at seeded moments. No wrong verdict counts as done, and the drive goes off."""

from __future__ import annotations

import os
import random
from collections import Counter
from collections.abc import Callable
from typing import TYPE_CHECKING

import pytest

from sweeprig.conduct.as_set import changed, restarted
from sweeprig.conduct.states import Event, Orders, State
from sweeprig.errors import InstrumentRefused
from sweeprig.holds import Outcome, Purpose, Status, Verdict
from sweeprig.opened import open_run

if TYPE_CHECKING:
    from tests.conduct.conftest import Bed, Exchange

MakeBed = Callable[[], "Bed"]
Logs = dict[str, "list[Exchange]"]
SEED = 20261201
TIMES = 12 if os.environ.get("FULL") else 1
"""FULL=1 takes more places; the everyday selection has every fault on every instrument."""
HARMLESS = ("split", "doubled_terminator")
"""What a link takes in its stride: nothing is discarded."""
FAULTS = (
    "no_reply", "late", "split", "split_late", "garbage", "non_ascii", "doubled_terminator", "closed", "sentinel",
    "one_value_more", "one_value_less", "restart",
)  # fmt: skip
INSTRUMENTS = ("board", "supply", "meter", "scope")
DRIVEN = (Purpose.CURVE, Purpose.STALL, Purpose.START, Purpose.RUN_IN)
BY_THE_PROGRAM = ("OUTP OFF", "OUTP ON")


def wrong(bed: Bed, outcomes: list[Outcome]) -> list[str]:
    """Done holds of the bed's latest session whose verdict contradicts what the bench's drive and rotor really did, and
    holds without a verdict that do not say why."""
    found = [f"hold {o.number} without a reason" for o in outcomes if o.status is not Status.DONE and not o.reason]
    for outcome in outcomes:
        if outcome.status is Status.DONE and outcome.hold.purpose in DRIVEN and outcome.number in bed.at_end:
            now = bed.at_end[outcome.number][0]
            by_itself = [
                happened
                for happened in bed.bench.record
                if outcome.began <= happened.at <= now and happened.why not in BY_THE_PROGRAM
            ]
            if by_itself or _contradicted(bed, outcome):
                found.append(f"hold {outcome.number} counts as {outcome.verdict}: {by_itself}, {bed.at_end}")
    return found


def _contradicted(bed: Bed, outcome: Outcome) -> bool:
    """The rotor at the end of the hold, some exchanges (below 0.3 s) after the last reading. By definition one that
    turns leaves no gap longer than max(3 intervals, 0.5 s); the fan gives 2 pulses a revolution."""
    now, last_edge = bed.at_end[outcome.number]
    still_s = now - last_edge
    if outcome.verdict in (Verdict.TURNING, Verdict.STARTED):
        rpm = outcome.means["board.speed"].value
        assert rpm is not None
        return still_s > max(3.0 * 60.0 / (2.0 * rpm), 0.5) + 0.3
    return outcome.verdict is Verdict.STOPPED and still_s < 0.5


def undisturbed(make_bed: MakeBed, logs: Logs) -> list[Exchange]:
    if "undisturbed" not in logs:
        bed = make_bed()
        bed.start()
        logs["undisturbed"] = bed.log
    return logs["undisturbed"]


def one_each(log: list[Exchange], rng: random.Random) -> list[Exchange]:
    """An exchange of each instrument, far apart and after the run-in: one that fails three times rightly calls for a
    person."""
    log = log[next(index for index, exchange in enumerate(log) if exchange.moment == "lead") :]
    eighth = len(log) // 8
    chosen = []
    for quarter, name in enumerate(rng.sample(INSTRUMENTS, len(INSTRUMENTS))):
        part = log[2 * quarter * eighth : (2 * quarter + 1) * eighth]
        chosen.append(rng.choice([exchange for exchange in part if exchange.name == name]))
    return chosen


@pytest.mark.parametrize("fault", FAULTS)
def test_one_fault_of_each_instrument(make_bed: MakeBed, logs: Logs, fault: str) -> None:
    """Row C17: Each instrument suffers the fault once, at a seeded exchange of any moment: the run ends by itself with
    the sweep done, no wrong verdict counts, every discarded hold says why, and drive and supply are off."""
    calm = undisturbed(make_bed, logs)
    rng = random.Random(f"{SEED} {fault}")
    for _ in range(TIMES):
        bed = make_bed()
        bed.faults = {(exchange.name, exchange.own): fault for exchange in one_each(calm, rng)}
        assert bed.start().ending.state is State.FINISHED
        assert len(bed.struck) >= 3
        outcomes = open_run(bed.path).outcomes
        assert wrong(bed, outcomes) == []
        count = Counter(outcome.status for outcome in outcomes)
        # A fault outside of the holds discards none; a late reply may still arrive in the next hold.
        assert count[Status.DISCARDED] <= (0 if fault in HARMLESS else 2 * len(bed.struck))
        assert count[Status.TRIPPED] == count[Status.ABANDONED] == 0
        assert not bed.drive_is_on()
        assert not bed.supply_is_on()


def until(bed: Bed, purpose: Purpose) -> None:
    """A session that ends by order after its first hold of a purpose."""
    orders, listen = Orders(), bed.listen

    def told(event: Event) -> None:
        listen(event)
        orders.finish = orders.finish or (event.kind == "hold_began" and event.data["purpose"] == str(purpose))

    bed.listen = told  # type: ignore[method-assign]  # what the run tells
    assert bed.start(orders).ending.state is State.PARKED


@pytest.mark.parametrize("fault", [fault for fault in FAULTS if fault not in HARMLESS])
@pytest.mark.parametrize("moment", ["opening", "proving off", "closing"])
def test_a_fault_outside_of_the_holds(make_bed: MakeBed, fault: str, moment: str) -> None:
    """One bad reply or restart while a session opens, proves off or closes does not end the night: it is asked again,
    and off is proved."""
    calm = make_bed()
    until(calm, Purpose.ZERO)
    there = [exchange for exchange in calm.log if exchange.moment == moment and b"?" in exchange.message]
    for exchange in random.Random(f"{SEED} {moment} {fault}").sample(there, 2):
        bed = make_bed()
        bed.faults = {(exchange.name, exchange.own): fault}
        until(bed, Purpose.ZERO)
        assert [struck for struck, _ in bed.struck] == [fault]
        assert [event.data["proved"] for event in bed.events if event.kind == "off"][-1] is True
        assert not bed.drive_is_on()
        assert not bed.supply_is_on()


@pytest.mark.parametrize("name", INSTRUMENTS)
def test_a_fault_in_the_run_in(make_bed: MakeBed, name: str) -> None:
    """No single fault in the zero check or the run-in ends a session: it is done again, and the curve begins."""
    calm = make_bed()
    until(calm, Purpose.CURVE)
    there = [e for e in calm.log if e.name == name and e.moment in ("rest", "exposure") and b"?" in e.message]
    rng = random.Random(f"{SEED} {name}")
    for fault in FAULTS:
        exchange = rng.choice(there)
        bed = make_bed()
        bed.faults = {(name, exchange.own): fault}
        until(bed, Purpose.CURVE)
        assert [struck for struck, _ in bed.struck] == [fault]
        assert wrong(bed, open_run(bed.path).outcomes) == []
        assert not bed.drive_is_on()
        assert not bed.supply_is_on()


def restarted_in(bed: Bed, name: str, purpose: Purpose) -> Outcome:
    """Run the bed with a restart of one instrument at the 3rd beat of the first hold of a purpose; that hold."""
    listen, beats, numbers = bed.listen, [0], []

    def told(event: Event) -> None:
        listen(event)
        if event.kind == "hold_began" and event.data["purpose"] == str(purpose):
            numbers.append(event.data["number"])
        if event.kind == "beat" and numbers[:1] == [event.data["number"]]:
            beats[0] += 1
            if beats[0] == 3:
                bed.bench.instruments[name].power_on()

    bed.listen = told  # type: ignore[method-assign]  # what the run tells
    assert bed.start().ending.state is State.FINISHED
    (hold,) = [o for o in open_run(bed.path).outcomes if o.number == numbers[0]]
    return hold


@pytest.mark.parametrize("purpose", [Purpose.ZERO, Purpose.CURVE, Purpose.STALL])
@pytest.mark.parametrize(
    ("name", "setting"),
    [
        ("board", b"SYST:COMM:TIM 2000\n"),
        ("supply", b"SOUR:VOLT 12\n"),
        ("meter", b"SENS:VOLT:DC:APER 0.2\n"),
        ("scope", b"*CLS\n"),
    ],
)
def test_a_restart_discards_the_hold(
    make_bed: MakeBed, logs: Logs, name: str, setting: bytes, purpose: Purpose
) -> None:
    """Row A17: An instrument that restarts in a hold, also with the drive off, has lost its settings: that hold alone
    is discarded, with the instrument's name, and the settings are applied again before the next one. A scope, of
    which nothing is set, is known by its power-on bit."""
    bed = make_bed()
    hold = restarted_in(bed, name, purpose)
    assert (hold.status, hold.verdict) == (Status.DISCARDED, Verdict.UNDECIDED)
    assert hold.reason.startswith(f"{name}: ")
    assert "restarted" in hold.reason
    outcomes = open_run(bed.path).outcomes
    assert [o.number for o in outcomes if o.status is Status.DISCARDED] == [hold.number]
    assert wrong(bed, outcomes) == []
    calm = undisturbed(make_bed, logs)
    assert [e.message for e in bed.log].count(setting) > [e.message for e in calm].count(setting)


def test_the_power_on_bit_is_a_restart() -> None:
    """Bit 7 of the event status register (IEEE 488.2, 11.5.1; from memory) is a restart; no other bit, no register, or
    one that cannot be read is none."""
    for status in ("128", "129", "255"):
        with pytest.raises(InstrumentRefused, match=r"board: it restarted.*event status"):
            restarted("board", {"event_status": status})
    for settings in ({"event_status": "127"}, {"event_status": "0"}, {"event_status": "odd"}, {}):
        restarted("board", settings)


def test_a_changed_setting_is_seen() -> None:
    """Every setting seen before must read the same; the event register, which clears itself, is left out."""
    changed("meter", {"range": "100", "event_status": "128"}, {"range": "100", "event_status": "0", "new": "1"})
    with pytest.raises(InstrumentRefused, match=r"meter: the setting range changed.*10 \(allowed: 100\)"):
        changed("meter", {"range": "100"}, {"range": "10"})
    with pytest.raises(InstrumentRefused, match="None"):
        changed("meter", {"range": "100"}, {})
