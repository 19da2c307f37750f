"""Values through JSON: what comes back is what went in. Values are made by hypothesis; equality is the check."""

from __future__ import annotations

import dataclasses
import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.holds import Approach, AtTap, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.logbook import values
from sweeprig.quantities import Reading

FINITE = st.floats(allow_nan=False, allow_infinity=False)
NUMBERS = st.floats(allow_nan=False)
TEXTS = st.text(max_size=12)
FLAGS = st.lists(TEXTS, max_size=3).map(tuple)
CONDITIONS = st.builds(Condition, FINITE, FINITE, TEXTS, TEXTS, TEXTS, TEXTS)
READINGS = st.builds(Reading, st.none() | FINITE, NUMBERS, TEXTS, FINITE, TEXTS, FLAGS, TEXTS)
HOLDS = st.builds(
    Hold,
    number=st.integers(0, 2**40),
    purpose=st.sampled_from(Purpose),
    approach=st.sampled_from(Approach),
    condition=CONDITIONS,
    duty_percent=NUMBERS,
    least_s=NUMBERS,
    most_s=NUMBERS,
    ends_when=st.sampled_from(EndsWhen),
    roles=FLAGS,
    why=TEXTS,
    lead=st.lists(st.tuples(FINITE, FINITE), max_size=3).map(tuple),
    tap=st.none() | st.integers(0, 2**31),
    taps=st.lists(st.builds(AtTap, FINITE, st.integers(0, 255), FINITE, FINITE, FINITE, FINITE), max_size=3).map(tuple),
)
OUTCOMES = st.builds(
    Outcome,
    number=st.integers(0, 2**40),
    hold=HOLDS,
    session=st.integers(1, 99),
    status=st.sampled_from(Status),
    verdict=st.sampled_from(Verdict),
    began=NUMBERS,
    ended=NUMBERS,
    began_utc=NUMBERS,
    ended_utc=NUMBERS,
    exposed_s=NUMBERS,
    event_between_s=st.tuples(NUMBERS, st.none() | NUMBERS),
    restarts=st.integers(0, 99),
    means=st.dictionaries(TEXTS, READINGS, max_size=3),
    flags=FLAGS,
    reason=TEXTS,
)


@given(CONDITIONS)
def test_condition_comes_back(condition: Condition) -> None:
    """A condition survives JSON text unchanged."""
    text = values.dump(values.condition_to_json(condition))
    again = values.condition_from_json(values.load(text))
    assert again == condition
    assert values.condition_from_json(values.load(text)) is again  # one object, which the schedule knows by sight


@given(HOLDS)
def test_hold_comes_back(hold: Hold) -> None:
    """A hold survives JSON text unchanged, infinite times included."""
    assert values.hold_from_json(values.load(values.dump(values.hold_to_json(hold)))) == hold


@given(READINGS)
def test_reading_comes_back(reading: Reading) -> None:
    """A reading survives JSON text unchanged, no data and unbounded u included."""
    assert values.reading_from_json(values.load(values.dump(values.reading_to_json(reading)))) == reading


@given(OUTCOMES)
def test_outcome_comes_back(outcome: Outcome) -> None:
    """An outcome survives JSON text unchanged, with its hold inside or given beside it."""
    whole = values.load(values.dump(values.outcome_to_json(outcome)))
    bare = values.load(values.dump(values.outcome_to_json(outcome, with_hold=False)))
    assert values.outcome_from_json(whole) == outcome
    assert "hold" not in bare
    assert values.outcome_from_json(bare, outcome.hold) == outcome


@pytest.mark.parametrize("kind", [Condition, Hold, Outcome, Reading])
def test_no_field_is_forgotten(kind: type) -> None:
    """Every field of a shared value has a key of its name in the JSON, so that a new field cannot be lost silently."""
    hold = Hold(1, Purpose.REST, Approach.FALLING, Condition(1.0, 2.0), 0.0, 0.0, 1.0, EndsWhen.TIME, (), "")
    hold = dataclasses.replace(hold, taps=(AtTap(1.0, 2, 3.0, 4.0, 5.0, 6.0),))
    made = {
        Condition: values.condition_to_json(hold.condition),
        Hold: values.hold_to_json(hold),
        Reading: values.reading_to_json(Reading(1.0, 0.0, "V", 0.0, "a.b")),
        Outcome: values.outcome_to_json(
            Outcome(1, hold, 1, Status.DONE, Verdict.UNDECIDED, 0.0, 1.0, 0.0, 1.0),
        ),
    }
    assert set(made[kind]) == {entry.name for entry in dataclasses.fields(kind)}


@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf])
def test_value_that_is_not_finite_is_no_data(bad: float) -> None:
    """A NaN or infinity that an adapter let through is kept as no data with its reason, never as a number."""
    kept = values.sound(Reading(bad, math.nan, "V", 1.0, "meter.volts", ("late",)))
    assert kept == Reading(None, math.inf, "V", 1.0, "meter.volts", ("late", "no_data:not_finite"))


def test_odd_things_become_json() -> None:
    """Arrays, infinities, bytes, enums and keys that are no text do not stop an event from being written."""
    odd = {"a": np.float64(1.5), "b": np.arange(2), 3: math.inf, "c": b"\xff\n", "d": {1, 2}, ("x", 1): Purpose.KICK}
    text = values.dump(odd)
    assert json.loads(text) == {
        "a": 1.5, "b": [0, 1], "3": "inf", "c": "\\xff\n", "d": [1, 2], "('x', 1)": "kick",
    }  # fmt: skip
    assert text.isascii()
