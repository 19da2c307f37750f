"""The rotor as the tachometer shows it: turning, stopped and when, restarted."""

from __future__ import annotations

from sweeprig.conduct.track import Track
from sweeprig.quantities import Reading


def track() -> Track:
    return Track("t.speed", "t.edge_age", "t.edge_gap", 2.0, 0.0)


def cycle(at: float, rpm: float | None, age: float, gap: float | None = None) -> dict[str, Reading]:
    return {
        "t.speed": Reading(rpm, 0.0, "rpm", at, "t.speed"),
        "t.edge_age": Reading(age, 0.0, "s", at, "t.edge_age"),
        "t.edge_gap": Reading(age if gap is None else gap, 0.0, "s", at, "t.edge_gap"),
    }


def test_turning_while_edges_come() -> None:
    """Edges within the longest gap: turning, with the speed of each cycle kept."""
    rotor = track()
    for at in (0.5, 1.0, 1.5):
        rotor.take(cycle(at, 600.0, 0.02, 0.05))
    assert rotor.turning()
    assert [speed for _, speed in rotor.speeds] == [600.0] * 3
    assert rotor.revolutions == 600.0 / 60.0 * 1.5


def test_a_stop_is_timed_between_last_good_and_first_missing_edge() -> None:
    """At 600 rpm and 2 pulses the next edge was due 0.05 s after the last one."""
    rotor = track()
    rotor.take(cycle(1.0, 600.0, 0.01))
    rotor.take(cycle(2.0, 600.0, 0.7))
    assert rotor.stopped_at is not None
    assert [round(t, 3) for t in rotor.stopped_at] == [1.3, 1.35]
    assert rotor.restarts == 0


def test_a_slow_rotor_has_a_longer_gap() -> None:
    """At 60 rpm and 2 pulses edges are 0.5 s apart: a gap of 1.2 s is no stop, one of 1.6 s is."""
    rotor = track()
    rotor.take(cycle(2.0, 60.0, 0.1))
    rotor.take(cycle(4.0, 60.0, 1.2))
    assert rotor.stopped_at is None
    rotor.take(cycle(6.0, None, 1.6))
    assert rotor.stopped_at is not None


def test_a_stop_with_restart_inside_one_window_is_a_stop() -> None:
    """A motor that restarts by itself has stopped; the time is then known only to the window."""
    rotor = track()
    rotor.take(cycle(1.0, 600.0, 0.01))
    rotor.take(cycle(2.0, 500.0, 0.02, gap=0.8))
    assert rotor.stopped_at == (1.0, 2.0)
    assert rotor.restarts == 1


def test_the_rest_before_a_start_is_no_stop() -> None:
    """A gap from before the first revolution is not a stop of this hold."""
    rotor = track()
    rotor.take(cycle(0.5, 300.0, 0.1, gap=5.2))
    rotor.take(cycle(1.0, 900.0, 0.02, gap=0.1))
    assert rotor.stopped_at is None
