"""The motor file: its nameplate, the limits its findings must meet, and, for the simulated bench, the true motor.

Field names are the file's keys; quantities are held in base units (V, A, s, rpm, %, degC). No checks across files.
"""

from __future__ import annotations

import difflib
from typing import Annotated, Literal

from pydantic import AfterValidator, Field, PlainSerializer, PlainValidator, WithJsonSchema

from sweeprig.job.amounts import Amount, Measure, Number, Strict, Words, problem, read_measure, write_measure
from sweeprig.job.simulated_models import Simulated

FINDING_UNITS = {
    "stall_duty_percent": "%", "sustain_99_duty_percent": "%", "start_duty_percent": "%",
    "start_99_duty_percent": "%", "cold_start_duty_percent": "%", "long_run_duty_percent": "%",
    "start_stall_hysteresis_percent": "%", "kick_99_s": "s", "stall_speed_rpm": "rpm", "stall_voltage_volts": "V",
    "lowest_reliable_speed_rpm": "rpm", "top_speed_rpm": "rpm", "linearity_percent": "%",
    "curve_hysteresis_rpm": "rpm", "resolution_rpm_per_step": "rpm", "repeatability_rpm": "rpm", "coast_time_s": "s",
    "low_duty_percent": "%", "low_duty_from_rest_percent": "%", "high_duty_percent": "%", "low_speed_rpm": "rpm",
    "high_speed_rpm": "rpm", "turndown": "1",
}  # fmt: skip
"""Findings that may carry a limit, with the unit the limit is written in."""

Bound = Annotated[
    Measure,
    PlainValidator(read_measure),
    PlainSerializer(write_measure),
    WithJsonSchema({"type": ["string", "number"], "description": "in the finding's unit; turndown: a bare number"}),
]


class FindingLimit(Strict):
    """What a finding must meet: floats in base units that know their `.unit`; one of the two at least is stated."""

    at_least: Bound | None = None
    at_most: Bound | None = None


def _known_finding(name: str) -> str:
    if name not in FINDING_UNITS:
        near = difflib.get_close_matches(name, FINDING_UNITS, 1, 0.5)
        remedy = f'Did you mean "{near[0]}"?' if near else "Look up the name under findings"
        raise problem("no finding of that name can carry a limit", name, ", ".join(FINDING_UNITS), remedy)
    return name


_Voltage = Annotated[float, Amount("V", 0.0, 100.0, "sweeprig is for small motors on extra-low voltage", above=True)]
_Time = Annotated[float, Amount("s", 0.1, 3600.0, "Shorter than 0.1 s no switch-off is in time")]


_Percent = Annotated[float, Amount("%", 0.0, 100.0, "Duty is the on-time in percent of the period", above=True)]
_Spread = Annotated[float, Amount("%", 0.01, 20.0, "Standard deviation of the law, % duty", above=False)]
_Seconds = Annotated[float, Amount("s", 0.001, 3600.0)]


class ExpectedOfMotor(Strict):
    """What its owner expects of it, to predict the night; what is left out is guessed. Nothing else rests on it.

    stall_duty, start_duty   where half of the trials succeed; the spreads: over what range of duty that changes
    settling_time            from a step of duty to a settled speed; coast_time: from drive off to rest
    kick_time                pulse that starts it in half of the trials
    """

    stall_duty: _Percent | None = None
    stall_spread: _Spread | None = None
    start_duty: _Percent | None = None
    start_spread: _Spread | None = None
    kick_time: _Seconds | None = None
    settling_time: _Seconds | None = None
    coast_time: _Seconds | None = None


class Motor(Strict):
    """A motor as its nameplate and its owner describe it.

    kind                   `brushed`, or `with_electronics` (a fan with its own commutation inside)
    longest_time_constant  of speed after a step of duty, mechanical or electrical, s; an estimate on the long side
    locked_rotor_time      longest time it may stand still with the drive on at maximum voltage, s
    cooling_time           time constant with which the winding cools at rest, s; the default is common practice for
                           small motors, no source
    longest_restart_time   kind `with_electronics`: longest pause before it tries to start again by itself, s
    """

    name: Annotated[str, Words(80)]
    kind: Literal["brushed", "with_electronics"]
    load: Literal["fan", "pump", "stirrer", "other", "none"]
    nominal_voltage: _Voltage
    maximum_voltage: _Voltage
    maximum_current: Annotated[float, Amount("A", 0.0, 50.0, "sweeprig is for small motors", above=True)]
    maximum_speed: Annotated[float, Amount("rpm", 0.0, 200_000.0, "No small motor turns faster", above=True)]
    locked_rotor_time: _Time
    pulses_per_revolution: Annotated[
        float, Number(0.0, 10_000.0, "Speed is pulse rate over pulses per revolution", above=True)
    ]
    longest_time_constant: Annotated[
        float, Amount("s", 0.001, 600.0, "Holds last at least five time constants, and holds must end")
    ]
    cooling_time: Annotated[float, Amount("s", 1.0, 7200.0, "A winding cools in seconds to hours")] = 120.0
    longest_restart_time: _Time | None = None
    maximum_duty: (
        Annotated[float, Amount("%", 0.0, 100.0, "Duty is the on-time in percent of the period", above=True)] | None
    ) = None
    maximum_temperature: Annotated[float, Amount("degC", 0.0, 250.0, "Of the winding")] | None = None
    maker: Annotated[str, Words()] | None = None
    part_number: Annotated[str, Words()] | None = None
    serial: Annotated[str, Words()] | None = None
    lot: Annotated[str, Words()] | None = None
    attitude: Annotated[str, Words()] | None = None
    hours_before: Annotated[float, Number(0.0, 1e6, "Hours it had run before this job")] | None = None
    starts_before: Annotated[float, Number(0.0, 1e9, "Starts it had made before this job")] | None = None
    limits: dict[Annotated[str, AfterValidator(_known_finding)], FindingLimit] = Field(default_factory=dict)
    expected: ExpectedOfMotor = Field(default_factory=ExpectedOfMotor)
    simulated: Simulated | None = None
