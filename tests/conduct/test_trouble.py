"""What goes wrong on the bench while a run lasts: silent links, restarts, trips, a full disk. The drive goes off."""

from __future__ import annotations

import math
import sqlite3
from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.conduct.rig import RigUse, open_rig
from sweeprig.conduct.run import run
from sweeprig.conduct.states import Ending, Event, Orders, State
from sweeprig.errors import DiskFull, RigError
from sweeprig.holds import Outcome, Purpose, Status, Verdict
from sweeprig.job import document, freeze, job_hash, load
from sweeprig.logbook import Logbook
from sweeprig.simbench import Bench, build


class Silent:
    """A byte port whose instrument swallows everything written from the `first` to the `last` message."""

    def __init__(self, port: object, first: int, last: int) -> None:
        self.port, self.first, self.last, self.count = port, first, last, 0

    def __getattr__(self, name: str) -> object:
        return getattr(self.port, name)

    def write(self, data: bytes) -> None:
        self.count += 1
        if not self.first <= self.count <= self.last:
            self.port.write(data)  # type: ignore[attr-defined]  # a byte port, by its protocol


class NoisyIdentity(Silent):
    """Silent for one message; and the first identity it tells after that begins with noise."""

    def __init__(self, port: object, first: int) -> None:
        super().__init__(port, first, first)
        self.noise = b""

    def write(self, data: bytes) -> None:
        super().write(data)
        if self.count > self.last and data.startswith(b"*IDN?") and self.noise == b"":
            self.noise = b"#x!"

    def read(self) -> bytes:
        data: bytes = self.port.read()  # type: ignore[attr-defined]  # a byte port, by its protocol
        if data and self.noise not in (b"", b"told"):
            data, self.noise = self.noise + data, b"told"
        return data


class Night:
    """A short job on a bench of its own, with its ports in the test's hands."""

    def __init__(self, job_file: Path, folder: Path) -> None:
        self.job = load(job_file)
        self.bench: Bench = build(self.job)
        self.ports: dict[str, object] = dict(self.bench.ports)
        self.logbook_file = folder / "logbook.sqlite"
        self.events: list[Event] = []
        self.on_event: Callable[[Event], None] = self.events.append

    def work(self) -> Ending:
        text = document(self.job)
        with Logbook.create(self.logbook_file, text, job_hash(text), "test") as logbook:
            session = logbook.begin_session(self.bench.clock.now(), self.bench.clock.utc(), {})
            rig = open_rig(RigUse.of_job(self.job), self.bench.clock, self.ports)
            try:
                return run(freeze(self.job), rig, logbook, session, self.on_event, Orders())
            finally:
                rig.close()

    @property
    def outcomes(self) -> list[Outcome]:
        from sweeprig.logbook import Reader

        return Reader(self.logbook_file).outcomes()

    def drive_is_off(self) -> bool:
        """As the bench itself has it."""
        last = [happened.what for happened in self.bench.record if happened.what.startswith("drive")]
        return not last or last[-1] == "drive_off"


@pytest.fixture
def night(short_job: Path, tmp_path: Path) -> Night:
    return Night(short_job, tmp_path)


@pytest.mark.parametrize("name", ["meter", "supply", "board"])
def test_a_silent_instrument_is_brought_back(night: Night, name: str) -> None:
    """Row A15: One unanswered exchange: hold discarded, link brought back, off proved, the hold asked again."""
    night.ports[name] = Silent(night.bench.ports[name], 150, 150)
    assert night.work().state is State.FINISHED
    discarded = [outcome for outcome in night.outcomes if outcome.status is Status.DISCARDED]
    assert len(discarded) == 1
    assert name in discarded[0].reason
    repeated = [o for o in night.outcomes if o.hold.same_setting(discarded[0].hold) and o.status is Status.DONE]
    assert repeated
    assert any(event.kind == "link" and event.data["instrument"] == name for event in night.events)
    assert night.drive_is_off()


def test_noise_in_an_identity_is_no_other_instrument(night: Night) -> None:
    """An identity that differs from the known one is asked once more before the run is ended for it."""
    port = NoisyIdentity(night.bench.ports["meter"], 150)
    night.ports["meter"] = port
    assert night.work().state is State.FINISHED
    assert port.noise == b"told"


def test_an_instrument_gone_for_good_ends_the_run(night: Night) -> None:
    """Row A15: A board that never answers again: the run gives up with a rig error; what was concluded is kept."""
    night.ports["board"] = Silent(night.bench.ports["board"], 200, 10**9)
    with pytest.raises(RigError):
        night.work()
    assert [o.number for o in night.outcomes] == list(range(1, len(night.outcomes) + 1))
    assert len(night.outcomes) >= 2
    assert night.outcomes[-1].status is Status.DISCARDED


def test_the_heartbeat_stops_a_drive_that_nobody_feeds(night: Night) -> None:
    """Row D2: With the board's line cut the drive goes off within the heartbeat, in the bench's own record."""
    night.ports["board"] = Silent(night.bench.ports["board"], 200, 10**9)
    with pytest.raises(RigError):
        night.work()
    on = max(h.at for h in night.bench.record if h.what == "drive_on")
    off = [h for h in night.bench.record if h.what == "drive_off" and h.at >= on]
    night.bench.advance(night.bench.now + 5.0)
    assert night.drive_is_off()
    assert off
    assert "heartbeat" in off[0].why


