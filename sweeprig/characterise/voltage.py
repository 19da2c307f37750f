"""The two voltages of a chopped motor: the mean motor voltage that is read, and the applied voltage that is set.

They differ by the freewheel interval and the back-EMF of a current-free gap; neither stands for the other.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from sweeprig.holds import Condition
from sweeprig.plan import Plan
from sweeprig.quantities import Reading


@dataclass(frozen=True, slots=True)
class MeanVoltage:
    """Mean motor voltage over whole PWM periods (not r.m.s.), V, its standard uncertainty, and what it leans on."""

    volts: float
    u: float
    flags: tuple[str, ...] = ()


def applied_voltage(duty_percent: float, supply_volts: float, switch_volts: float = 0.0) -> float:
    """D·(V_supply − V_switch), V: the setting, not what a meter reads at the motor."""
    return duty_percent / 100.0 * (supply_volts - switch_volts)


def mean_motor_voltage(plan: Plan, condition: Condition, means: Mapping[str, Reading]) -> MeanVoltage | None:
    """From the readings of one hold; None without a motor voltage reading.

    `voltage_at` across_motor: as it was read. switch_node: V_supply − V_node, the supply's own `volts` in the same
    window; where the supply gave none its setting, flagged `supply_setting_assumed` and without uncertainty of its own.
    """
    read = _value(means, plan.roles.get("motor_voltage"))
    if read is None:
        return None
    if plan.voltage_at != "switch_node":
        return MeanVoltage(*read)
    supply = plan.roles.get("supply")
    volts = _value(means, None if supply is None else f"{supply}.volts")
    if volts is None:
        return MeanVoltage(condition.supply_v - read[0], read[1], ("supply_setting_assumed",))
    return MeanVoltage(volts[0] - read[0], math.hypot(volts[1], read[1]))


def _value(means: Mapping[str, Reading], channel: str | None) -> tuple[float, float] | None:
    reading = None if channel is None else means.get(channel)
    return None if reading is None or reading.value is None else (reading.value, reading.u)
