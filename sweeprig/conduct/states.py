"""The states of a run and the events it tells: the one table that screen, page, exit code and notices read."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from enum import Enum


class State(Enum):
    """Each says whether the drive may be on."""

    PROVING_OFF = ("proving off", False)
    HOLDING = ("holding", True)
    RESTING = ("resting", False)
    WAITING_FOR_PERSON = ("waiting for a person", False)
    PARKED = ("parked", False)
    TRIPPED = ("tripped", False)
    FINISHED = ("finished", False)

    def __init__(self, words: str, drive_may_be_on: bool) -> None:
        self.words = words
        self.drive_may_be_on = drive_may_be_on


EVENTS: Mapping[str, str] = {
    "state": "state, drive_may_be_on: the run entered a state",
    "session": "session, simulated: a start or resume of the run",
    "hold_began": "number, purpose, why, most_s: the intent is committed; the drive may move now",
    "hold_ended": "number, status, verdict, reason, speed_rpm: the outcome is committed",
    "beat": "number, at_s: readings came; at least every few seconds while a hold lasts",
    "link": "instrument, what: a link failed, was healed or was given up",
    "trip": "rule, evidence, reaction_s, readings: protection switched the drive off, so long after what it saw",
    "off": "proved, took_s: the drive was switched off and shown to be off",
    "notice": "text: anything a person should read",
    "finished": "reason: the schedule has nothing more to ask for",
}
"""Kind → keys and meaning. An event of another kind is a defect."""


@dataclass(frozen=True, slots=True)
class Event:
    kind: str
    at: float
    data: Mapping[str, object]

    def __post_init__(self) -> None:
        if self.kind not in EVENTS:
            raise ValueError(f"unknown event kind {self.kind!r}")


@dataclass(frozen=True, slots=True)
class Ending:
    """How a session ended: the state, and why in a sentence.

    again   nothing stands against beginning another session at once (the supervisor had only been silent)
    hands   what a person is asked to set by hand, as a plan names it; None where nothing is
    """

    state: State
    reason: str
    again: bool = False
    hands: str | None = None


OnEvent = Callable[[Event], None]


class Orders:
    """What people ask of a running run. Setting a flag is all that a signal handler or a thread may do here.

    finish   complete the hold in hand, then switch off and stop; the run can be resumed
    off      switch off at once; the hold in hand is discarded
    pause    complete the hold in hand, then switch off and wait for `ready`
    ready    a person has done what was asked, or ends a pause
    """

    def __init__(self) -> None:
        self.finish = False
        self.off = False
        self.pause = False
        self.ready = False

    def off_because(self) -> str:
        """Why the drive must be off now; empty when nothing asks for it."""
        return "switched off by order" if self.off else ""

    @property
    def again(self) -> bool:
        """Whether what asks for off is gone once the session is over, so that another may begin."""
        return False

    def interrupt(self) -> None:
        """Ctrl-C: once finishes, twice switches off."""
        if self.finish:
            self.off = True
        self.finish = True
