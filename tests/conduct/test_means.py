"""Means of the cycles that count, and what a settled hold says of itself."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from sweeprig.conduct.means import means_of, settled_means, settling_flags
from sweeprig.conduct.settle import Settled
from sweeprig.quantities import Reading

FOUND = Settled(True, False, 1.0, 2, 1010.0, 6.0)


def cycle(at: float, rpm: float | None, volts: float) -> dict[str, Reading]:
    return {
        "t.speed": Reading(rpm, 0.5, "rpm", at, "t.speed"),
        "m.volts": Reading(volts, 0.01, "V", at + 0.1, "m.volts"),
        "t.edge_age": Reading(0.01, 0.0, "s", at, "t.edge_age"),
    }


CYCLES = [cycle(1.0, 700.0, 2.0), cycle(2.0, 1000.0, 3.0), cycle(3.0, 1020.0, 5.0)]


def test_means_are_of_the_cycles_that_gave_data() -> None:
    """Channels that say when an edge was seen are no quantity to average; a reading without data counts in none."""
    means = means_of([*CYCLES, cycle(4.0, None, 5.0)])
    assert set(means) == {"t.speed", "m.volts"}
    assert means["t.speed"].value == pytest.approx((700.0 + 1000.0 + 1020.0) / 3.0)


def test_only_what_counted_is_averaged() -> None:
    """Every channel from the first reading of the settled window on."""
    means = settled_means(CYCLES, 2.0, "t.speed", FOUND)
    assert means["t.speed"].value == 1010.0
    assert means["m.volts"].value == 4.0


def test_u_has_the_distance_from_the_final_value_and_the_drift_in_it() -> None:
    """u of the speed: what is known of its distance (6 rpm) and the instrument's (0.5 rpm) in squares, where that is
    more than the scatter says; a drift of 60 % a minute over a window of 1 s adds 1/√12 of its 1 %."""
    scatter = means_of(CYCLES[1:])["t.speed"].u
    assert settled_means(CYCLES, 2.0, "t.speed", replace(FOUND, u=0.0))["t.speed"].u == scatter
    large = replace(FOUND, u=60.0)
    assert settled_means(CYCLES, 2.0, "t.speed", large)["t.speed"].u == pytest.approx(math.hypot(60.0, 0.5))
    drifting = replace(large, drift_percent_per_minute=60.0)
    expected = math.hypot(60.0, 0.5, 10.1 / math.sqrt(12.0))
    assert settled_means(CYCLES, 2.0, "t.speed", drifting)["t.speed"].u == pytest.approx(expected)


def test_what_a_hold_says_of_itself() -> None:
    """Nothing when it settled; what was reached when not; a drift that is sure in either case; too few readings."""
    assert settling_flags(FOUND) == ()
    assert settling_flags(None) == ("not_settled_to_tolerance:too few speed readings",)
    short = replace(FOUND, decided=False, reached_percent=2.345, drift_percent_per_minute=-0.31, u_drift=0.05)
    assert settling_flags(short) == ("not_settled_to_tolerance:2.3%", "still_drifting:-0.31%/min")
    assert settling_flags(replace(short, u_drift=0.2)) == ("not_settled_to_tolerance:2.3%",)
