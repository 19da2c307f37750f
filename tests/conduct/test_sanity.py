"""Readings that cannot be true, as pure rules: frozen, jumping, out of proportion, reversed; and what is healthy."""

from __future__ import annotations

import math

import pytest

from sweeprig.conduct.protection import Commanded
from sweeprig.conduct.sanity import Doubt, Looked, MotorFacts, Sanity, jumped, voltage_range
from sweeprig.quantities import Reading

FAN = MotorFacts(brushed=True, nominal_v=12.0, maximum_rpm=5000.0, time_constant_s=0.6)
LOOKED = Looked("board.speed", "board.edge_age", "meter.volts", "supply.amps", "scope.duty", "supply.volts",
                switched=True, one_way=True, brushed_on_diode=True, current_limit=1.2)  # fmt: skip
UNITS = {"volts": "V", "amps": "A", "speed": "rpm", "duty": "%"}


def at_duty(duty: float, on: bool = True) -> Commanded:
    return Commanded(on, duty, 1000.0, 12.0, 0.0)


class Fed:
    """A Sanity that is fed half-second cycles at one setting after another; every text differs unless it is given."""

    def __init__(self, looked: Looked = LOOKED, motor: MotorFacts = FAN) -> None:
        self.sanity, self.number, self.to = Sanity(looked, motor), 0, at_duty(0.0, on=False)

    def set(self, duty: float) -> Fed:
        self.to = at_duty(duty)
        return self

    def cycle(self, raws: dict[str, str] | None = None, /, **values: float | None) -> Doubt | None:
        """values: by quantity: volts, amps, speed, duty"""
        self.number += 1
        readings = {}
        for quantity, value in values.items():
            channel = next(
                c for c in ("meter.volts", "supply.amps", "board.speed", "scope.duty") if c.endswith(quantity)
            )
            raw = (raws or {}).get(quantity, f"{value} {self.number}")
            flags = () if value is not None else ("no_data:no_edges",)
            readings[channel] = Reading(value, 0.0, UNITS[quantity], 0.5 * self.number, channel, flags, raw)
        return self.sanity.take(readings, self.to)


HEALTHY = {"volts": 6.9, "amps": 0.2, "speed": 2000.0, "duty": 60.0}


def test_a_healthy_hold_is_not_doubted() -> None:
    """Values of a fan at 60 % for a minute, every text another, raise nothing and lose no reading."""
    fed = Fed().set(60.0)
    for n in range(120):
        assert fed.cycle(**{name: value * (1.0 + 0.01 * math.sin(n)) for name, value in HEALTHY.items()}) is None
        assert fed.sanity.jumped == []


@pytest.mark.parametrize("quantity", ["volts", "amps", "speed", "duty"])
def test_frozen_across_a_change_of_duty(quantity: str) -> None:
    """The same text in six readings across a change of duty of 5 % or more, while the rotor turns, is a frozen channel;
    five readings are not, nor is a change of less."""
    for change, readings, doubted in ((5.0, 6, True), (5.0, 5, False), (4.9, 60, False)):
        fed = Fed()
        found = []
        for n in range(readings):
            fed.set(60.0 if n < readings - 2 else 60.0 - change)
            found.append(fed.cycle({quantity: "+2.00E-01"}, **{**HEALTHY, "volts": 6.9 if n % 2 else 6.8}))
        assert any(doubt is not None and doubt.cause == "frozen" for doubt in found) is doubted
        assert found[:-1] == [None] * (readings - 1)


def test_a_rotor_at_rest_may_read_the_same() -> None:
    """At rest, and with the drive off, nothing must respond to the duty."""
    fed = Fed()
    for n in range(12):
        fed.set(3.0 if n < 6 else 9.0)
        assert fed.cycle({"amps": "0", "volts": "0"}, volts=0.2, amps=0.0, speed=None, duty=3.0) is None


def test_a_channel_that_need_not_respond_is_left_alone() -> None:
    """A fan with a control input hangs on the supply: its voltage stays the same at every duty."""
    steady = Looked("board.speed", "board.edge_age", "meter.volts", "supply.amps", "scope.duty", "supply.volts",
                    switched=False, one_way=True, brushed_on_diode=False, current_limit=1.2)  # fmt: skip
    fed = Fed(steady, MotorFacts(False, 12.0, 5000.0, 0.6))
    for n in range(12):
        fed.set(20.0 if n < 6 else 60.0)
        same = {"volts": "12.000", "amps": "0.20", "speed": "2000"}
        assert fed.cycle(same, volts=12.0, amps=0.2, speed=2000.0, duty=20.0) is None


def test_a_jump_that_comes_back_is_no_data() -> None:
    """One speed far off both its neighbours, which agree, is flagged when the next one is there; the hold goes on."""
    fed = Fed().set(60.0)
    for speed in (2000.0, 2010.0, 4990.0):
        assert fed.cycle(**{**HEALTHY, "speed": speed}) is None
        assert fed.sanity.jumped == []
    assert fed.cycle(**{**HEALTHY, "speed": 2005.0}) is None
    assert [reading.value for reading in fed.sanity.jumped] == [4990.0]


