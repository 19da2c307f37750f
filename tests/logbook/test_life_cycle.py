"""The life of a hold in the logbook: intent, outcome, readings, and what the rules forbid."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sweeprig.errors import RunError
from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.logbook import Event, Intent, Logbook, Reader, Session
from sweeprig.quantities import Reading
from sweeprig.roles import Identity

MakeHold = Callable[..., Hold]
MakeOutcome = Callable[..., Outcome]
MakeReadings = Callable[..., list[Reading]]

FINITE = st.floats(allow_nan=False, allow_infinity=False)
TEXTS = st.text(max_size=8)
READINGS = st.builds(
    Reading, st.none() | FINITE, FINITE, TEXTS, FINITE, TEXTS, st.lists(TEXTS, max_size=2).map(tuple), TEXTS
)


def test_hold_from_intent_to_outcome(
    book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome, make_readings: MakeReadings
) -> None:
    """A hold is unfinished from its intent to its outcome; then outcome and readings are as given."""
    hold = make_hold(1)
    book.intend(hold, 1, 30.0, 1030.0)
    assert book.unfinished() == [(hold, 1, 30.0, 1030.0)]
    assert book.outcomes() == []
    book.conclude(make_outcome(hold), make_readings(hold))
    assert book.unfinished() == []
    assert book.outcomes() == [make_outcome(hold)]
    assert book.readings(1) == make_readings(hold)


@settings(max_examples=15, deadline=None)
@given(st.lists(READINGS, max_size=20), TEXTS)
def test_any_reading_comes_back_from_the_file(
    tmp_path_factory: pytest.TempPathFactory, readings: list[Reading], job_text: str
) -> None:
    """Readings and job text of any content come back bit for bit from a closed file."""
    path = tmp_path_factory.mktemp("any") / "logbook.sqlite"
    with Logbook.create(path, job_text, "", "") as book:
        session = book.begin_session(0.0, 0.0, {})
        hold = _plain_hold()
        book.intend(hold, session, 0.0, 0.0)
        outcome = Outcome(7, hold, session, Status.DONE, Verdict.TURNING, 0.0, 1.0, 0.0, 1.0)
        book.conclude(outcome, readings)
    reader = Reader(path)
    assert reader.readings(7) == readings
    assert reader.head()["job_text"] == job_text


def test_broken_bytes_and_numbers_are_kept_as_text_and_no_data(book: Logbook, make_hold: MakeHold) -> None:
    """Raw text with a lone surrogate or a NUL, a NaN value and a NaN u never stop the night; the record says so."""
    hold = make_hold(1)
    outcome = Outcome(1, hold, 1, Status.DISCARDED, Verdict.UNDECIDED, 0.0, 1.0, 0.0, 1.0)
    book.intend(hold, 1, 0.0, 0.0)
    book.conclude(outcome, [Reading(math.nan, math.nan, "V", 0.5, "meter.volts", (), "9\udcff\0!")])
    kept = Reading(None, math.inf, "V", 0.5, "meter.volts", ("no_data:not_finite",), "9\\udcff\0!")
    assert book.readings(1) == [kept]


def test_a_number_has_one_outcome(
    book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome, make_readings: MakeReadings
) -> None:
    """A second outcome for a number is refused and changes nothing."""
    hold = make_hold(1)
    book.intend(hold, 1, 0.0, 0.0)
    book.conclude(make_outcome(hold), make_readings(hold))
    with pytest.raises(RunError, match="hold 1 has an outcome already"):
        book.conclude(make_outcome(hold, status=Status.ABANDONED), make_readings(hold))
    assert book.outcomes() == [make_outcome(hold)]
    assert len(book.readings(1)) == 6


def test_a_number_is_begun_once(book: Logbook, make_hold: MakeHold) -> None:
    """A second intent for a number is refused."""
    book.intend(make_hold(1), 1, 0.0, 0.0)
    with pytest.raises(RunError, match="hold 1 was begun already"):
        book.intend(make_hold(1), 1, 5.0, 5.0)


def test_outcome_without_intent_is_refused(book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome) -> None:
    """What was never intended cannot be concluded."""
    with pytest.raises(RunError, match=r"hold 4 was never begun\. Intend a hold"):
        book.conclude(make_outcome(make_hold(4)), [])
    assert book.outcomes() == []


def test_outcome_of_another_hold_is_refused(book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome) -> None:
    """An outcome whose hold differs from the intended one is refused: the intent is what the drive was told."""
    book.intend(make_hold(1), 1, 0.0, 0.0)
    with pytest.raises(RunError, match="another hold than the intended one"):
        book.conclude(make_outcome(make_hold(1, duty_percent=15.0)), [])


def test_unknown_session_is_refused(book: Logbook, make_hold: MakeHold) -> None:
    """A hold, an outcome or an instrument belongs to a session that was begun."""
    with pytest.raises(RunError, match=r"no session 2 \(sessions: 1 to 1\)"):
        book.intend(make_hold(1), 2, 0.0, 0.0)
    assert book.intents() == []


def test_abandoned_hold_is_concluded_at_the_next_start(
    path: Path, book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome
) -> None:
    """A hold left without an outcome is found at the next start and can be concluded in its old session."""
    hold = make_hold(3)
    book.intend(hold, 1, 90.0, 1090.0)
    book.close(clean=False)
    with Logbook.open(path) as again:
        assert again.begin_session(200.0, 1200.0, {}) == 2
        assert again.unfinished() == [Intent(hold, 1, 90.0, 1090.0)]
        abandoned = make_outcome(hold, status=Status.ABANDONED, verdict=Verdict.UNDECIDED, means={})
        again.conclude(abandoned, [])
        assert again.unfinished() == []
        assert again.outcomes() == [abandoned]


def test_outcomes_are_in_number_order(book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome) -> None:
    """Outcomes come in number order whatever order they were concluded in, and from a number on when asked."""
    for number in (0, 1, 2, 3):
        book.intend(make_hold(number), 1, 0.0, 0.0)
    for number in (2, 0, 3, 1):
        book.conclude(make_outcome(make_hold(number)), [])
    assert [outcome.number for outcome in book.outcomes()] == [0, 1, 2, 3]
    assert [outcome.number for outcome in book.outcomes(after=1)] == [2, 3]


def test_events_wait_for_the_next_commit(path: Path, book: Logbook, make_hold: MakeHold) -> None:
    """An event is queued until something commits, or committed at once when that is asked for."""
    book.event("notice", 1.0, 101.0, {"text": "one"})
    reader = Reader(path)
    assert reader.events() == []
    book.intend(make_hold(1), 1, 2.0, 102.0)
    one = Event("notice", 1.0, 101.0, {"text": "one"}, 1)
    assert reader.events() == [one]
    book.event("trip", 3.0, 103.0, {"rule": "current"}, now=True)
    assert reader.events() == [one, Event("trip", 3.0, 103.0, {"rule": "current"}, 1)]


def test_events_do_not_pile_up(path: Path, book: Logbook) -> None:
    """A long wait without a commit writes its events in batches: they hold no memory and are not lost."""
    for index in range(1_500):
        book.event("beat", float(index), float(index), {})
    assert len(Reader(path).events()) == 1_000


def test_queued_events_survive_a_refused_outcome(book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome) -> None:
    """Events that waited while a write was refused are written with the next one, once."""
    book.event("notice", 1.0, 101.0, {})
    with pytest.raises(RunError):
        book.conclude(make_outcome(make_hold(9)), [], [Event("lost", 1.0, 101.0)])
    book.intend(make_hold(1), 1, 2.0, 102.0)
    assert [event.kind for event in book.events()] == ["notice"]


def test_instruments_and_sessions_come_back(path: Path, book: Logbook) -> None:
    """Identities with their settings and sessions with their information are kept as given."""
    identity = Identity("SIMULATED", "meter µ", "0", "1.0")
    book.instrument(1, "meter", identity, {"aperture": "0.2 s"}, 0.5)
    seen = book.instruments()
    assert [(one.session, one.name, one.identity, one.settings, one.at) for one in seen] == [
        (1, "meter", identity, {"aperture": "0.2 s"}, 0.5)
    ]
    assert seen[0].identity.simulated
    assert Reader(path).sessions() == [Session(1, 0.0, 1_772_470_800.0, {"attended": False})]


def test_last_times_is_the_last_thing_written(path: Path, make_hold: MakeHold, make_outcome: MakeOutcome) -> None:
    """The run clock goes on from the last session, intent, outcome or event, whichever is latest."""
    with Logbook.create(path, "", "", "") as book:
        assert book.last_times() is None
        book.begin_session(5.0, 105.0, {})
        assert book.last_times() == (5.0, 105.0)
        hold = make_hold(1)
        book.intend(hold, 1, 8.0, 108.0)
        assert book.last_times() == (8.0, 108.0)
        book.conclude(make_outcome(hold, ended=32.0, ended_utc=132.0), [])
        assert book.last_times() == (32.0, 132.0)
        book.event("off", 33.0, 133.0, {}, now=True)
        assert book.last_times() == (33.0, 133.0)


def test_every_commit_is_synced(book: Logbook) -> None:
    """The writer keeps a write-ahead log, syncs it at every commit, and waits for a lock no longer than 500 ms.

    2 is FULL (certified: https://www.sqlite.org/pragma.html#pragma_synchronous).
    """
    asked = ("journal_mode", "synchronous", "foreign_keys", "busy_timeout", "user_version")
    told = {name: book._connection.execute(f"PRAGMA {name}").fetchone()[0] for name in asked}
    assert told == {"journal_mode": "wal", "synchronous": 2, "foreign_keys": 1, "busy_timeout": 500, "user_version": 1}


def test_clean_close_leaves_one_file(path: Path, book: Logbook) -> None:
    """A clean end leaves the logbook as one file, with the waiting events in it."""
    book.event("finished", 9.0, 109.0, {})
    assert path.with_name("logbook.sqlite-wal").exists()
    assert book.close(clean=True) is True
    assert [file.name for file in path.parent.glob("logbook.sqlite*")] == ["logbook.sqlite"]
    assert [event.kind for event in Reader(path).events()] == ["finished"]
    assert book.close(clean=True) is False  # nothing is left to do


def test_error_inside_with_is_no_clean_end(path: Path) -> None:
    """Leaving the logbook by an error lets the error through and keeps what was committed."""

    def fails() -> None:
        with Logbook.create(path, "", "", "") as book:
            book.begin_session(0.0, 0.0, {})
            raise KeyError("elsewhere")

    with pytest.raises(KeyError, match="elsewhere"):
        fails()
    assert len(Reader(path).sessions()) == 1


def test_use_after_close_is_an_error_of_ours(book: Logbook) -> None:
    """A closed logbook refuses writes with a RunError, not with the database library's error."""
    book.close(clean=True)
    with pytest.raises(RunError, match="closed"):
        book.begin_session(1.0, 1.0, {})


def test_create_refuses_an_existing_logbook(path: Path, book: Logbook) -> None:
    """A logbook is never overwritten, and the refusal leaves the folder free for the next."""
    book.close(clean=True)
    with pytest.raises(RunError, match="there is a logbook already"):
        Logbook.create(path, "", "", "")
    with Logbook.open(path) as again:
        assert len(again.sessions()) == 1


def test_create_clears_what_a_kill_left(path: Path) -> None:
    """A half-made file of a creation that was killed does not stop the next creation."""
    path.with_name("logbook.sqlite.new").write_bytes(b"half a database")
    with Logbook.create(path, "text", "", "") as book:
        assert book.head()["job_text"] == "text"
    assert not path.with_name("logbook.sqlite.new").exists()


def test_two_units_of_one_channel_are_two_channels(
    book: Logbook, make_hold: MakeHold, make_outcome: MakeOutcome
) -> None:
    """A channel that changes its unit keeps both, also across holds and a refused write between them."""
    volts, percent = Reading(1.0, 0.1, "V", 1.0, "m.x"), Reading(2.0, 0.1, "%", 2.0, "m.x")
    for number in (1, 2):
        book.intend(make_hold(number), 1, 0.0, 0.0)
    with pytest.raises(RunError):
        book.conclude(make_outcome(make_hold(1), session=5), [percent])
    book.conclude(make_outcome(make_hold(1)), [volts, percent])
    second = [dataclasses.replace(percent, at=3.0), Reading(3.0, 0.1, "A", 3.0, "m.new")]
    book.conclude(make_outcome(make_hold(2)), second)
    assert book.readings(1) == [volts, percent]
    assert book.readings(2) == second


def _plain_hold() -> Hold:
    return Hold(7, Purpose.REST, Approach.FALLING, Condition(1.0, 1.0), 0.0, 0.0, 1.0, EndsWhen.TIME, (), "")
