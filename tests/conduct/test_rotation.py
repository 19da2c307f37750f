"""Whether a stop of the rotor is believed: what voltage and current say when the tachometer has no edges any more."""

from __future__ import annotations

from dataclasses import replace

import pytest

from sweeprig.conduct.protection import Commanded
from sweeprig.conduct.rotation import CONTRADICTED, Rotation
from sweeprig.conduct.sanity import Doubt, Looked
from sweeprig.quantities import Reading

LOOKED = Looked("board.speed", "board.edge_age", "meter.volts", "supply.amps", "scope.duty", "supply.volts",
                switched=True, one_way=True, brushed_on_diode=True, current_limit=1.2)  # fmt: skip
"""A brushed fan of 11 ohm on 12 V: at rest and 20 % it takes 12·0.2²/11 = 44 mA from the supply, less a part."""
AT_20 = Commanded(True, 20.0, 1000.0, 12.0, 0.0)


def cycle(volts: float, amps: float, rpm: float | None, age_s: float = 0.05) -> dict[str, Reading]:
    flags = () if rpm is not None else ("no_data:no_edges",)
    return {
        "meter.volts": Reading(volts, 0.002, "V", 0.0, "meter.volts"),
        "supply.amps": Reading(amps, 0.0005, "A", 0.0, "supply.amps"),
        "board.speed": Reading(rpm, 0.0, "rpm", 0.0, "board.speed", flags),
        "board.edge_age": Reading(age_s, 0.0, "s", 0.0, "board.edge_age"),
    }


def stopped(rotation: Rotation, *cycles: dict[str, Reading], to: Commanded = AT_20) -> Doubt | None:
    rotation.begin()
    for each in cycles:
        rotation.take(each)
    return rotation.stopped(to)


def knowing(volts: float = 1.9, amps: float = 0.036, duty: float = 18.0) -> Rotation:
    """It has seen the rotor at rest at another duty."""
    rotation = Rotation(LOOKED, 2, 5000.0)
    rest = cycle(volts, amps, None, 9.0)
    wild = cycle(volts, 12.0, None, 9.0)  # one reading alone may be anything
    assert stopped(rotation, rest, rest, wild, rest, rest, to=replace(AT_20, duty_percent=duty)) is None
    return rotation


TURNING = [cycle(2.1, 0.02, 700.0)] * 6
"""On a current without gaps the voltage says nothing; the current is less than half of that at rest."""


def test_a_real_stop_is_believed() -> None:
    """The current rises to what the motor takes at rest, also where the last cycle has only half of the stop in it."""
    for amps in (0.044, 0.032):
        assert stopped(knowing(), *TURNING, cycle(2.1, amps, None, 0.9)) is None


def test_the_last_cycle_with_a_speed_may_have_the_stop_in_it() -> None:
    """The rotor stopped within a cycle that still had edges: that one is nothing to compare with."""
    half = cycle(2.1, 0.030, 300.0)
    assert stopped(knowing(), *TURNING, half, cycle(2.1, 0.032, None, 0.9)) is None


def test_a_broken_wire_is_not() -> None:
    """No edges, and the current stays: the rotor turns."""
    doubt = stopped(knowing(), *TURNING, cycle(2.1, 0.0205, None, 0.9))
    assert doubt is not None
    assert doubt.cause == CONTRADICTED
    assert "supply.amps stays at 20.5 mA" in doubt.evidence


def test_the_voltage_tells_where_the_current_has_gaps() -> None:
    """At a low PWM frequency the current hardly changes, but back-EMF in its gaps lifts the mean voltage above D·V_s,
    2.4 V; at rest it is that at most."""
    gaps = [cycle(4.0, 0.040, 900.0)] * 5
    rotation = Rotation(LOOKED, 2, 5000.0)
    assert stopped(rotation, *gaps, cycle(2.2, 0.043, None, 0.9)) is None
    doubt = stopped(Rotation(LOOKED, 2, 5000.0), *gaps, cycle(3.95, 0.0401, None, 0.9))
    assert doubt is not None
    assert doubt.cause == CONTRADICTED
    assert "meter.volts" in doubt.evidence


def test_a_fast_rotor_of_which_no_rest_is_known() -> None:
    """Before any rest was seen a stop from high speed must raise the current; from a crawl nothing can be told."""
    to = replace(AT_20, duty_percent=60.0)
    fast = [cycle(7.0, 0.17, 2000.0)] * 4
    assert stopped(Rotation(LOOKED, 2, 5000.0), *fast, cycle(7.0, 0.171, None, 0.9), to=to) is not None
    assert stopped(Rotation(LOOKED, 2, 5000.0), *fast, cycle(7.0, 0.38, None, 0.9), to=to) is None
    crawl = [cycle(2.1, 0.041, 40.0)] * 4
    assert stopped(Rotation(LOOKED, 2, 5000.0), *crawl, cycle(2.1, 0.042, None, 0.9)) is None


def test_turning_and_rest_that_hardly_differ_tell_nothing() -> None:
    """A motor whose current does not depend on rotation is believed, whatever it does."""
    assert stopped(knowing(amps=0.0165), *TURNING, cycle(2.1, 0.0205, None, 0.9)) is None


