"""Every crash point of a short job: the process ends at the k-th message to an instrument, or just before or after the
k-th commit, for every k; the resumed run must lose nothing, double nothing and count the hold in hand as abandoned.

In process: an error that nothing may catch stands for the end, and nothing reaches an instrument or the disk after it.
"""

from __future__ import annotations

import tempfile
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import sweeprig.simbench
from sweeprig.conduct.states import State
from sweeprig.holds import Outcome, Purpose, Status
from sweeprig.launch import resume, start
from sweeprig.logbook import Logbook
from sweeprig.opened import open_run
from sweeprig.simbench import Bench
from sweeprig.simbench.many import many

CONFIGS = Path(__file__).parents[2] / "configs"
HEARTBEAT_S = 2.0
"""Of the board in shelter-bench.toml."""

SWEEP = """
name = "shortest"
pwm = ["1 kHz"]
supply = ["12 V"]
lowest_speed = "60 rpm"
seed = 3
[zero]
time = "1 s"
[run_in]
duty = "60 %"
time = "2 s"
[curve]
duties = ["60 %", "20 %", "14 %"]
least = "1 s"
most = "4 s"
[stall]
search = "ladder"
hold_time = "3 s"
step = "1 %"
holds = 4
relaunch_above = "12 %"
relaunch_time = "2 s"
[start]
search = "ladder"
start_time = "2 s"
rest_time = "1 s"
step = "1 %"
trials = 4
[settle]
tolerance = "2 %"
"""
DATA = (Purpose.CURVE, Purpose.STALL, Purpose.START)
"""Purposes of which each hold is asked for once; zero check and run-in belong to every session."""

INTERRUPTS = 10
"""Of an error with everything still in reach every so-many-th message is enough: the loop above it is the same."""

Where = Literal["exchange", "interrupt", "before", "after"]


class Killed(BaseException):
    """Stands for the end of the process: nothing in the program may catch it."""


@dataclass(frozen=True)
class Point:
    """`exchange`: gone at the k-th message; `interrupt`: an error there, with everything still in reach; `before` and
    `after`: gone just before or after the k-th commit."""

    where: Where
    k: int


@dataclass
class Crashed:
    """What was wrong at this point; all empty where nothing was."""

    point: Point
    lost: list[str] = field(default_factory=list)
    doubled: list[str] = field(default_factory=list)
    left_on: list[str] = field(default_factory=list)
    abandoned: int = 0


@dataclass
class Counts:
    exchanges: int = 0
    commits: int = 0


class Tap:
    """A byte port that asks before each message whether the process still lives."""

    def __init__(self, port: Any, message: Callable[[], None]) -> None:
        self._port, self._message = port, message

    def __getattr__(self, name: str) -> Any:
        return getattr(self._port, name)

    def write(self, data: bytes) -> None:
        self._message()
        self._port.write(data)


@contextmanager
def ending_at(point: Point | None, benches: list[Bench], counts: Counts) -> Iterator[None]:
    """The process ends at that point; with none it only counts."""
    build, transaction = sweeprig.simbench.build, Logbook._transaction
    gone = False

    def message() -> None:
        nonlocal gone
        counts.exchanges += 1
        struck = point is not None and point.where in ("exchange", "interrupt") and counts.exchanges == point.k
        gone = gone or (struck and point is not None and point.where == "exchange")
        if gone or struck:
            raise Killed

    def built(*args: Any, **more: Any) -> Bench:
        bench = build(*args, **more)
        for name, port in list(bench.ports.items()):
            bench.ports[name] = Tap(port, message)  # type: ignore[assignment]  # a byte port
        benches.append(bench)
        return bench

    @contextmanager
    def commit(self: Logbook, *args: Any) -> Iterator[Any]:
        nonlocal gone
        counts.commits += 1
        mine = point is not None and point.k == counts.commits
        gone = gone or (mine and point is not None and point.where == "before")
        if gone:
            raise Killed
        with transaction(self, *args) as connection:
            yield connection
        if mine and point is not None and point.where == "after":
            gone = True
            raise Killed

    sweeprig.simbench.build = built
    Logbook._transaction = commit  # type: ignore[method-assign, assignment]  # put back below
    try:
        yield
    finally:
        sweeprig.simbench.build, Logbook._transaction = build, transaction  # type: ignore[method-assign]  # put back


def write_job(folder: Path) -> Path:
    for part, name in (("rigs/shelter-bench.toml", "rig"), ("motors/prescribed-fan.toml", "motor")):
        (folder / f"{name}.toml").write_text((CONFIGS / part).read_text("utf-8"), "utf-8")
    (folder / "sweep.toml").write_text(SWEEP, "utf-8")
    job = folder / "job.toml"
    job.write_text('title = "short"\nrig = "rig.toml"\nmotor = "motor.toml"\nsweep = "sweep.toml"\n', "utf-8")
    return job


