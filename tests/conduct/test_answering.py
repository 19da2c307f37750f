"""Does the rig answer as commanded: pairs of commanded and measured, their debounce, and which of them end the run."""

from __future__ import annotations

import pytest

from sweeprig.conduct.answering import (
    Answer,
    CurrentWhileOff,
    DutyMeasured,
    FrequencyMeasured,
    SupplyMeasured,
    VoltageAtDuty,
    VoltageWhileOff,
    next_to_none,
)
from sweeprig.conduct.protection import Commanded, Guard, Trip
from sweeprig.quantities import Reading

OFF = Commanded(False, 0.0, 0.0, 12.0, 0.0)
AT_20 = Commanded(True, 20.0, 1000.0, 12.0, 0.0)


def judged(
    policy: Answer, to: Commanded, *values: float, flags: tuple[str, ...] = (), apart_s: float = 0.6
) -> Trip | None:
    """The trip after these values, some time apart."""
    guard = Guard([policy])
    guard.command(to)
    unit = {"supply.amps": "A", "scope.duty": "%", "scope.frequency": "Hz"}.get(policy.channel, "V")
    for n, value in enumerate(values):
        guard.take({policy.channel: Reading(value, 0.0, unit, apart_s * n, policy.channel, flags)})
    return guard.check(apart_s * len(values))


@pytest.mark.parametrize(
    ("policy", "to", "value", "rule", "ends_run"),
    [
        (CurrentWhileOff("supply.amps"), OFF, 0.3, "switch_short", True),
        (VoltageWhileOff("meter.volts"), OFF, 11.9, "switch_short", True),
        (VoltageAtDuty("meter.volts"), AT_20, 0.01, "switch_open", False),
        (DutyMeasured("scope.duty"), AT_20, 22.0, "duty_not_as_commanded", False),
        (FrequencyMeasured("scope.frequency"), AT_20, 1020.0, "frequency_not_as_commanded", False),
        (SupplyMeasured("supply.volts"), AT_20, 14.0, "supply_pumped_up", True),
        (SupplyMeasured("supply.volts"), OFF, 14.0, "supply_pumped_up", True),
        (SupplyMeasured("supply.volts"), AT_20, 9.0, "supply_too_low", False),
        (SupplyMeasured("supply.volts"), AT_20, 11.1, "supply_too_low", False),
        (SupplyMeasured("supply.volts"), AT_20, 12.8, "supply_too_high", False),
    ],
)
def test_what_contradicts(policy: Answer, to: Commanded, value: float, rule: str, ends_run: bool) -> None:
    """Three readings in a row over more than a second contradict; two do not. The trip has them and its time; a switch
    that failed short and a supply that is pumped up end the run, the others discard the hold."""
    kind = type(policy)
    assert judged(kind(policy.channel), to, value, value) is None
    assert judged(kind(policy.channel), to, value, value, value, apart_s=0.4) is None
    trip = judged(policy, to, value, value, value)
    assert trip is not None
    assert (trip.rule, trip.ends_run, trip.at) == (rule, ends_run, 1.2)
    assert {reading.value for reading in trip.readings} == {value}
    assert policy.channel in trip.evidence


@pytest.mark.parametrize(
    ("policy", "to", "value"),
    [
        (CurrentWhileOff("supply.amps"), OFF, 0.04), (CurrentWhileOff("supply.amps"), AT_20, 0.3),
        (VoltageWhileOff("meter.volts"), OFF, 10.0), (VoltageWhileOff("meter.volts"), AT_20, 11.9),
        (VoltageAtDuty("meter.volts"), AT_20, 3.0), (VoltageAtDuty("meter.volts"), OFF, 0.0),
        (VoltageAtDuty("meter.volts"), Commanded(True, 90.0, 1000.0, 12.0), 11.9),
        (VoltageAtDuty("meter.volts"), Commanded(True, 5.0, 1000.0, 12.0), 0.0),
        (DutyMeasured("scope.duty"), AT_20, 20.9), (DutyMeasured("scope.duty"), OFF, 50.0),
        (DutyMeasured("scope.duty", delay_s=1e-6), Commanded(True, 20.0, 25_000.0, 12.0), 23.0),
        (DutyMeasured("scope.duty"), Commanded(True, 100.0, 1000.0, 12.0), 0.0),
        (FrequencyMeasured("scope.frequency"), AT_20, 1009.0), (FrequencyMeasured("scope.frequency"), OFF, 50.0),
        (SupplyMeasured("supply.volts"), AT_20, 12.4), (SupplyMeasured("supply.volts"), AT_20, 11.6),
        (SupplyMeasured("supply.volts"), OFF, 13.6), (SupplyMeasured("supply.volts"), OFF, 0.0),
        (SupplyMeasured("supply.volts"), Commanded(True, 20.0, 1000.0, None), 40.0),
    ],
)  # fmt: skip
def test_what_does_not(policy: Answer, to: Commanded, value: float) -> None:
    """Within the tolerance, in the other state of the drive, or where nothing is commanded, no reading contradicts."""
    assert judged(policy, to, *[value] * 10) is None


def test_a_motor_that_never_answered_to_the_duty_is_no_short() -> None:
    """A capacitor at the motor may hold it at full voltage at any duty; only a change to full voltage contradicts."""
    assert judged(VoltageAtDuty("meter.volts"), AT_20, *[11.9] * 10) is None
    assert judged(VoltageAtDuty("meter.volts"), AT_20, 3.0, *[11.9] * 3) is not None


def test_a_rotor_that_runs_down_is_no_short() -> None:
    """Its voltage falls from reading to reading; that of a switch that conducts stays."""
    assert judged(VoltageWhileOff("meter.volts"), OFF, 11.5, 11.2, 10.9, 10.6) is None
    assert judged(VoltageWhileOff("meter.volts"), OFF, 11.5, 11.5, 11.49) is not None


def test_a_supply_at_its_limit_is_not_too_low() -> None:
    """While its current limit acts its voltage is not its setting, and the readings say so."""
    assert judged(SupplyMeasured("supply.volts"), AT_20, 6.0, 6.0, 6.0, 6.0, flags=("supply_limited",)) is None


def test_a_new_command_begins_anew() -> None:
    """Readings of different commands are not in a row."""
    guard = Guard([DutyMeasured("scope.duty")])
    for n in range(6):
        guard.command(Commanded(True, 20.0, 1000.0, 12.0, float(n // 2)))
        guard.take({"scope.duty": Reading(30.0, 0.0, "%", 1.0 * n, "scope.duty")})
        assert guard.check(1.0 * n) is None


def test_next_to_nothing_by_hand() -> None:
    """At 20 % of 12 V, 2.4 V are due, of which a diode of 1 V leaves 1.6 V: 0.2 V is an open switch, 0.3 V is not. At
    5 % a diode could explain that nothing is left (by hand)."""
    assert next_to_none(0.2, 0.20, 12.0)
    assert not next_to_none(0.3, 0.20, 12.0)
    assert not next_to_none(0.0, 0.05, 12.0)


def test_what_only_listens_is_not_read_for_protection() -> None:
    """A policy on a pair is judged where its channel is read anyway: no hold gets more messages because of it."""
    assert Guard([DutyMeasured("scope.duty")]).channels() == ()
