"""Requests from another terminal: what is answered, when, and by whom; and `off` that asks for its proof."""

from __future__ import annotations

import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from sweeprig.clock import SystemClock
from sweeprig.conduct import off as off_module
from sweeprig.conduct import switch_off
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.locks import Holder
from sweeprig.conduct.off import _obeys
from sweeprig.conduct.requests import CONFIRMED, Requests, ask
from sweeprig.conduct.states import Event, Orders
from sweeprig.errors import OffNotProved
from sweeprig.launch import resume, start


@pytest.fixture
def run(tmp_path: Path) -> Path:
    (tmp_path / "requests").mkdir()
    return tmp_path


def test_off_is_answered_in_two_steps(run: Path) -> None:
    """Asked; renamed once drive and supply have confirmed; gone once off is proved. Other requests have one step."""
    requests = Requests(run, Orders(), lambda: 1.0)
    requests.off_confirmed()
    assert not (run / "requests" / CONFIRMED).exists()
    file = ask(run, "off")
    requests.look()
    requests.off_confirmed()
    assert not file.exists()
    assert file.with_name(CONFIRMED).exists()
    requests.carried_out("stop")
    assert file.with_name(CONFIRMED).exists()
    requests.carried_out("off")
    assert list((run / "requests").iterdir()) == []


def test_only_what_was_seen_is_answered(run: Path) -> None:
    """A request that came after the last look is not answered by an end that knew nothing of it."""
    requests = Requests(run, Orders(), lambda: 1.0)
    requests.look()
    file = ask(run, "off")
    requests.carried_out("off", "stop")
    assert file.exists()


class Holding:
    """A holder that answers as a test says, the moment that it sees the request."""

    def __init__(self, run: Path, monkeypatch: pytest.MonkeyPatch, answer: Callable[[Requests], None]) -> None:
        self.said: list[str] = []
        self.requests = Requests(run, Orders(), now=iter(range(10_000)).__next__)
        self.answer, self.wait = answer, off_module._wait_while
        monkeypatch.setattr(off_module, "_wait_while", self._wait_while)
        self.holder = Holder(7, "here", "works on", str(run))

    def _wait_while(self, file: Path, until: float, wall: Any) -> None:
        self.requests.look()
        self.answer(self.requests)
        self.wait(file, until, wall)

    def asked(self) -> str:
        return _obeys(self.holder, SystemClock(), self.said.append)


def test_off_waits_for_the_proof(run: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A holder that confirmed gets the time that a rotor takes; what is waited for is said."""

    def answers(requests: Requests) -> None:
        if requests._confirmed:
            requests.carried_out("off")
        requests.off_confirmed()

    here = Holding(run, monkeypatch, answers)
    assert here.asked() == ""
    assert here.said[0].startswith("ordered off: process 7 on here")
    assert "waiting for the rotor to come to rest" in here.said[1]


def test_a_proof_at_once(run: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The request goes without the step between: obeyed."""
    assert Holding(run, monkeypatch, lambda requests: requests.carried_out("off")).asked() == ""


def test_no_proof_is_no_obeying(run: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A holder that does not confirm, and one that confirms and never proves, have not obeyed; each has its reason."""
    monkeypatch.setitem(BOUNDS, "proof_s", 0.1)
    monkeypatch.setitem(BOUNDS, "obey_s", 0.1)
    assert "did not confirm it within 0.1 s" in Holding(run, monkeypatch, lambda _: None).asked()
    (run / "requests" / "off").unlink()
    here = Holding(run, monkeypatch, lambda requests: requests.off_confirmed())
    assert "gave no proof within 0.1 s" in here.asked()


def test_a_session_without_proof_leaves_the_request(
    short_job: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Ordered off, and off cannot be proved: the request stays, so that whoever asked is not told that it is off."""
    files: list[Path] = []
    prove = switch_off.prove_off

    def asks(event: Event) -> None:
        if event.kind == "hold_began" and event.data["number"] == 3:
            (folder,) = (tmp_path / "runs").iterdir()
            files.append(ask(folder, "off"))

    def fails(rig: Any) -> Any:
        if files:
            raise OffNotProved("the meter still reads 5 V")
        return prove(rig)

    monkeypatch.setitem(BOUNDS, "requests_s", 0.0)
    monkeypatch.setattr("sweeprig.conduct.run.prove_off", fails)
    monkeypatch.setattr("sweeprig.conduct.heal.prove_off", fails)
    with pytest.raises(OffNotProved, match="5 V"):
        start(short_job, tmp_path / "runs", on_event=asks)
    assert files[0].exists() or files[0].with_name(CONFIRMED).exists()


def test_old_requests_are_put_aside_before_the_run_is_named(short_job: Path, tmp_path: Path) -> None:
    """A resume forgets what was asked when nobody worked on the run, says so, and does not carry it out."""
    orders, events = Orders(), list[Event]()

    def stop(event: Event) -> None:
        events.append(event)
        orders.finish = event.kind == "hold_ended" and event.data["number"] == 2 * len(sessions)

    sessions = [1]
    folder = start(short_job, tmp_path / "runs", on_event=stop, orders=orders).path
    file = ask(folder, "off")
    sessions.append(2)
    orders.finish = False
    ending = resume(folder, on_event=stop, orders=orders).ending
    assert "stopped by request" in ending.reason
    assert not file.exists()
    texts = [event.data["text"] for event in events if event.kind == "notice"]
    assert texts == ["a request from before this session was put aside: off"]
    assert threading.active_count() == 1
