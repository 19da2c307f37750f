"""The loop: ask the schedule, commit the intent, perform, commit the outcome, ask again. And off on every way out.

In process and inside the runner process: the same loop, the same events, the same orders.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.doubting import Doubted, Spoiled
from sweeprig.conduct.heal import broken, heal
from sweeprig.conduct.perform import Performed, Performer
from sweeprig.conduct.protection import Trip
from sweeprig.conduct.rig import OpenRig
from sweeprig.conduct.states import Ending, Event, OnEvent, Orders, State
from sweeprig.conduct.switch_off import drive_off, prove_off, switch_off
from sweeprig.conduct.watchman import MachineSlept, OffOrdered, TripSeen, Watchman
from sweeprig.errors import LinkError, RigError, RunInUse
from sweeprig.holds import Decision, Finished, Hold, NeedsPerson, Outcome, Purpose, Status, Verdict
from sweeprig.logbook import Logbook
from sweeprig.plan import Plan
from sweeprig.schedule import History, next_hold

LOCKED = "the logbook was locked by another program, and the drive went off meanwhile"
RECENT = 50
"""Outcomes that are looked back at: many more than may be discarded in a row, with a rest before each."""
PAUSED = "paused by request; `sweeprig ready RUN` goes on"


class _Session:
    """One start or resume of a run, from proof of off to proof of off."""

    def __init__(
        self, plan: Plan, rig: OpenRig, logbook: Logbook, session: int, on_event: OnEvent, orders: Orders
    ) -> None:
        self.plan = replace(plan, session=session)
        self.rig, self.logbook, self.session = rig, logbook, session
        self.clock, self.orders, self.on_event = rig.clock, orders, on_event
        self.watch = Watchman(rig.clock, rig.guard, orders, self._pulse)
        self.performer = Performer(rig, self.plan, self.watch, self._beat)
        self.outcomes = History(logbook.outcomes())
        self.healed: dict[str, int] = {}
        self.waited = False

    def tell(self, kind: str, *, at_once: bool = False, **data: object) -> None:
        """`at_once`: into the logbook now, because no commit may come for long."""
        event = Event(kind, self.clock.now(), data)
        self.logbook.event(kind, event.at, self.clock.utc(), data, now=at_once)
        self.on_event(event)

    def _beat(self, number: int) -> None:
        self.on_event(Event("beat", self.clock.now(), {"number": number}))

    def _pulse(self) -> None:
        if self.rig.pulse is not None:
            self.rig.pulse()

    def _ordered(self) -> None:
        """What healing looks at: an order to be off ends it, for the drive was told to be off before."""
        self._pulse()
        if why := self.orders.off_because():
            raise OffOrdered(why)

    def enter(self, state: State, **more: object) -> None:
        at_once = state in (State.WAITING_FOR_PERSON, State.PARKED)
        self.tell("state", at_once=at_once, state=state.words, drive_may_be_on=state.drive_may_be_on, **more)

    # -- opening -------------------------------------------------------------------------------------------------

    def open(self) -> None:
        """Everyone is identified (by `open_rig`): configure, prove off, conclude what an earlier session left."""
        switch_off(self.rig)  # before anyone is told that the drive is off
        self.tell("session", session=self.session, simulated=self.rig.simulated)
        self._heal("links broke while the rig was made ready")
        for name, identity in self.rig.identities.items():
            self.logbook.instrument(self.session, name, identity, self.rig.settings[name], self.clock.now())
            self._pulse()  # a slow disk takes seconds for each
        for remark in self.plan.remarks:
            self.tell("notice", text=remark)
        self._conclude_abandoned()

    def _conclude_abandoned(self) -> None:
        """A hold that was begun and has no outcome: its process died. The drive may have been on all the time."""
        for hold, session, began, began_utc in self.logbook.unfinished():
            now, utc = self.clock.now(), self.clock.utc()
            reason = "the process ended during this hold; how long the drive was on is not known"
            outcome = Outcome(
                hold.number, hold, session, Status.ABANDONED, Verdict.UNDECIDED, began, now, began_utc, utc, 0.0,
                reason=reason,
            )  # fmt: skip
            self.logbook.conclude(outcome, [])
            self.outcomes.append(outcome)
            self.tell("notice", text=f"hold {hold.number} was found without an outcome and is counted as abandoned")

    # -- the loop ------------------------------------------------------------------------------------------------

    def work(self) -> Ending:
        while True:
            decision: Decision = next_hold(self.plan, self.outcomes, self.clock.utc())
            if isinstance(decision, Finished):
                self.tell("finished", reason=decision.reason)
                return Ending(State.FINISHED, decision.reason)
            if isinstance(decision, NeedsPerson):
                return Ending(State.WAITING_FOR_PERSON, f"{decision.what} ({decision.why})", hands=decision.hands)
            if ending := self._asked_to_stop():
                return ending
            ending = self._one(decision) or self._hopeless()
            if ending is not None:
                return ending

    def _asked_to_stop(self) -> Ending | None:
        """Orders that take effect between two holds."""
        why = self.orders.off_because()
        if why or self.orders.finish:
            return Ending(State.PARKED, why or "stopped by request after a completed hold", self.orders.again)
        if self.orders.pause:
            return Ending(State.WAITING_FOR_PERSON, PAUSED)
        return None

    def _one(self, hold: Hold) -> Ending | None:
        began, began_utc = self.clock.now(), self.clock.utc()
        # The intent is durable before the drive moves.
        self._commit(lambda: self.logbook.intend(hold, self.session, began, began_utc))
        state = State.RESTING if hold.purpose is Purpose.REST else State.HOLDING
        self.tell("state", state=state.words, drive_may_be_on=state.drive_may_be_on, number=hold.number)
        self.tell("hold_began", number=hold.number, purpose=str(hold.purpose), why=hold.why, most_s=hold.most_s)
        done = Performed()
        status, reason, ending, failed, trip = Status.DONE, "", None, False, None
        waited, self.waited = self.waited, False
        try:
            status, reason = (Status.DISCARDED, LOCKED) if waited else self._perform(hold, done)
        except MachineSlept:
            status, reason, failed = (
                Status.DISCARDED,
                "the machine slept, or its clock was stepped, during the hold",
                True,
            )
        except OffOrdered as order:
            status, reason = Status.DISCARDED, str(order)
            ending = Ending(State.PARKED, reason, self.orders.again)
        except TripSeen as seen:
            trip, reason = seen.trip, self._trip_now(seen.trip)
            # A channel that fell silent, or a rig that does not answer as commanded: off, heal, go on.
            status, failed = (Status.TRIPPED, False) if trip.ends_run else (Status.DISCARDED, True)
            ending = Ending(State.TRIPPED, reason) if trip.ends_run else None
        except (LinkError, RigError, Doubted) as error:
            status, reason, failed = Status.DISCARDED, str(error), True
        if trip is None and (ending is not None or failed):
            self._off_now()
        self._conclude(hold, done, status, reason, began, began_utc)
        if trip is not None and trip.ends_run:
            self.tell("trip", rule=trip.rule, evidence=reason, reaction_s=self._reaction(trip), readings=_seen(trip))
        if failed:
            self._heal(f"a hold was discarded: {reason}")
        return ending

    def _hopeless(self) -> Ending | None:
        """Parked when hold after hold is discarded: no repeat will mend that. Healing counts anew after good holds."""
        in_a_row, lately = 0, self.outcomes[-RECENT:]
        held = [each for each in lately if each.hold.purpose is not Purpose.REST]  # no hold goes wrong by resting
        for outcome in reversed(held):
            if outcome.session != self.session or outcome.status is not Status.DISCARDED:
                break
            in_a_row += 1
        if in_a_row >= BOUNDS["discards_in_a_row"]:
            return Ending(State.PARKED, f"{in_a_row} holds in a row were discarded, the last one: {held[-1].reason}")
        good = held[-int(BOUNDS["heal_forgets_after"]) :]
        if all(outcome.status is Status.DONE for outcome in good):
            self.healed.clear()
        return None

    def _perform(self, hold: Hold, done: Performed) -> tuple[Status, str]:
        """A hold counts only when every instrument is still as it was set at its end; one that is not is also what
        spoils holds, and must not be taken for a motor that does not turn."""
        try:
            self.performer.perform(hold, done)
        except Spoiled as spoiled:
            self._drive_is_off()
            self.performer.still_set(tuple(self.rig.adapters))
            if isinstance(spoiled, Doubted):
                raise
            return Status.DISCARDED, str(spoiled)
        try:
            self.performer.still_set(tuple(self.rig.adapters))
        except Spoiled as spoiled:
            self._drive_is_off()
            return Status.DISCARDED, str(spoiled)
        return Status.DONE, ""

    def _conclude(
        self, hold: Hold, done: Performed, status: Status, reason: str, began: float, began_utc: float
    ) -> None:
        if status is not Status.DONE:
            done.verdict = Verdict.UNDECIDED
        done.means.update(self.performer.told.given(hold, self.rig.roles, done.readings, done.means))
        outcome = Outcome(
            hold.number, hold, self.session, status, done.verdict, began, self.clock.now(), began_utc, self.clock.utc(),
            done.exposed_s, done.event_between_s, done.restarts, done.means, done.flags, reason,
        )  # fmt: skip
        speed = done.means.get(self.rig.roles["speed"])
        self.tell(
            "hold_ended", number=hold.number, status=str(status), verdict=str(done.verdict), reason=reason,
            speed_rpm=None if speed is None else speed.value,
        )  # fmt: skip
        self._commit(lambda: self.logbook.conclude(outcome, done.readings))
        self.outcomes.append(outcome)

    def _commit(self, write: Callable[[], None]) -> None:
        """Write into the logbook; while another program has it locked, again and again, with the drive off. A hold that
        was to flow on from the one before finds another rotor then, and is discarded."""
        wall = SystemClock()
        until = wall.now() + BOUNDS["busy_s"]
        while True:
            try:
                write()  # waits for half a second itself
            except RunInUse:
                if wall.now() >= until:
                    raise
                if self.rig.guard.on:
                    self._off_now()
                    self.waited = True
                self._pulse()
            else:
                self._pulse()  # two commits may follow each other, and a slow disk takes seconds for each
                return

    # -- off -----------------------------------------------------------------------------------------------------

    def _off_now(self) -> None:
        """At once, without the proof: the links may be broken; the proof comes with healing or at the end."""
        off = switch_off(self.rig)
        self.performer.unpowered()
        self.tell("off", proved=False, took_s=off.took_s, told=list(off.told), silent=dict(off.silent))

    def _trip_now(self, trip: Trip) -> str:
        """Off because of protection; the outcome's reason, with the time from the reading to the confirmed off."""
        self._off_now()
        reaction_s = self._reaction(trip)
        how = "off was not confirmed" if reaction_s is None else f"off confirmed {reaction_s:.2f} s later"
        reason = f"{trip.rule}: {trip.evidence}; {how}"
        return self._explained(reason) if trip.of_answer else reason

    def _explained(self, reason: str) -> str:
        """A rig that did not answer as commanded may have an instrument that restarted: that is the reason then."""
        self.rig.guard.trip = None  # seen, and the drive is off
        try:
            self.performer.still_set(tuple(self.rig.adapters))
        except (LinkError, RigError, Spoiled) as error:
            return f"{error}; seen as {reason}"
        except (MachineSlept, OffOrdered):
            pass  # what is discarded is healed, and an order is looked at there
        return reason

    def _reaction(self, trip: Trip) -> float | None:
        """s, from the reading that tripped, or the moment that was due, to drive and supply both saying off."""
        confirmed = self.rig.off_confirmed_at
        return confirmed - trip.at if confirmed >= trip.at else None

    def _drive_is_off(self) -> None:
        if self.rig.guard.on:
            self._off_now()

    def _heal(self, reason: str, closing: bool = False) -> None:
        """Links back, settings applied, off proved. `reason` is told when there is a link to bring back."""
        began = self.clock.now()
        self.performer.unpowered()
        self.enter(State.PROVING_OFF)
        before = broken(self.rig)
        if before:
            self.tell("link", instrument=", ".join(before), what=reason)
        for name in heal(self.rig, self.healed, self._pulse if closing else self._ordered):
            self.tell("link", instrument=name, what="the link is back, same instrument, settings applied, off proved")
        self.rig.guard.trip = None
        self.tell("off", proved=True, took_s=self.clock.now() - began)

    def close(self) -> None:
        """The last act of every session. A wait that was broken off leaves links dirty: they are brought back, so that
        off can be proved and not only told."""
        began = self.clock.now()
        switch_off(self.rig)
        self.enter(State.PROVING_OFF)
        try:
            drive_off(self.rig, supply_too=True)
            prove_off(self.rig)
        except RigError:
            if not broken(self.rig):
                raise
            self._heal("links were left in the middle of an exchange", closing=True)
        else:
            self.tell("off", proved=True, took_s=self.clock.now() - began)

    def leave(self, first: BaseException) -> None:
        """Something escaped: off all the same. It may be the listener that failed, so nobody listens any more; what
        goes wrong now is a note on the first error, which is the one to show."""
        self.on_event = _nobody
        try:
            self.close()
        except BaseException as second:  # noqa: BLE001 - also an impatient interrupt: the drive goes off first
            switch_off(self.rig)
            first.add_note(f"and then, while switching off: {second or type(second).__name__}")


def _seen(trip: Trip) -> list[dict[str, object]]:
    """The readings of a trip as plain values, for the record."""
    return [{"channel": each.channel, "value": each.value, "unit": each.unit, "at": each.at} for each in trip.readings]


def _nobody(event: Event) -> None:
    del event


def run(plan: Plan, rig: OpenRig, logbook: Logbook, session: int, on_event: OnEvent, orders: Orders) -> Ending:
    """Work one session of a run to its end. Off is proved at its beginning and on every way out.

    Raises RigError when the rig cannot be used any more (the drive was told to be off first), and OffNotProved when off
    could not be shown. What was concluded stays in the logbook whatever happens.
    """
    at_work = _Session(plan, rig, logbook, session, on_event, orders)
    try:
        at_work.open()
        ending = at_work.work()
    except OffOrdered as order:
        ending = Ending(State.PARKED, str(order), orders.again)
    except BaseException as first:
        at_work.leave(first)
        raise
    try:
        at_work.close()
    except BaseException:
        switch_off(rig)
        raise
    at_work.enter(ending.state, reason=ending.reason)
    return ending
