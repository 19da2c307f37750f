"""Values and logbooks that the tests of this room share. Invented numbers; no other room is asked for any."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.logbook import Logbook
from sweeprig.quantities import Reading

START_UTC = 1_772_470_800.0


def hold(number: int, **changes: Any) -> Hold:
    given: dict[str, Any] = {
        "number": number, "purpose": Purpose.STALL, "approach": Approach.FALLING,
        "condition": Condition(1000.0, 12.0), "duty_percent": 14.5, "least_s": 1.0, "most_s": 20.0,
        "ends_when": EndsWhen.STOPPED, "roles": ("speed", "duty"), "why": "finds the stall duty",
        "lead": ((26.5, 4.0),),
    }  # fmt: skip
    return Hold(**given | changes)


def outcome(of: Hold, **changes: Any) -> Outcome:
    began = 30.0 * of.number
    given: dict[str, Any] = {
        "number": of.number, "hold": of, "session": 1, "status": Status.DONE, "verdict": Verdict.TURNING,
        "began": began, "ended": began + 24.0, "began_utc": START_UTC + began, "ended_utc": START_UTC + began + 24.0,
        "exposed_s": 20.0, "event_between_s": (20.0, None),
        "means": {"board.speed": Reading(612.5, 1.25, "rpm", began + 24.0, "board.speed")},
    }  # fmt: skip
    return Outcome(**given | changes)


def readings(of: Hold, count: int = 6) -> list[Reading]:
    kinds = (("board.speed", "rpm", 612.0), ("meter.volts", "V", 1.7), ("scope.duty", "%", 14.5))
    made = []
    for index in range(count):
        channel, unit, value = kinds[index % 3]
        at = 30.0 * of.number + 4.0 + 0.1 * index
        made.append(Reading(value + index / 7.0, 0.01, unit, at, channel, (), f"+{value:.4E}"))
    return made


@pytest.fixture
def make_hold() -> Callable[..., Hold]:
    return hold


@pytest.fixture
def make_outcome() -> Callable[..., Outcome]:
    return outcome


@pytest.fixture
def make_readings() -> Callable[..., list[Reading]]:
    return readings


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "logbook.sqlite"


@pytest.fixture
def book(path: Path) -> Iterator[Logbook]:
    """A new logbook with its first session begun."""
    with Logbook.create(path, "title = 'job'\n", "5eed", "sweeprig 0") as made:
        made.begin_session(0.0, START_UTC, {"attended": False})
        yield made
