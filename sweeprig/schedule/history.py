"""Outcomes with their tallies, added up as they come, so that a decision does not grow with the night."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace
from typing import overload

from sweeprig.holds import Outcome
from sweeprig.plan import Plan
from sweeprig.schedule.tally import Reads, Tallies, tallies


class History(Sequence[Outcome]):
    """A list of outcomes that one may only append to. What `next_hold` says to it is what it says to the plain list."""

    def __init__(self, outcomes: Iterable[Outcome] = ()) -> None:
        self._outcomes = list(outcomes)
        self._past: Tallies | None = None
        self._reads: Reads | None = None

    def append(self, outcome: Outcome) -> None:
        self._outcomes.append(outcome)
        if self._past is not None and outcome.number > self._past.highest_number:
            self._past.add(outcome)
        else:
            self._past = None  # out of order: counted anew at the next question

    def past(self, reads: Reads) -> Tallies:
        if self._past is None or reads != self._reads:
            self._past, self._reads = tallies(self._outcomes, reads), reads
        return self._past

    def __len__(self) -> int:
        return len(self._outcomes)

    def __iter__(self) -> Iterator[Outcome]:
        return iter(self._outcomes)

    @overload
    def __getitem__(self, place: int) -> Outcome: ...

    @overload
    def __getitem__(self, place: slice) -> list[Outcome]: ...

    def __getitem__(self, place: int | slice) -> Outcome | list[Outcome]:
        return self._outcomes[place]


def past_of(outcomes: Sequence[Outcome], plan: Plan) -> Tallies:
    """The tallies of `outcomes`: those of a History as they stand, those of any other sequence counted anew."""
    reads = Reads(plan.time_constant_s, plan.roles.get("speed"))
    if plan.taps is not None:
        reads = replace(reads, duty=plan.roles.get("duty"), frequency=plan.roles.get("pwm_frequency"))
    return outcomes.past(reads) if isinstance(outcomes, History) else tallies(outcomes, reads)
