"""One process's work on a run: session after session on one open rig, until the run ends or cannot go on.

A new session begins after a person was waited for and after the rig was brought back from being parked; each proves
off, checks zero and warms up anew. Between sessions the drive and the supply are off.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from sweeprig.clock import Clock, SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.heal import heal
from sweeprig.conduct.requests import Requests
from sweeprig.conduct.rig import Look, OpenRig, RigUse, open_rig, require_heartbeat, same_instruments
from sweeprig.conduct.run import PAUSED, run
from sweeprig.conduct.states import Ending, Event, OnEvent, Orders, State
from sweeprig.errors import RigError, SweeprigError, WrongInstrument
from sweeprig.holds import Purpose, Status
from sweeprig.job import Job, freeze
from sweeprig.logbook import Logbook
from sweeprig.logbook.traffic import TrafficLog
from sweeprig.plan import Plan

DATA = frozenset(Purpose) - {Purpose.ZERO, Purpose.REST, Purpose.RUN_IN}
"""Purposes that bring a sweep forward. A zero check is done in every session: of a rig that only ever gets so far
nothing has come back, and the time parked goes on."""


@dataclass(frozen=True, slots=True)
class Opening:
    """How a process begins its work: number and clock of its first session, and what it notes about it."""

    session: int
    clock: Clock
    ports: Mapping[str, Any] | None
    info: Mapping[str, object]
    attended: bool
    hands: str | None = None


def work(
    job: Job,
    folder: Path,
    logbook: Logbook,
    traffic: TrafficLog,
    opening: Opening,
    on_event: OnEvent,
    orders: Orders,
    pulse: Look | None = None,
) -> Ending:
    """Work on the run until it ends. Errors: as `conduct.run`; a rig that is lost after it had worked is parked first.

    `pulse`: the sign of life of this process; called at least every half second whatever is being waited for.
    """
    requests = Requests(folder, orders)
    opened: list[OpenRig] = []
    ordered_off_at = math.inf

    def alive() -> None:
        nonlocal ordered_off_at
        requests.look()
        if orders.off and opened:
            ordered_off_at = min(ordered_off_at, opening.clock.now())
            if opened[0].off_confirmed_at > ordered_off_at:
                requests.off_confirmed()
        if pulse is not None:
            pulse()

    saved = {seen.name: seen.identity for seen in reversed(logbook.instruments())}
    rig = open_rig(RigUse.of_job(job), opening.clock, opening.ports, traffic, alive)
    opened.append(rig)
    try:
        same_instruments(rig, saved)
        if not opening.attended:
            require_heartbeat(rig)
        plan = replace(freeze(job), attended=opening.attended, hands=opening.hands)
        at_work = _Work(plan, rig, logbook, opening, requests, on_event, orders, alive)
        ending = at_work.to_its_end()
    finally:
        rig.close()
    requests.carried_out("off", "stop")  # only now: with an error off may not have been proved
    return ending


class _Work:
    def __init__(
        self,
        plan: Plan,
        rig: OpenRig,
        logbook: Logbook,
        opening: Opening,
        requests: Requests,
        on_event: OnEvent,
        orders: Orders,
        alive: Look,
    ) -> None:
        self.plan, self.rig, self.logbook, self.opening = plan, rig, logbook, opening
        self.requests, self.on_event, self.orders, self.alive = requests, on_event, orders, alive
        self.clock = rig.clock
        self.wall = SystemClock()
        self.parked_since: float | None = None
        self.park_s = BOUNDS["park_first_s"]

    def tell(self, kind: str, **data: object) -> None:
        event = Event(kind, self.clock.now(), data)
        self.logbook.event(kind, event.at, self.clock.utc(), data, now=True)
        self.on_event(event)

    def to_its_end(self) -> Ending:
        session = self.opening.session
        while True:
            before = len(self.logbook.outcomes())
            plan = replace(self.plan, session=session)
            try:
                ending = run(plan, self.rig, self.logbook, session, self.on_event, self.orders)
            except RigError as error:
                if isinstance(error, WrongInstrument) or not self._bear(error, before):
                    raise
                if self._told():
                    self._off_after_all()
            else:
                if not self._waits(ending):
                    return ending
                self._wait_for_ready(ending)
            if why := self._told():
                return Ending(State.PARKED, f"{why}, while the run was parked or waited", self.orders.again)
            info = {**self.opening.info, "hands": self.plan.hands}
            session = self.logbook.begin_session(self.clock.now(), self.clock.utc(), info)

    def _told(self) -> str:
        """Why the run is to end, where somebody said so."""
        return self.orders.off_because() or ("stopped by request" if self.orders.finish else "")

    def _off_after_all(self) -> None:
        """A run that is parked because its rig was lost may not have proved off. It ends with the proof, or with the
        error that stands against it: nobody is told "off" on the word of a rig that does not answer."""
        heal(self.rig, {}, self.alive)
        self.tell("off", proved=True, took_s=0.0)

    # -- waiting for a person ------------------------------------------------------------------------------------

    def _waits(self, ending: Ending) -> bool:
        """An unattended run does not wait for anybody to come, but whoever paused it is there."""
        return ending.state is State.WAITING_FOR_PERSON and (self.opening.attended or ending.reason == PAUSED)

    def _wait_for_ready(self, ending: Ending) -> None:
        """Wait for `ready`, drive and supply off and shown to be off; or for an order, which ends the run."""
        orders = self.orders
        self.requests.carried_out("pause")
        orders.pause = orders.ready = False
        while not orders.ready:
            if orders.finish or orders.off_because():
                return
            self._wait(BOUNDS["person_s"])
        orders.ready = False
        self.requests.carried_out("ready")
        if ending.hands is not None:
            self.plan = replace(self.plan, hands=ending.hands)
        self.tell("notice", text="a person said ready; a new session begins")

    def _wait(self, seconds: float) -> None:
        """Real time, for it is a person or a cable that is waited for; the simulated bench's clock goes along."""
        self.alive()
        self.wall.wait(self.wall.now() + seconds)
        if self.opening.ports is not None:
            self.clock.wait(self.clock.now() + seconds)

    # -- parked --------------------------------------------------------------------------------------------------

    def _bear(self, error: SweeprigError, before: int) -> bool:
        """Park, and wait until the next try is due; False when it is to be given up: it never worked, or for too long.

        What cannot be used at the very beginning is for the person who starts the run, and is raised at once.
        """
        outcomes = self.logbook.outcomes()
        if any(outcome.status is Status.DONE and outcome.hold.purpose in DATA for outcome in outcomes[before:]):
            self.parked_since, self.park_s = None, BOUNDS["park_first_s"]
        mine = [outcome for outcome in outcomes if outcome.session >= self.opening.session]
        if not any(outcome.status is Status.DONE for outcome in mine):
            return False
        now = self.clock.now()
        if self.parked_since is None:
            self.parked_since = now
        if now - self.parked_since >= BOUNDS["park_gives_up_s"]:
            hours = (now - self.parked_since) / 3600.0
            error.what = (
                f"the run was parked for {hours:.1f} h, the rig did not come back and is given up: {error.what}"
            )
            return False
        reason = error.what if error.value is None else f"{error.what}: {error.value}"
        self.tell(
            "state", state=State.PARKED.words, drive_may_be_on=False, reason=reason, next_try_s=self.park_s
        )  # fmt: skip
        until = now + self.park_s
        while self.clock.now() < until and not (self.orders.finish or self.orders.off_because()):
            self.alive()
            self.clock.wait(min(until, self.clock.now() + BOUNDS["beat_s"]))
        self.park_s = min(2.0 * self.park_s, BOUNDS["park_longest_s"])
        return True
