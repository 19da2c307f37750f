"""Mean motor voltage from either place of the meter, and the applied voltage."""

from __future__ import annotations

from dataclasses import replace

import pytest

from sweeprig.characterise.voltage import MeanVoltage, applied_voltage, mean_motor_voltage
from sweeprig.plan import Plan
from sweeprig.quantities import Reading


def volts(channel: str, value: float | None, u: float) -> Reading:
    return Reading(value, u, "V", 0.0, channel)


def test_across_the_motor_as_read(plan: Plan) -> None:
    """A meter across the motor reads the mean motor voltage itself."""
    found = mean_motor_voltage(plan, plan.conditions[0], {"meter.volts": volts("meter.volts", 5.77, 0.004)})
    assert found == MeanVoltage(5.77, 0.004)


def test_at_the_switch_node_less_from_the_supply(plan: Plan) -> None:
    """At the node it is supply minus node, the supply read in the same window, both uncertainties in it."""
    means = {"meter.volts": volts("meter.volts", 6.20, 0.003), "supply.volts": volts("supply.volts", 11.97, 0.004)}
    found = mean_motor_voltage(replace(plan, voltage_at="switch_node"), plan.conditions[0], means)
    assert found is not None
    assert found.volts == pytest.approx(5.77)
    assert found.u == pytest.approx(0.005)  # exact: 3-4-5
    assert found.flags == ()


def test_no_reading_no_voltage(plan: Plan) -> None:
    """Without a motor voltage, or without data in it, there is none."""
    assert mean_motor_voltage(plan, plan.conditions[0], {}) is None
    assert mean_motor_voltage(plan, plan.conditions[0], {"meter.volts": volts("meter.volts", None, 0.0)}) is None
    bare = replace(plan, roles={"drive": "board", "speed": "board.speed"})
    assert mean_motor_voltage(bare, plan.conditions[0], {"meter.volts": volts("meter.volts", 1.0, 0.0)}) is None


def test_applied_voltage_is_the_setting() -> None:
    """30 % of 12 V is 3.6 V, whatever a meter reads at the motor; the switch's own drop comes off first."""
    assert applied_voltage(30.0, 12.0) == pytest.approx(3.6)  # exact: arithmetic
    assert applied_voltage(50.0, 12.0, 0.4) == pytest.approx(5.8)
