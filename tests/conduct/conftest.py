"""A run on an in-process bench whose ports and commits a test holds in its hands: raising, faulting, looking.

What really happened is read from the bench itself (its record, its rotor), never from what the run says.
"""

from __future__ import annotations

import math
import re
import sys
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import Any, NamedTuple, cast

import pytest

import sweeprig.simbench
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.states import Event, Orders
from sweeprig.holds import Outcome, Purpose, Status
from sweeprig.launch import Launched, resume, start
from sweeprig.logbook import Logbook
from sweeprig.opened import open_run
from sweeprig.simbench import Bench

MOMENTS: Mapping[str, str] = {
    "open_rig": "opening", "prove_off": "proving off", "switch_off": "switching off", "_turn_at": "lead",
    "_rest": "rest", "_stay_off": "rest", "_settle": "settling", "_expose": "exposure", "_start": "exposure",
    "perform": "other", "open": "opening", "work": "other",
}  # fmt: skip
"""Function of conduct → the moment of a run in which it is at work; the innermost counts."""


def moment() -> str:
    """The moment of the run in which the caller is, told from the functions at work."""
    names = []
    frame: FrameType | None = sys._getframe(1)
    while frame is not None:
        if "/conduct/" in frame.f_code.co_filename and "/tests/" not in frame.f_code.co_filename:
            names.append(frame.f_code.co_name)
        frame = frame.f_back
    if "close" in names:
        return "closing"
    if "heal" in names and "open" not in names:
        return "healing"
    return next((MOMENTS[name] for name in names if name in MOMENTS), "opening")


class Exchange(NamedTuple):
    """One message to an instrument: `place` over all instruments, `own` over this one, from 1."""

    place: int
    own: int
    name: str
    moment: str
    message: bytes


Hook = Callable[[Exchange], None]


class Tapped:
    """A byte port with a hand on it: `bed.before` and `bed.after` see every message, `fault` bends what comes back."""

    def __init__(self, bed: Bed, name: str, port: Any) -> None:
        self.bed, self.name, self.port = bed, name, port
        self.own = 0
        self.held: list[tuple[float, bytes]] = []
        self.bend: Callable[[Tapped, bytes], bytes] | None = None

    def open(self) -> None:
        self.bend = None
        self.port.open()

    def close(self) -> None:
        self.port.close()

    def write(self, data: bytes) -> None:
        self.own += 1
        exchange = self.bed.seen(self.name, self.own, data)
        self.bed.before(exchange)
        fault = self.bed.faults.get((self.name, self.own))
        if fault is not None:
            self.bed.struck.append((fault, exchange))
            self.bend = FAULTS[fault]
            if fault == "restart":
                self.bed.bench.instruments[self.name].power_on()
        self.port.write(data)
        self.bed.after(exchange)

    def next_ready(self) -> float:
        return min((float(self.port.next_ready()), *(at for at, _ in self.held)))

    def read(self) -> bytes:
        raw = self.port.read()
        if raw and self.bend is not None:
            bend, self.bend = self.bend, None
            raw = bend(self, raw)
        now = self.bed.bench.now
        while self.held and self.held[0][0] <= now:
            raw += self.held.pop(0)[1]
        return bytes(raw)

    def hold_back(self, raw: bytes, seconds: float) -> None:
        self.held.append((self.bed.bench.now + seconds, raw))


def _late(port: Tapped, raw: bytes) -> bytes:
    """Behind the two seconds that the adapters wait for most replies, and behind the four of a reading cycle."""
    port.hold_back(raw, 4.5)
    return b""


