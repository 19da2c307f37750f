"""Protection: on readings and on the clock, as pure policies."""

from __future__ import annotations

import math

import pytest

from sweeprig.conduct.protection import NO_LIMIT, Above, Commanded, Guard, LockedRotor, Policies
from sweeprig.quantities import Reading


def reading(channel: str, value: float | None, at: float, flags: tuple[str, ...] = ()) -> dict[str, Reading]:
    return {channel: Reading(value, 0.0, "A", at, channel, flags)}


def guard() -> Guard:
    return Guard([Above("over_current", "meter.amps", 1.5, 2.0, debounce=2), LockedRotor("tacho.edge_age", 6.0)])


def test_over_current_trips_after_its_debounce() -> None:
    """One reading above the limit may be a spike; the second in a row trips, with the evidence."""
    watch = guard()
    watch.drive_on(0.0)
    watch.take(reading("meter.amps", 1.6, 0.1))
    assert watch.check(0.1) is None
    watch.take(reading("meter.amps", -1.7, 0.2))
    trip = watch.check(0.2)
    assert trip is not None
    assert trip.rule == "over_current"
    assert "1.7 A" in trip.evidence
    assert "limit 1.5 A" in trip.evidence


def test_a_reading_in_between_resets_the_debounce() -> None:
    """The debounce counts readings in a row."""
    watch = guard()
    watch.drive_on(0.0)
    for at, value in ((0.1, 1.6), (0.2, 1.0), (0.3, 1.6)):
        watch.take(reading("meter.amps", value, at))
    assert watch.check(0.3) is None


def test_overload_is_above_the_limit() -> None:
    """A meter that shows overload has more than it can show: that is above, not unknown."""
    watch = guard()
    watch.drive_on(0.0)
    for at in (0.1, 0.2):
        watch.take(reading("meter.amps", None, at, ("no_data:overload",)))
    trip = watch.check(0.2)
    assert trip is not None
    assert trip.rule == "over_current"


def test_silence_trips_on_the_clock() -> None:
    """A protected channel that goes silent trips at its longest age, without any reading."""
    watch = guard()
    watch.drive_on(10.0)
    watch.take(reading("tacho.edge_age", 0.0, 11.9))
    assert watch.due == 12.0
    assert watch.check(11.99) is None
    trip = watch.check(12.0)
    assert trip is not None
    assert trip.rule == "no_reading"
    assert "meter.amps" in trip.evidence


def test_locked_rotor_counts_from_the_last_rotation_seen() -> None:
    """Readings that say "no edge for so long" do not count as rotation; edges do."""
    watch = guard()
    watch.drive_on(0.0)
    for tick in range(1, 100):
        at = tick / 10
        watch.take(reading("meter.amps", 0.1, at))
        watch.take(reading("tacho.edge_age", max(at - 3.0, 0.0), at))
        if watch.check(at) is not None:
            break
    assert math.isclose(at, 9.0, abs_tol=0.11)
    assert watch.trip is not None
    assert watch.trip.rule == "locked_rotor"


def test_nothing_is_due_while_the_drive_is_off() -> None:
    """With the drive off the clock cannot trip anything."""
    watch = guard()
    assert watch.due == math.inf
    watch.drive_on(0.0)
    watch.drive_off()
    assert watch.check(1e9) is None


def test_the_first_trip_stays() -> None:
    """What tripped first is what is told, whatever comes after."""
    watch = guard()
    watch.drive_on(0.0)
    for at in (0.1, 0.2):
        watch.take(reading("meter.amps", 9.0, at))
    watch.take(reading("meter.amps", 0.0, 0.3))
    trip = watch.check(100.0)
    assert trip is not None
    assert trip.rule == "over_current"


def test_a_reading_that_says_nothing_keeps_no_channel_alive() -> None:
    """An ammeter that answers without a value protects nothing: its age goes on. Overload and a rotor at rest do say
    something."""
    for flag, trips in (("no_data:marker", True), ("no_data:empty", True), ("no_data:no_edges", False)):
        watch = Guard([Above("over_current", "meter.amps", 1.5, 2.0)])
        watch.drive_on(10.0)
        watch.take(reading("meter.amps", None, 11.5, (flag,)))
        trip = watch.check(12.0)
        assert (trip is not None and trip.rule == "no_reading") is trips


def test_policies_are_put_together() -> None:
    """`a | b` is both, in either order and with more; what one of them sees trips."""
    low, high = Above("low", "meter.amps", 1.0), Above("high", "meter.amps", 2.0)
    locked = LockedRotor("tacho.edge_age", 6.0)
    for both in (low | high | locked, Policies((low,)) | (high | locked), low | (high | locked)):
        assert tuple(both) == (low, high, locked)
    watch = Guard(low | locked)
    watch.drive_on(0.0)
    watch.take(reading("meter.amps", 1.5, 0.1))
    trip = watch.check(0.1)
    assert trip is not None
    assert trip.rule == "low"


def test_limits_are_finite_unless_it_is_written_out() -> None:
    """A policy that is given a limit only trips on silence too; one that may be silent for ever says so."""
    watch = Guard([Above("over_current", "meter.amps", 1.5)])
    watch.drive_on(0.0)
    assert watch.due < math.inf
    watch = Guard([Above("over_current", "meter.amps", 1.5, NO_LIMIT)])
    watch.drive_on(0.0)
    assert watch.due == math.inf


def test_the_debounce_counts_seconds_too() -> None:
    """Readings in a row that lie closer together than the debounce time are one spike."""
    watch = Guard([Above("over_current", "meter.amps", 1.5, 2.0, debounce=2, debounce_s=0.2)])
    watch.drive_on(0.0)
    for at in (0.10, 0.15, 0.25):
        watch.take(reading("meter.amps", 9.0, at))
        assert watch.check(at) is None
    watch.take(reading("meter.amps", 9.0, 0.31))
    trip = watch.check(0.31)
    assert trip is not None
    assert (trip.at, trip.readings[0].at, trip.readings[-1].at) == (0.31, 0.10, 0.31)


def test_a_trip_of_the_clock_is_due_when_it_is_due() -> None:
    """Its moment is when the age ran out, not when somebody looked; the last reading is its evidence; silence discards
    the hold, a locked rotor ends the run."""
    watch = guard()
    watch.drive_on(10.0)
    watch.take(reading("meter.amps", 0.1, 11.0))
    trip = watch.check(13.4)
    assert trip is not None
    assert (trip.rule, trip.at, trip.ends_run) == ("no_reading", 13.0, False)
    assert [each.at for each in trip.readings] == [11.0]
    watch = Guard([LockedRotor("tacho.edge_age", 6.0)])
    watch.drive_on(10.0)
    trip = watch.check(16.5)
    assert trip is not None
    assert (trip.rule, trip.at, trip.ends_run) == ("locked_rotor", 16.0, True)


def test_off_is_what_is_commanded_then() -> None:
    """When the drive goes off the guard knows it, and what the supply is set to stays."""
    watch = guard()
    watch.command(Commanded(True, 60.0, 1000.0, 12.0, 1.0))
    watch.drive_off()
    assert (watch.commanded.on, watch.commanded.supply_v) == (False, 12.0)


@pytest.mark.parametrize("trips", [True, False])
def test_a_value_at_its_limit_is_kept(trips: bool) -> None:
    """Only what is above the limit trips."""
    watch = Guard([Above("over_current", "meter.amps", 1.5)])
    watch.drive_on(0.0)
    watch.take(reading("meter.amps", 1.5 + (1e-9 if trips else 0.0), 0.1))
    assert (watch.check(0.1) is not None) is trips
