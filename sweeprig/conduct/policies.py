"""Which policies a rig gets: its limits, the locked rotor, and whether it answers as commanded. Finite by default.

What each rule does is `protection` and `answering`.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

from sweeprig.conduct import answering
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.protection import NO_LIMIT, Above, LockedRotor, Policies, Policy
from sweeprig.roles import Adapter

if TYPE_CHECKING:
    from sweeprig.conduct.rig import RigUse


def policies(use: RigUse, source: Mapping[str, str], adapters: Mapping[str, Adapter]) -> Policies:
    """All that are in force for a rig, put together."""
    return _limits(use, source) | _answers(use, source, adapters)


def _limits(use: RigUse, source: Mapping[str, str]) -> Policies:
    limits, roles = use.limits, use.rig.roles
    ages = limits.longest_age.by_role()
    found = Policies()
    for rule, role, limit in (
        ("over_current", "current", limits.current),
        ("over_voltage", "motor_voltage", limits.motor_voltage),
        ("over_speed", "speed", limits.speed),
        ("winding_too_hot", "winding_temperature", limits.winding_temperature),
        ("case_too_hot", "case_temperature", limits.case_temperature),
    ):
        if role in roles and limit is not None:
            age = ages.get(role, NO_LIMIT)  # the rig file states no age for this one: it is not watched by the clock
            debounce = int(BOUNDS["debounce_readings"])
            found |= Above(rule, roles[role], limit, age, debounce, BOUNDS["debounce_s"])
    return found | LockedRotor(f"{source['speed']}.edge_age", limits.locked_rotor_time)


def _answers(use: RigUse, source: Mapping[str, str], adapters: Mapping[str, Adapter]) -> Policies:
    """On pairs of commanded and measured, where the rig measures. A control input leaves the motor on the supply."""
    rig, roles, found = use.rig, use.rig.roles, list[Policy]()
    if rig.drive_kind == "power_switch":
        if "current" in roles:
            found.append(answering.CurrentWhileOff(roles["current"]))
        if "motor_voltage" in roles and rig.voltage_at == "across_motor":
            found += [
                answering.VoltageWhileOff(roles["motor_voltage"]),
                answering.VoltageAtDuty(roles["motor_voltage"]),
            ]
    if "duty" in roles:
        at_gate = rig.instruments[source["duty"]].connected_to == "drive_signal"
        found.append(answering.DutyMeasured(roles["duty"], delay_s=0.0 if at_gate else rig.switch_delay or 0.0))
    if "pwm_frequency" in roles:
        found.append(answering.FrequencyMeasured(roles["pwm_frequency"]))
    supply = source.get("supply")
    if supply is not None and "volts" in adapters[supply].channels:
        found.append(answering.SupplyMeasured(f"{supply}.volts"))
    return Policies(found)