def test_how_far_a_motor_may_jump() -> None:
    """Within 0.5 s a time constant of 0.6 s allows 5000 rpm · (1 − e^(−0.5/0.6)) = 2827 rpm (by hand); a neighbour that
    does not come back is a change, not a jump."""

    def speeds(a: float, b: float, c: float) -> bool:
        first, second, third = (Reading(v, 0.0, "rpm", 0.5 * n, "s") for n, v in enumerate((a, b, c)))
        return jumped(first, second, third, 5000.0, 0.6)

    assert speeds(1000.0, 1000.0 + 2830.0, 1000.0)
    assert not speeds(1000.0, 1000.0 + 2820.0, 1000.0)
    assert not speeds(1000.0, 3900.0, 3800.0)
    assert not speeds(1000.0, 5000.0, 1800.0)
    assert not jumped(Reading(None, 0.0, "V", 0.0, "v"), Reading(99.0, 0.0, "V", 1.0, "v"),
                      Reading(1.0, 0.0, "V", 2.0, "v"), 12.0, 0.6)  # fmt: skip


@pytest.mark.parametrize(("quantity", "value"), [("volts", 6900.0), ("volts", 0.0069), ("amps", 7.0), ("speed", 9e4)])
def test_one_impossible_reading_is_no_data(quantity: str, value: float) -> None:
    """What cannot be is, once, only that reading's fault: flagged at once, and the hold goes on."""
    fed = Fed().set(60.0)
    fed.cycle(**HEALTHY)
    assert fed.cycle(**{**HEALTHY, quantity: value}) is None
    assert [reading.value for reading in fed.sanity.jumped] == [value]
    assert fed.cycle(**HEALTHY) is None
    assert value not in [reading.value for reading in fed.sanity.jumped[1:]]


@pytest.mark.parametrize(
    ("value", "cause", "says"),
    [(6900.0, "wrong_scale", "factor of 1000"), (0.0069, "wrong_scale", "factor of 0.001"),
     (21.0, "voltage_impossible", "13 V is possible"), (3.0, "voltage_impossible", "5.9"),
     (-6.9, "leads_reversed", "leads of the motor or of the meter are swapped")],
)  # fmt: skip
def test_an_impossible_voltage_twice(value: float, cause: str, says: str) -> None:
    """Twice in a row a voltage outside of [D·V_s − drops, V_s + 1 V] is a doubt: a factor of 1000 is named as such,
    swapped leads in words."""
    fed = Fed().set(60.0)
    assert fed.cycle(**{**HEALTHY, "volts": value}) is None
    doubt = fed.cycle(**{**HEALTHY, "volts": value})
    assert doubt is not None
    assert doubt.cause == cause
    assert says in doubt.evidence
    assert "meter.volts" in str(doubt)


def test_the_range_of_the_voltage_by_hand() -> None:
    """60 % of 12 V with at most 1 V in switch and diode each: 0.6·11 − 0.4·1 − 0.3 = 5.9 V, and 13 V; a bridge may also
    reverse (by hand)."""
    assert voltage_range(60.0, 12.0, True) == pytest.approx((5.9, 13.0))
    assert voltage_range(60.0, 12.0, False) == pytest.approx((-13.0, 13.0))


def test_the_measured_supply_counts() -> None:
    """Where the supply is read, its reading bounds the voltage, not its setting: a sagging supply is no wrong scale."""
    fed = Fed().set(100.0)
    for n in range(1, 6):
        readings = {"meter.volts": Reading(8.0, 0.0, "V", float(n), "meter.volts", (), f"{n}"),
                    "supply.volts": Reading(8.1, 0.0, "V", float(n), "supply.volts", (), f"{n}"),
                    "board.speed": Reading(1500.0, 0.0, "rpm", float(n), "board.speed", (), f"{n}")}  # fmt: skip
        assert fed.sanity.take(readings, fed.to) is None


def test_a_speed_that_the_supply_cannot_give() -> None:
    """A brushed motor on half its nominal voltage turns at half its maximum speed at most; one with electronics of its
    own may regulate."""
    low = Commanded(True, 100.0, 1000.0, 6.0, 0.0)
    for brushed, doubted in ((True, True), (False, False)):
        sanity = Sanity(LOOKED, MotorFacts(brushed, 12.0, 5000.0, 0.6))
        doubt = None
        for n in range(1, 4):
            reading = Reading(2700.0, 0.0, "rpm", float(n), "board.speed", (), f"{n}")
            doubt = sanity.take({"board.speed": reading}, low)
        assert (doubt is not None and doubt.cause == "speed_impossible") is doubted


def test_another_setting_begins_anew() -> None:
    """One impossible reading before a change of setting and one after it are not two in a row."""
    fed = Fed().set(60.0)
    assert fed.cycle(**{**HEALTHY, "volts": 21.0}) is None
    assert fed.set(50.0).cycle(**{**HEALTHY, "volts": 21.0}) is None


@pytest.mark.parametrize("flag", ["no_data:marker", "no_data:overload", "no_data:empty"])
def test_sentinels_are_no_readings(flag: str) -> None:
    """What says that it has no value is not judged as one."""
    sanity = Sanity(LOOKED, FAN)
    for n in range(10):
        readings = {c: Reading(None, 0.0, "V", float(n), c, (flag,), "9.91E37") for c in ("meter.volts", "supply.amps")}
        assert sanity.take(readings, at_duty(60.0)) is None
        assert sanity.jumped == []
