"""Links gone for seconds, minutes and for good: parked, back, given up; and what each reopened link must pass before
anything moves again. Nothing read across a gap counts."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any, cast

import pytest

from sweeprig.conduct import last_seen
from sweeprig.conduct.attention import Attention
from sweeprig.conduct.states import State
from sweeprig.errors import OffNotProved, RigError, WrongInstrument
from sweeprig.holds import Purpose, Status, Verdict
from sweeprig.link.inprocess import InProcessLink
from sweeprig.logbook import Reader
from sweeprig.logbook.run_folder import LAST_SEEN, LOGBOOK

if TYPE_CHECKING:
    from sweeprig.simbench import Bench
    from tests.conduct.conftest import Bed, Exchange

MakeBed = Callable[[], "Bed"]
Bounds = Callable[..., None]
GONE_AT_S = 40.0
"""Bench time at which things go wrong: a curve hold is under way, the drive on."""


# -- gone for long ---------------------------------------------------------------------------------------------------


def test_an_instrument_that_is_away_for_twenty_minutes(make_bed: MakeBed) -> None:
    """Row A15: The port vanishes for 20 min: the hold in hand is discarded, the run is parked with the drive off, tries
    again after 1, 2, 4, … min, comes back with a new session, repeats that hold and finishes the sweep."""
    bed = make_bed()
    bed.add_fault(GONE_AT_S, "node_moves", "meter", delay="20 min")
    assert bed.start().ending.state is State.FINISHED
    outcomes = bed.whole()
    (lost,) = [outcome for outcome in outcomes if outcome.status is Status.DISCARDED]
    assert lost.began < GONE_AT_S < lost.ended
    assert any(o.hold.same_setting(lost.hold) and o.status is Status.DONE for o in outcomes[lost.number :])
    parked = bed.told("state", state=State.PARKED.words)
    assert [event.data["next_try_s"] for event in parked] == [60.0, 120.0, 240.0, 480.0, 960.0]
    assert not any(event.data["drive_may_be_on"] for event in parked)
    back = [event.at for event in bed.events if event.kind == "link" and "is back" in str(event.data["what"])]
    assert GONE_AT_S + 1200.0 <= back[0] <= GONE_AT_S + 1200.0 + 960.0 + 60.0
    assert bed.nothing_on_between(lost.ended, back[0])
    assert outcomes[-1].session == len(parked) + 1
    assert outcomes[lost.number].hold.purpose is Purpose.ZERO  # warm-up and all: a new session


def test_an_instrument_that_never_comes_back(make_bed: MakeBed, short: Bounds, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row A15: Away for longer than `park_gives_up_s` (here 2 h): exit 3, the text says for how many hours and which
    instrument, `last-seen` and the notice say so too, the drive is off all the time, and the run can be resumed."""
    short(park_gives_up_s=7200.0)
    notices: list[tuple[str, str]] = []
    monkeypatch.setattr(Attention, "_tell", lambda _, kind, title, __: notices.append((kind, title)))
    bed = make_bed()
    bed.before = lost_between(bed, "supply", GONE_AT_S, 4.0 * 3600.0)
    with pytest.raises(RigError) as caught:
        bed.start()
    assert caught.value.exit_code == 3
    hours = (bed.bench.now - bed.told("state", state=State.PARKED.words)[0].at) / 3600.0
    assert 2.0 <= hours <= 2.6
    assert f"parked for {hours:.1f} h, the rig did not come back and is given up: supply: " in str(caught.value)
    seen = last_seen.read(bed.path / LAST_SEEN)
    assert seen is not None
    assert (seen.state, seen.text) == ("given up", str(caught.value))
    assert notices[0][0] == "park"
    assert notices[-1] == ("give_up", f"given up: {caught.value}")
    off_by = min(one.at for one in bed.bench.record if one.what == "drive_off" and one.at > GONE_AT_S)
    assert bed.nothing_on_between(off_by, bed.bench.now + 1.0)
    bed.calm()
    assert bed.resume().ending.state is State.FINISHED
    bed.whole()


def lost_between(bed: Bed, name: str, begin: float, end: float) -> Callable[[Exchange], None]:
    """Every message to `name` in this bench time finds the connection closed."""

    def strike(exchange: Exchange) -> None:
        if exchange.name == name and begin <= bed.bench.now < end:
            raise ConnectionError("the cable is out")

    return strike


@pytest.mark.parametrize("begin_s", [0.0, 1.0], ids=["at opening", "in the first hold"])
def test_one_that_is_wrong_from_the_beginning_is_not_parked(make_bed: MakeBed, begin_s: float) -> None:
    """What cannot be used before a single hold was done is told to the person who starts the run, at once."""
    bed = make_bed()
    bed.before = lost_between(bed, "meter", begin_s, 1e9)
    with pytest.raises(RigError, match="meter: "):
        bed.start()
    assert bed.told("state", state=State.PARKED.words) == []
    assert bed.bench.now < 60.0
    bed.assert_off()