@pytest.mark.parametrize("duty", [18.0, 10.0])
def test_a_start_that_the_tachometer_did_not_see(duty: float) -> None:
    """A hold without any edge: as much current as known at rest is believed; much less means that it turns. What is
    known comes from a duty nearby, or from one far below."""
    known = 0.036 * (duty / 18.0) ** 2
    assert stopped(knowing(0.105 * duty, known, duty), *[cycle(2.1, 0.044, None, 5.0)] * 5) is None
    doubt = stopped(knowing(0.105 * duty, known, duty), *[cycle(2.1, 0.0184, None, 5.0)] * 5)
    assert doubt is not None
    assert doubt.cause == CONTRADICTED


def test_a_rotor_that_still_ran_down_in_the_last_cycle_is_believed() -> None:
    """A stop right after a step down, before any speed could be told: what was read is of running down, not rest."""
    assert stopped(knowing(), cycle(3.4, 0.004, None, 0.9)) is None
    assert stopped(knowing(), cycle(3.4, 0.004, None, 1.6)) is not None


def test_a_start_that_shows_in_its_own_current() -> None:
    """Without any knowledge the current of a rotor that starts falls during the hold; at rest it stays."""
    falls = [cycle(2.1, amps, None, 5.0) for amps in (0.044, 0.03, 0.021, 0.02)]
    doubt = stopped(Rotation(LOOKED, 2, 5000.0), *falls)
    assert doubt is not None
    assert "the rotor started" in doubt.evidence
    stays = [cycle(2.1, amps, None, 5.0) for amps in (0.044, 0.043, 0.043, 0.0425)]
    assert stopped(Rotation(LOOKED, 2, 5000.0), *stays) is None


def test_a_switch_that_opens_is_no_stop() -> None:
    """The rotor stops because nothing drives it: the voltage is gone, or the current fell as it stopped."""
    gone = stopped(knowing(), *TURNING, cycle(0.002, 0.0, None, 0.9))
    assert gone is not None
    assert gone.cause == "switch_open"
    fell = stopped(knowing(), *TURNING, cycle(0.6, 0.004, None, 0.9))
    assert fell is not None
    assert fell.cause == "switch_open"
    assert "fell from 20 mA to 4 mA" in fell.evidence


def test_only_a_brushed_motor_on_a_diode_is_judged() -> None:
    """What a motor's own electronics, or a bridge, let flow says nothing about rotation."""
    other = Rotation(replace(LOOKED, brushed_on_diode=False), 2, 5000.0)
    assert stopped(other, *TURNING, cycle(0.0, 0.0, None, 0.9)) is None


def test_a_rig_that_reads_neither() -> None:
    """Without voltage and current channels the tachometer is believed."""
    blind = Rotation(replace(LOOKED, voltage=None, current=None), 2, 5000.0)
    bare = [
        {name: each[name] for name in ("board.speed", "board.edge_age")} for each in [*TURNING, cycle(0, 0, None, 0.9)]
    ]
    assert stopped(blind, *bare) is None


FAST = [cycle(0.0, 0.036 * (20.0 / 18.0) ** 2, 700.0)] * 3
"""Edges that say 700 rpm, more than 40 % of 20 % of 5000 rpm, while the current is that of a rotor at rest."""


def says_rest(rotation: Rotation, *cycles: dict[str, Reading]) -> str:
    rotation.begin()
    for each in cycles:
        rotation.take(each)
    return rotation.at_rest(AT_20)


def test_edges_that_no_rotor_makes() -> None:
    """A lamp's flicker on the sensor: both voltage and current are as known at rest from a duty nearby, at a speed that
    would show in one of them."""
    at_rest = [replace_volts(each, 1.9 * 20.0 / 18.0) for each in FAST]
    assert "supply.amps 44.44 mA, at rest 44.44 mA" in says_rest(knowing(), *at_rest)


def test_a_rotor_that_turns_is_believed() -> None:
    """Its current is less (no gaps), or its voltage more (gaps), than at rest; and where it is slow, or nothing is
    known at rest, or no three readings were taken, nothing is said."""
    at_rest = [replace_volts(each, 1.9 * 20.0 / 18.0) for each in FAST]
    assert says_rest(knowing(), *[cycle(1.9 * 20.0 / 18.0, 0.02, 700.0)] * 3) == ""
    assert says_rest(knowing(), *[replace_volts(each, 4.0) for each in FAST]) == ""
    assert says_rest(knowing(), *[{**each, "board.speed": cycle(0, 0, 100.0)["board.speed"]} for each in at_rest]) == ""
    assert says_rest(Rotation(LOOKED, 2, 5000.0), *at_rest) == ""
    assert says_rest(knowing(), *at_rest[:2]) == ""
    other = knowing()
    other.looked = replace(LOOKED, voltage=None)
    assert says_rest(other, *at_rest) == ""


def replace_volts(each: dict[str, Reading], volts: float) -> dict[str, Reading]:
    return {**each, "meter.volts": replace(each["meter.volts"], value=volts)}