def calm() -> tuple[Counts, dict[Purpose, int]]:
    """How many messages and commits the unbroken run has, and how many holds of each purpose."""
    counts = Counts()
    with tempfile.TemporaryDirectory() as name:
        with ending_at(None, [], counts):
            path = start(write_job(Path(name)), Path(name) / "runs").path
        return counts, done(open_run(path).outcomes)


def done(outcomes: Sequence[Outcome]) -> dict[Purpose, int]:
    found = Counter(outcome.hold.purpose for outcome in outcomes if outcome.status is Status.DONE)
    return {purpose: found[purpose] for purpose in DATA}


def crashed(point: Point, pair: tuple[int, int]) -> Crashed:
    """End the run at that point, resume it, and hold it against what an unbroken one has."""
    del pair
    made, benches = Crashed(point), list[Bench]()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        try:
            with ending_at(point, benches, Counts()):
                start(write_job(folder), folder / "runs")
        except Killed:
            pass
        else:
            raise AssertionError(f"{point} was never reached")
        _off(made, benches[-1] if benches else None, 0.0 if point.where == "interrupt" else HEARTBEAT_S + 0.01)
        path = next((folder / "runs").iterdir())
        before = open_run(path)
        known, in_hand = before.outcomes, [intent.hold.number for intent in before.unfinished]
        if resume(path).ending.state is not State.FINISHED:
            made.lost.append("the resumed run did not finish")
        _compare(made, known, in_hand, path)
    return made


def _off(made: Crashed, bench: Bench | None, within_s: float) -> None:
    """Told by the bench's own record: on at the end, and for how long."""
    if bench is None:
        return
    since = bench.now
    bench.advance(since + within_s)
    last = {each.what.partition("_")[0]: each.what for each in bench.record}
    if last.get("drive") == "drive_on":
        made.left_on.append(f"the drive was on {within_s:g} s after the end of the process at {since:.3f} s")


def _compare(made: Crashed, known: Sequence[Outcome], in_hand: Sequence[int], path: Path) -> None:
    run = open_run(path)
    after = {outcome.number: outcome for outcome in run.outcomes}
    numbers = [outcome.number for outcome in run.outcomes]
    made.lost += [f"hold {old.number} is another one" for old in known if after.get(old.number) != old]
    made.lost += [f"hold {intent.hold.number} has no outcome" for intent in run.unfinished]
    made.doubled += [f"hold {number} twice" for number, times in Counter(numbers).items() if times > 1]
    if numbers != list(range(1, len(numbers) + 1)):
        made.lost.append(f"numbers {numbers}")
    abandoned = [outcome.number for outcome in run.outcomes if outcome.status is Status.ABANDONED]
    made.abandoned = len(abandoned)
    if abandoned != list(in_hand):
        made.lost.append(f"abandoned {abandoned}, in hand at the end {list(in_hand)}")
    for purpose, count in done(run.outcomes).items():
        asked = ASKED[purpose]
        (made.lost if count < asked else made.doubled).extend([f"{purpose}: {count} of {asked}"] * (count != asked))


ASKED = {Purpose.CURVE: 6, Purpose.STALL: 4, Purpose.START: 4}
"""What SWEEP asks for: three duties up and down, four trials each."""


def points(every: int = 1, first: int = 0) -> list[Point]:
    """All of them (of the interrupts every tenth), or every so-many-th of each kind, one of each at least."""
    counts, found = calm()
    assert found == ASKED, found
    messages, commits = range(1, counts.exchanges + 1), range(1, counts.commits + 1)
    kinds = (
        [Point("exchange", k) for k in messages],
        [Point("interrupt", k) for k in messages[::INTERRUPTS]],
        [Point("before", k) for k in commits],
        [Point("after", k) for k in commits],
    )
    return [point for kind in kinds for point in kind[first % min(every, len(kind)) :: every]]


def figures(full: bool, workers: int | None = None) -> Iterator[dict[str, Any]]:
    some = points(1 if full else 20)
    found = many(crashed, some, 0, workers)
    yield {"figure": "crash_points", "value": len(found), "every": 1 if full else 20,
           "by_place": dict(Counter(one.point.where for one in found)),
           "with_a_hold_abandoned": sum(one.abandoned for one in found)}  # fmt: skip
    for name in ("lost", "doubled", "left_on"):
        wrong = [one for one in found if getattr(one, name)]
        shown = [{"where": one.point.where, "k": one.point.k, "what": getattr(one, name)} for one in wrong[:20]]
        yield {"figure": f"crash_{name}", "value": len(wrong), "target": "0", "meets": not wrong, "n": len(found),
               "points": shown}  # fmt: skip