# -- what a reopened link must pass ----------------------------------------------------------------------------------


def first_after(log: list[Exchange], place: int, name: str, message: bytes) -> int:
    return next(one.place for one in log if one.place > place and one.name == name and one.message.startswith(message))


@pytest.mark.parametrize(
    ("name", "setting"),
    [("board", b"SYST:COMM:TIM 2000"), ("supply", b"SOUR:CURR "), ("meter", b"SENS:VOLT:DC:APER 0.2")],
)
def test_every_clause_after_a_reopen(make_bed: MakeBed, name: str, setting: bytes) -> None:
    """Row A15: After a closed connection and before the drive is switched on: off to drive and supply, the identity
    query first of all on the new link, settings applied and read back, the event status with its power-on bit asked,
    off proved by voltage, current and rotor; then the discarded hold again."""
    bed = make_bed()
    struck: list[int] = []

    def strike(exchange: Exchange) -> None:
        # a question in the middle of an exposure
        if not struck and exchange.name == name and bed.bench.now > GONE_AT_S and exchange.moment == "settling":
            struck.append(exchange.place)
            bed.bench.ports[name].port.close()  # type: ignore[attr-defined]  # the tapped one
            raise ConnectionError("closed by the peer")

    bed.before = strike
    assert bed.start().ending.state is State.FINISHED
    (place,) = struck
    again = first_after(bed.log, place, "board", b"OUTP ON")
    between = [one for one in bed.log if place < one.place < again]
    assert any(one.name == "board" and one.message == b"OUTP OFF\n" for one in between)
    assert any(one.name == "supply" and one.message == b"OUTP OFF\n" for one in between)
    mine = [one.message for one in between if one.name == name]
    while mine[0].startswith(b"OUTP OFF"):
        del mine[0]  # blind: the one exception
    assert mine[0] == b"*IDN?\n"
    identity = first_after(bed.log, place, name, b"*IDN?")
    applied = first_after(bed.log, identity, name, setting)
    read_back = first_after(bed.log, applied, name, setting.split(b" ")[0] + b"?")
    status = first_after(bed.log, identity, name, b"*ESR?")
    assert max(read_back, status) < again
    proof = {one.name for one in between if one.place > status and one.message.startswith((b"READ?", b"FETC", b"MEAS"))}
    assert proof == {"meter", "board", "supply"}
    proved = next(event for event in bed.told("off", proved=True) if event.at > GONE_AT_S)
    outcomes = bed.whole()
    (lost,) = [outcome for outcome in outcomes if outcome.status is Status.DISCARDED]
    assert lost.verdict is Verdict.UNDECIDED
    assert outcomes[lost.number].began >= proved.at
    assert outcomes[lost.number].hold.same_setting(lost.hold)


def test_nothing_read_across_a_gap_counts(make_bed: MakeBed) -> None:
    """Rows A6 and A15: Each link is lost in turn, in the middle of an answer whose rest comes late: no hold that counts
    has a gap in it, and every reading of one was taken within it, on links that were up all the time."""
    bed = make_bed()
    bed.faults = {("meter", 60): "split_late", ("supply", 90): "split_late", ("board", 200): "closed"}
    assert bed.start().ending.state is State.FINISHED
    assert len(bed.struck) == 3
    bed.whole()
    gaps = [event.at for event in bed.events if event.kind == "link"]
    assert len(gaps) >= 4
    reader = Reader(bed.path / LOGBOOK)
    for outcome in reader.outcomes():
        if outcome.status is Status.DONE:
            assert not any(outcome.began < at < outcome.ended for at in gaps)
            assert all(outcome.began <= one.at <= outcome.ended for one in reader.readings(outcome.number))


def test_another_instrument_after_a_reopen(make_bed: MakeBed) -> None:
    """Row A15: Another serial number behind the same address ends the run: it is never parked for, and stays off."""
    bed = make_bed()
    bed.add_fault(GONE_AT_S, "node_moves", "meter", delay="3 s")
    bed.add_fault(GONE_AT_S, "identity_changed", "meter", lasts="10 h", text="SIM4711")
    with pytest.raises(WrongInstrument, match="SIM4711 instead of"):
        bed.start()
    assert bed.told("state", state=State.PARKED.words) == []
    bed.assert_off()