def test_a_restarted_board_is_noticed(night: Night) -> None:
    """A board that restarts in a hold: that hold gives no verdict on the motor; it is discarded and repeated."""
    seen = [0]

    def listen(event: Event) -> None:
        night.events.append(event)
        seen[0] += event.kind == "beat"
        if seen[0] == 40:
            seen[0] += 1
            night.bench.instruments["board"].power_on()

    night.on_event = listen
    assert night.work().state is State.FINISHED
    discarded = [outcome for outcome in night.outcomes if outcome.status is Status.DISCARDED]
    assert len(discarded) >= 1
    assert all(o.verdict is not Verdict.STOPPED for o in discarded)
    assert night.drive_is_off()


def test_a_trip_switches_off_at_once(night: Night) -> None:
    """Over-speed in the run-in: tripped, with rule and evidence; the drive is off within two reading cycles."""
    limits = night.job.rig.limits.model_copy(update={"speed": 1500.0})
    night.job = night.job.model_copy(update={"rig": night.job.rig.model_copy(update={"limits": limits})})
    ending = night.work()
    assert ending.state is State.TRIPPED
    last = night.outcomes[-1]
    assert last.status is Status.TRIPPED
    assert "over_speed" in last.reason
    trip = next(event for event in night.events if event.kind == "trip")
    off = max(h.at for h in night.bench.record if h.what == "drive_off")
    assert off <= trip.at
    assert night.drive_is_off()


def test_a_locked_rotor_trips(night: Night) -> None:
    """A rotor that cannot move in a start trial longer than the locked-rotor time: the drive goes off at that time."""
    assert night.job.motor.simulated is not None
    seized = night.job.motor.simulated.model_copy(update={"breakaway_friction_nm": 1.0})
    night.job = night.job.model_copy(update={"motor": night.job.motor.model_copy(update={"simulated": seized})})
    night.bench = build(night.job)
    night.ports = dict(night.bench.ports)
    limits = night.job.rig.limits.model_copy(update={"locked_rotor_time": 2.5})
    night.job = night.job.model_copy(update={"rig": night.job.rig.model_copy(update={"limits": limits})})
    ending = night.work()
    assert ending.state is State.TRIPPED
    assert "locked_rotor" in night.outcomes[-1].reason
    on = max(h.at for h in night.bench.record if h.what == "drive_on")
    off = min(h.at for h in night.bench.record if h.what == "drive_off" and h.at > on)
    # The age counts from the moment the drive went on; a look comes every 50 ms, switching off takes a few exchanges.
    assert 2.4 <= off - on <= 2.9


def test_a_full_disk_switches_off(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row D6: A logbook that cannot be written: DiskFull, the drive off, everything concluded before it kept."""
    conclude = Logbook.conclude

    def full(self: Logbook, outcome: Outcome, *rest: object) -> None:
        if outcome.number == 6:
            self._connection.execute(f"PRAGMA max_page_count = {pages(self._connection)}")
        conclude(self, outcome, *rest)  # type: ignore[arg-type]  # handed through

    monkeypatch.setattr(Logbook, "conclude", full)
    with pytest.raises(DiskFull, match="logbook"):
        night.work()
    assert [outcome.number for outcome in night.outcomes] == [1, 2, 3, 4, 5]
    assert night.drive_is_off()


def pages(connection: sqlite3.Connection) -> int:
    """The pages the file has now: the next new one does not fit."""
    return int(connection.execute("PRAGMA page_count").fetchone()[0])


def test_a_machine_that_slept_discards_the_hold(night: Night, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row D1: UTC that runs away from the monotonic clock: hold discarded, off proved, and the run goes on."""
    clock = night.bench.clock
    real, apart = clock.utc, [0.0]
    monkeypatch.setattr(clock, "utc", lambda: real() + apart[0])

    def listen(event: Event) -> None:
        night.events.append(event)
        if event.kind == "hold_began" and event.data["number"] == 5:
            apart[0] = 3600.0

    night.on_event = listen
    assert night.work().state is State.FINISHED
    discarded = [outcome for outcome in night.outcomes if outcome.status is Status.DISCARDED]
    assert [outcome.number for outcome in discarded] == [5]
    assert "slept" in discarded[0].reason


def test_every_hold_is_told_before_the_drive_moves(night: Night) -> None:
    """The intent is committed before the drive moves: no drive_on in the bench's record outside an intended hold."""
    assert night.work().state is State.FINISHED
    spans = [(outcome.began, outcome.ended) for outcome in night.outcomes]
    for happened in night.bench.record:
        if happened.what == "drive_on":
            assert any(began <= happened.at <= ended for began, ended in spans)
    assert math.isfinite(spans[-1][1])


def test_a_hopeless_rig_parks(short_job: Path, tmp_path: Path) -> None:
    """A rotor that seizes for good: holds are discarded, and after six in a row the run parks with the reason; off."""
    with (short_job.parent / "shelter-bench.toml").open("a", encoding="utf-8") as rig:
        rig.write('\n[[simulated_faults]]\nkind = "seized_rotor"\nstart = "40 s"\nlasts = "10 h"\n')
    night = Night(short_job, tmp_path)
    ending = night.work()
    assert ending.state is State.PARKED
    assert "6 holds in a row" in ending.reason
    held = [outcome for outcome in night.outcomes if outcome.hold.purpose is not Purpose.REST]  # rests lie between
    assert [outcome.status for outcome in held[-6:]] == [Status.DISCARDED] * 6
    assert night.drive_is_off()