def _split(port: Tapped, raw: bytes) -> bytes:
    port.hold_back(raw[len(raw) // 2 :], 0.03)
    return raw[: len(raw) // 2]


def _split_late(port: Tapped, raw: bytes) -> bytes:
    """The tail comes after the asker gave up: it must never be read as a value of its own."""
    port.hold_back(raw[len(raw) // 2 :], 4.5)
    return raw[: len(raw) // 2]


def _closed(port: Tapped, raw: bytes) -> bytes:
    port.port.close()
    raise ConnectionError(f"closed by the peer instead of {raw!r}")


def _instead(reply: bytes) -> Callable[[Tapped, bytes], bytes]:
    return lambda _port, _raw: reply


FAULTS: dict[str, Callable[[Tapped, bytes], bytes]] = {
    "no_reply": _instead(b""),
    "late": _late,
    "split": _split,
    "split_late": _split_late,
    "garbage": _instead(b"%&!x7{\n"),
    "non_ascii": lambda _, raw: b"\xb5\xff\x00" + raw,
    "doubled_terminator": lambda _, raw: raw + b"\n",
    "closed": _closed,
    "sentinel": _instead(b"9.9E37\n"),
    "one_value_more": lambda _, raw: raw.rstrip(b"\n") + b",1\n",
    "one_value_less": lambda _, raw: raw.rpartition(b",")[0] + b"\n",
    "restart": lambda _, raw: raw,
}
"""What happens to the reply of one message; a restart happens to the instrument just before it."""


class Bed:
    """One run, start and resumes, with the bench of the latest session in `bench`.

    before, after   called with every message just before and just after it reaches the instrument
    commit          called with (count, "before" or "after") around every transaction of the logbook
    faults          (instrument, its n-th message) → what happens to the reply
    struck          the faults that happened
    log             every exchange
    on_built        called with each session's bench before anything is opened
    at_end          hold → bench time, the rotor's last edge, when its end was told
    """

    def __init__(self, job: Path, runs: Path) -> None:
        self.job, self.runs = job, runs
        self.bench: Bench
        self.events: list[Event] = []
        self.log: list[Exchange] = []
        self.struck: list[tuple[str, Exchange]] = []
        self.faults: dict[tuple[str, int], str] = {}
        self.commits = 0
        self.at_end: dict[int, tuple[float, float]] = {}
        self.on_built: Callable[[Bench], None] = lambda _: None
        self.calm()

    def calm(self) -> None:
        """Nothing more goes wrong."""
        self.before: Hook = lambda _: None
        self.after: Hook = lambda _: None
        self.commit: Callable[[int, str], None] = lambda _, __: None
        self.faults = {}

    def seen(self, name: str, own: int, message: bytes) -> Exchange:
        exchange = Exchange(len(self.log) + 1, own, name, moment(), message)
        self.log.append(exchange)
        return exchange

    def listen(self, event: Event) -> None:
        self.events.append(event)
        if event.kind == "hold_ended":
            plant = self.bench.plant_now()
            number = event.data["number"]
            assert isinstance(number, int)
            self.at_end[number] = (self.bench.now, plant.last_edge_at)

    def built(self, build: Callable[..., Bench], *args: Any, **kw: Any) -> Bench:
        self.bench = build(*args, **kw)
        for name, port in list(self.bench.ports.items()):
            self.bench.ports[name] = Tapped(self, name, port)  # type: ignore[assignment]  # a byte port
        self.on_built(self.bench)
        return self.bench

    def start(self, orders: Orders | None = None) -> Launched:
        return start(self.job, self.runs, on_event=self.listen, orders=orders)

    def resume(self) -> Launched:
        return resume(self.path, on_event=self.listen)

    @property
    def path(self) -> Path:
        (path,) = self.runs.iterdir()
        return path

    def drive_is_on(self) -> bool:
        """As the bench itself has it."""
        last = [happened.what for happened in self.bench.record if happened.what.startswith("drive")]
        return bool(last) and last[-1] == "drive_on"

    def supply_is_on(self) -> bool:
        last = [happened.what for happened in self.bench.record if happened.what.startswith("supply")]
        return bool(last) and last[-1] == "supply_on"

    def off_within(self, seconds: float) -> float:
        """Let the bench alone for so long; how long the drive stayed on, s (infinity: it is still on)."""
        since = self.bench.now
        self.bench.advance(since + seconds)
        if self.drive_is_on():
            return math.inf
        return (
            max((happened.at for happened in self.bench.record if happened.what == "drive_off"), default=since) - since
        )

    def add_fault(self, start: float, kind: str, instrument: str, **more: str) -> None:
        """One more fault of the simulated rig, by bench time, s. Before the run is started."""
        lines = [f'kind = "{kind}"', f'start = "{start:g} s"', f'instrument = "{instrument}"']
        lines += [f'{key} = "{value}"' for key, value in more.items()]
        with (self.job.parent / "shelter-bench.toml").open("a", encoding="utf-8") as rig:
            rig.write("\n[[simulated_faults]]\n" + "\n".join(lines) + "\n")

    def told(self, kind: str, **data: object) -> list[Event]:
        """The events of a kind with these data, so far."""
        return [one for one in self.events if one.kind == kind and all(one.data.get(key) == data[key] for key in data)]

    @property
    def outcomes(self) -> list[Outcome]:
        return open_run(self.path).outcomes

    def whole(self) -> list[Outcome]:
        """The outcomes of a run that has done its sweep: numbered without a gap, every hold concluded, off."""
        run = open_run(self.path)
        assert run.unfinished == []
        assert [outcome.number for outcome in run.outcomes] == list(range(1, len(run.outcomes) + 1))
        done = [outcome.hold.purpose for outcome in run.outcomes if outcome.status is Status.DONE]
        assert [done.count(purpose) for purpose in (Purpose.CURVE, Purpose.STALL, Purpose.START)] == [6, 4, 4]
        self.assert_off()
        return run.outcomes

    def assert_off(self) -> None:
        assert not self.drive_is_on()
        assert not self.supply_is_on()

    def nothing_on_between(self, begin: float, end: float) -> bool:
        return not any(one.what.endswith("_on") and begin < one.at < end for one in self.bench.record)


@pytest.fixture
def short(monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """`short(park_first_s=5)`: a bound for this test only."""

    def patch(**bounds: float) -> None:
        for name, value in bounds.items():
            assert name in BOUNDS
            monkeypatch.setitem(cast(dict[str, float], BOUNDS), name, value)

    return patch


@pytest.fixture(scope="session")
def logs() -> dict[str, list[Exchange]]:
    """Exchanges of undisturbed runs, kept by name: on the simulated bench each is the same every time."""
    return {}


@pytest.fixture
def make_bed(short_job: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[[], Bed]:
    """A fresh run with each call: zero check, run-in, curve at 60, 20 and 12 %, four stall, four start trials."""
    sweep = short_job.parent / "short.toml"
    text = sweep.read_text(encoding="utf-8")
    text = re.sub("duties = .*", 'duties = ["60 %", "20 %", "12 %"]', text)
    sweep.write_text(text.replace("holds = 5", "holds = 4").replace("trials = 5", "trials = 4"), encoding="utf-8")
    build, transaction = sweeprig.simbench.build, Logbook._transaction
    beds: list[Bed] = []

    @contextmanager
    def watched(self: Logbook, *args: Any) -> Iterator[Any]:
        bed = beds[-1]
        bed.commits += 1
        count = bed.commits
        bed.commit(count, "before")
        with transaction(self, *args) as connection:
            yield connection
        bed.commit(count, "after")

    def make() -> Bed:
        beds.append(Bed(short_job, tmp_path / f"runs-{len(beds)}"))
        return beds[-1]

    monkeypatch.setattr(sweeprig.simbench, "build", lambda *args, **kw: beds[-1].built(build, *args, **kw))
    monkeypatch.setattr(Logbook, "_transaction", watched)
    return make
