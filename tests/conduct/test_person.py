"""A person in the loop: changes by hand, pauses, and requests from another terminal."""

from __future__ import annotations

from pathlib import Path

import pytest

from sweeprig.conduct.requests import KINDS, Requests, ask
from sweeprig.conduct.states import Event, Orders, State
from sweeprig.errors import RunError
from sweeprig.holds import NeedsPerson, Purpose
from sweeprig.job import freeze, load
from sweeprig.launch import Launched, start
from sweeprig.opened import open_run
from sweeprig.schedule import next_hold, preview

LOADS = 'load = ["free air", "duct"]'


@pytest.fixture
def two_loads(short_job: Path) -> Path:
    """A tiny sweep with two loads: a curve of three points each."""
    sweep = short_job.parent / "short.toml"
    text = sweep.read_text("utf-8").replace('duties = ["100 %", "60 %", "30 %", "20 %", "16 %", "14 %", "12 %"]',
                                            'duties = ["100 %", "60 %", "40 %"]')  # fmt: skip
    text = text[: text.index("[stall]")] + '[settle]\ntolerance = "2 %"\n'
    sweep.write_text(text.replace('supply = ["12 V"]', f'supply = ["12 V"]\n{LOADS}'), "utf-8")
    return short_job


class Person:
    """Does what is asked for as soon as it is asked; keeps what happened. `until`: so often, then it orders off."""

    def __init__(self, until: int = 99) -> None:
        self.orders, self.until = Orders(), until
        self.asked: list[str] = []
        self.events: list[Event] = []

    def __call__(self, event: Event) -> None:
        self.events.append(event)
        if event.kind == "state" and event.data["state"] == State.WAITING_FOR_PERSON.words:
            assert not event.data["drive_may_be_on"]
            self.asked.append(str(event.data["reason"]))
            if len(self.asked) > self.until:
                self.orders.off = True
            else:
                self.orders.ready = True


def start_with(person: Person, job: Path, runs: Path, attended: bool = True) -> Launched:
    return start(job, runs, attended=attended, on_event=person, orders=person.orders)


class LatePerson(Person):
    """Says ready only once the run waits: the flag is set between two looks, as a request is."""

    def __call__(self, event: Event) -> None:
        super().__call__(event)
        if self.orders.ready:
            self.orders.ready = False
            self.pending = True


def test_changes_by_hand_wait_for_a_person(two_loads: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Each load is asked for once, drive off; after `ready` a session of its own begins, warm-up and all."""
    from sweeprig.conduct.sessions import _Work

    person = LatePerson()
    wait = _Work._wait

    def comes(self: _Work, seconds: float) -> None:
        wait(self, 0.0 * seconds)
        person.orders.ready = True

    monkeypatch.setattr(_Work, "_wait", comes)
    launched = start_with(person, two_loads, tmp_path / "runs")
    assert launched.ending.state is State.FINISHED
    assert [text.partition(":")[0] for text in person.asked] == [
        "see that the rig is set to",
        "change the rig by hand to",
    ]
    assert "load free air" in person.asked[0]
    assert "load duct" in person.asked[1]
    outcomes = open_run(launched.path).outcomes
    by_session = {s: {o.hold.condition.load for o in outcomes if o.session == s} for s in (2, 3)}
    assert by_session == {2: {"free air"}, 3: {"duct"}}
    for session in (2, 3):
        first = [o.hold.purpose for o in outcomes if o.session == session][:2]
        assert first == [Purpose.ZERO, Purpose.RUN_IN]


def test_nobody_is_waited_for_when_nobody_is_there(two_loads: Path, tmp_path: Path) -> None:
    """An unattended run ends, drive off, where a person is needed; it can be resumed."""
    person = Person(until=0)
    launched = start_with(person, two_loads, tmp_path / "runs", attended=False)
    assert launched.ending.state is State.WAITING_FOR_PERSON
    assert "load free air" in launched.ending.reason


def test_an_order_ends_the_waiting(two_loads: Path, tmp_path: Path) -> None:
    """Off while a person is waited for ends the run, parked."""
    person = Person(until=0)
    launched = start_with(person, two_loads, tmp_path / "runs")
    assert launched.ending.state is State.PARKED
    assert "while the run was parked or waited" in launched.ending.reason
    assert not [o for o in open_run(launched.path).outcomes if o.hold.purpose is Purpose.CURVE]


def test_the_preview_names_every_change(two_loads: Path) -> None:
    """The preview goes on behind a change by hand and says each."""
    night = preview(freeze(load(two_loads)), 0.0)
    assert len(night.persons) == 2
    assert "load duct" in night.persons[1]
    assert night.holds["zero"] == night.holds["run_in"] == 2


def test_the_schedule_asks_again_in_another_session(two_loads: Path) -> None:
    """Whether a load is still set is not known after a resume, so it is asked."""
    plan = freeze(load(two_loads))
    assert plan.by_hand == ("load",)
    decision = next_hold(plan, [], 0.0)
    assert isinstance(decision, NeedsPerson)
    assert decision.hands == plan.set_by_hand(plan.conditions[0])


def test_a_request_sets_a_flag_and_goes_when_it_was_carried_out(tmp_path: Path) -> None:
    """The file of a request stays until the run has done it; that is the answer to whoever asked."""
    (tmp_path / "requests").mkdir()
    orders, times = Orders(), iter(range(100))
    reader = Requests(tmp_path, orders, lambda: float(next(times)))
    files = {kind: ask(tmp_path, kind) for kind in KINDS}
    reader.look()
    assert orders.ready
    assert orders.pause
    assert orders.finish
    assert orders.off
    assert all(file.exists() for file in files.values())
    reader.carried_out("pause", "off")
    assert not files["pause"].exists()
    assert not files["off"].exists()
    assert files["ready"].exists()


def test_stale_requests_are_put_aside(tmp_path: Path) -> None:
    """What was asked when nobody worked on the run is not carried out by the next session."""
    (tmp_path / "requests").mkdir()
    ask(tmp_path, "stop")
    orders = Orders()
    reader = Requests(tmp_path, orders, lambda: 1.0)
    assert reader.clear() == ["stop"]
    reader.look()
    assert not orders.finish


def test_a_folder_that_is_no_run_takes_no_request(tmp_path: Path) -> None:
    """RunError, and nothing is written: also where `requests` is a link to somewhere else."""
    with pytest.raises(RunError, match="no folder of a run"):
        ask(tmp_path, "stop")
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    (tmp_path / "requests").symlink_to(elsewhere)
    with pytest.raises(RunError, match="no folder of a run"):
        ask(tmp_path, "stop")
    assert not list(elsewhere.iterdir())