def test_settings_that_do_not_take_after_a_reopen(make_bed: MakeBed) -> None:
    """Row A17: An instrument that restarted and then ignores its settings for five minutes: no hold is done before it
    reads back what was set; then the sweep goes on."""
    bed = make_bed()
    bed.add_fault(GONE_AT_S, "restart", "meter")
    bed.add_fault(GONE_AT_S, "local_mode", "meter", lasts="300 s")
    assert bed.start().ending.state is State.FINISHED
    assert bed.told("state", state=State.PARKED.words)
    ended = GONE_AT_S + 300.0
    assert not [o for o in bed.whole() if o.status is Status.DONE and o.ended > GONE_AT_S and o.began < ended]


def test_off_is_proved_before_anything_moves_again(make_bed: MakeBed, short: Bounds) -> None:
    """Row D2: When the link is back the meter still reads the supply's voltage at the motor: no hold begins until it
    does not; here never, so that the run is given up with OffNotProved, which names the channel."""
    short(park_gives_up_s=300.0)
    bed = make_bed()
    bed.add_fault(GONE_AT_S, "node_moves", "board", delay="5 s")

    def built(bench: Bench) -> None:
        bench.ports["meter"] = cast(Any, Live(bench, bench.ports["meter"]))

    bed.on_built = built
    with pytest.raises(OffNotProved, match=r"parked for .* h.*meter\.volts reads 12 V") as caught:
        bed.start()
    assert caught.value.exit_code == 3
    assert max(event.at for event in bed.told("hold_began")) < GONE_AT_S
    assert bed.nothing_on_between(GONE_AT_S, bed.bench.now + 1.0)


def test_a_switch_that_failed_during_the_gap(make_bed: MakeBed) -> None:
    """Row D2: A switch that failed short while a link was gone does not show with the supply off, nor at a duty near
    100 %. The first hold behind the gap looks with the supply on and the drive off: the run trips before it drives."""
    bed = make_bed()
    sweep = bed.job.parent / "short.toml"
    sweep.write_text(sweep.read_text("utf-8").replace('["60 %", "20 %", "12 %"]', '["95 %", "90 %", "85 %"]'), "utf-8")
    bed.add_fault(GONE_AT_S, "node_moves", "board", delay="5 s")
    with (bed.job.parent / "shelter-bench.toml").open("a", encoding="utf-8") as rig:
        rig.write(f'\n[[simulated_faults]]\nkind = "switch_short"\nstart = "{GONE_AT_S + 1.0:g} s"\n')
    ending = bed.start().ending
    assert ending.state is State.TRIPPED
    assert "switch_short" in ending.reason
    assert not [o for o in bed.outcomes if o.status is Status.DONE and o.ended > GONE_AT_S + 1.0]
    assert max(one.at for one in bed.bench.record if one.what == "drive_on") < GONE_AT_S
    bed.assert_off()


class Live:
    """A meter's port: after the gap its readings are 12 V, whatever the bench does."""

    def __init__(self, bench: Bench, port: Any) -> None:
        self.bench, self.port = bench, port

    def __getattr__(self, name: str) -> Any:
        return getattr(self.port, name)

    def write(self, data: bytes) -> None:
        self.asked = data
        self.port.write(data)

    def read(self) -> bytes:
        raw = bytes(self.port.read())
        return b"+1.2E+01\n" if raw and self.asked == b"READ?\n" and self.bench.now > GONE_AT_S + 1.0 else raw


def test_a_port_that_only_looks_alive_is_opened_anew(make_bed: MakeBed, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row A15: First resynchronise, then reopen: a serial port is drained; one that still says nothing is closed and
    opened once more, and that brings it back. Draining alone would never."""

    def drains(link: InProcessLink, deadline: float) -> None:
        if link._is_open:
            link._fall_silent(deadline)
        else:
            link.open(deadline)

    monkeypatch.setattr(InProcessLink, "resynchronise", drains)
    bed = make_bed()
    handles: list[DeadHandle] = []

    def built(bench: Bench) -> None:
        handles.append(DeadHandle(bench.ports["meter"], 100))
        bench.ports["meter"] = cast(Any, handles[0])

    bed.on_built = built
    assert bed.start().ending.state is State.FINISHED
    assert handles[0].opened == 2
    assert len([o for o in bed.whole() if o.status is Status.DISCARDED]) == 1


class DeadHandle:
    """A port whose first handle swallows everything from the `first` message on, without an error."""

    def __init__(self, port: Any, first: int) -> None:
        self.port, self.first, self.count, self.opened = port, first, 0, 0

    def __getattr__(self, name: str) -> Any:
        return getattr(self.port, name)

    def open(self) -> None:
        self.opened += 1
        self.port.open()

    def write(self, data: bytes) -> None:
        self.count += 1
        if self.opened > 1 or self.count < self.first:
            self.port.write(data)
