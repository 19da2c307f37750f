"""The rig file: real instruments, wiring, roles and limits; and, for simulated instruments, their errors and faults.

Field names are the file's keys; quantities are held in base units. No checks across tables: those are cross_checks.py.
"""

from __future__ import annotations

import datetime as dt
import difflib
import re
from typing import Annotated, Literal

from pydantic import (
    AfterValidator,
    BeforeValidator,
    Field,
    PlainSerializer,
    PlainValidator,
    StringConstraints,
    WithJsonSchema,
)  # fmt: skip

from sweeprig.job.amounts import (
    Amount,
    Measure,
    Number,
    Strict,
    Words,
    exact_text,
    problem,
    read_measure,
    write_measure,
)
from sweeprig.job.fault_models import SimulatedFault
from sweeprig.job.stage_models import SimulatedSource, SimulatedStage
from sweeprig.job.timer_models import PwmTimer
from sweeprig.quantities import Accuracy
from sweeprig.roles import ACTUATORS, SENSORS

ROLES = (*ACTUATORS, *SENSORS)
TERMINATORS = {"LF": b"\n", "CR LF": b"\r\n", "CR": b"\r"}
_LATENCY = Amount("s", 0.0, 60.0, "Time a simulated instrument takes before it answers")
_FAULT = Number(-1e12, 1e12, "A finite number whose unit its name carries")
_NAME = re.compile(r"[a-z][a-z0-9_-]{0,31}")


def _read_name(name: str) -> str:
    if _NAME.fullmatch(name) is None:
        allowed = "a small letter, then up to 31 small letters, digits, _ or -"
        raise problem("this cannot be the name of an instrument", name, allowed, "Channels are called name.quantity")
    return name


def _read_role(name: str) -> str:
    if name not in ROLES:
        near = difflib.get_close_matches(name, ROLES, 1, 0.5)
        remedy = f'Did you mean "{near[0]}"?' if near else "A rig offers only roles that sweeprig knows"
        raise problem("unknown role", name, ", ".join(ROLES), remedy)
    return name


def _read_acknowledged(text: str) -> str:
    """A name and a date: somebody stands for it, and one can see how long ago."""
    name, _, date = text.rpartition(",")
    try:
        dt.date.fromisoformat(date.strip())
    except ValueError:
        date = ""
    if not name.strip() or not date:
        allowed = "a name, a comma and a date such as 2026-03-02"
        raise problem("this does not say who acknowledged the cautions, and when", text, allowed, "Write both")
    return text


def _read_plus(value: object) -> Measure:
    measure = read_measure(value)
    if measure < 0:
        raise problem(
            "an accuracy is stated as a positive amount", value, "0 or more", "Leave out the sign: ± is understood"
        )
    return measure


def _read_option(value: object) -> object:
    """Plain values only: what they mean is the adapter's, which refuses what it cannot honour when the rig opens."""
    if isinstance(value, list):
        return [_read_option(item) for item in value]
    if isinstance(value, str):
        return Words().read(value)
    if isinstance(value, bool | int):
        return value
    if isinstance(value, float):
        return _FAULT.read(value)
    raise problem(
        "an option is a text, a number, true, false or a list of these", value, "", "Write it as one of these"
    )


def _read_faults(value: object) -> object:
    if not isinstance(value, dict):
        raise problem("a table of bare numbers is wanted", value, "", "Write for example gain_error_percent = 0.5")
    return {
        key: _LATENCY.read(entry) if key == "latency" else _FAULT.read(entry)  # the one with a unit
        for key, entry in value.items()
    }


def _write_faults(faults: dict[str, float]) -> dict[str, object]:
    return {key: exact_text(value, "s") if key == "latency" else value for key, value in faults.items()}


class AccuracyStatement(Strict):
    """± (percent of reading + a fixed amount); `plus` is a float in base units that knows its `.unit`."""

    percent_of_reading: Annotated[float, Number(0.0, 100.0, "A part of the reading")] = 0.0
    plus: Annotated[
        Measure,
        PlainValidator(_read_plus),
        PlainSerializer(write_measure),
        WithJsonSchema({"type": "string", "description": "a fixed amount with its unit, for example 3 mV"}),
    ]

    def accuracy(self) -> Accuracy:
        return Accuracy(self.percent_of_reading, float(self.plus))


class Calibration(Strict):
    """Traceability of one instrument, as it goes into the report."""

    certificate: Annotated[str, Words()]
    date: dt.date
    due: dt.date | None = None


class Instrument(Strict):
    """One instrument: who speaks to it (adapter, dialect), where it is, what its clips are on, how true it reads.

    connected_to   where its input is wired; decides what a voltage or a duty means and whether a clip may sit there
    earthed        its input's low side is mains earth (most bench oscilloscopes)
    options        the adapter's own, plain values
    """

    adapter: Annotated[str, Words(80, ascii_only=True)]
    address: Annotated[str, Words(200, ascii_only=True)]
    dialect: Annotated[str, Words(80, ascii_only=True)] | None = None
    options: dict[
        str,
        Annotated[
            object,
            PlainValidator(_read_option),
            WithJsonSchema({"type": ["string", "number", "boolean", "array"]}),
        ],
    ] = Field(default_factory=dict)
    connected_to: Literal[
        "across_motor", "switch_node", "drive_signal", "supply_terminals", "motor_lead", "supply_lead",
        "switch_shunt", "none",
    ] = "none"  # fmt: skip
    earthed: bool = False
    terminator: Literal["LF", "CR LF", "CR"] = "LF"
    accuracy: dict[str, AccuracyStatement] = Field(default_factory=dict)
    calibration: Calibration | None = None

    @property
    def terminator_bytes(self) -> bytes:
        return TERMINATORS[self.terminator]

    @property
    def in_process(self) -> bool:
        """Answered by the simulated bench inside this process."""
        return self.address.startswith("simbench:")

    def accuracies(self) -> dict[str, Accuracy]:
        """Quantity → accuracy statement, for `roles.AdapterSetup`."""
        return {quantity: stated.accuracy() for quantity, stated in self.accuracy.items()}


_Age = Annotated[float, Amount("s", 0.05, 60.0, "Protection acts on the clock too: an old reading protects nothing")]


class LongestAge(Strict):
    """Longest age of a protected quantity's reading while the drive is on, s; older, and the drive goes off."""

    speed: _Age = 2.5
    current: _Age = 2.5
    motor_voltage: _Age | None = None
    winding_temperature: _Age | None = None
    case_temperature: _Age | None = None

    def by_role(self) -> dict[str, float]:
        ages = {name: getattr(self, name) for name in type(self).model_fields}
        return {name: age for name, age in ages.items() if age is not None}


class Limits(Strict):
    """What switches the drive off. Four are required: "no limit" is not among the things one can write."""

    current: Annotated[float, Amount("A", 0.0, 100.0, "The supply is set to it, so it must be finite", above=True)]
    motor_voltage: Annotated[float, Amount("V", 0.0, 120.0, "A braking motor pumps the supply up", above=True)]
    speed: Annotated[float, Amount("rpm", 0.0, 300_000.0, "A rotor that runs away flies apart", above=True)]
    locked_rotor_time: Annotated[
        float, Amount("s", 0.5, 600.0, "Counted from the last moment at which rotation was seen")
    ]
    winding_temperature: Annotated[float, Amount("degC", 0.0, 250.0)] | None = None
    case_temperature: Annotated[float, Amount("degC", 0.0, 150.0)] | None = None
    heartbeat: (
        Annotated[float, Amount("s", 0.1, 10.0, "Longest silence after which the drive stops by itself")] | None
    ) = None
    highest_duty: Annotated[float, Amount("%", 0.0, 100.0, "What wiring and supply bear", above=True)] | None = None
    longest_age: LongestAge = Field(default_factory=LongestAge)


class Rig(Strict):
    """A rig. `rate` is written by a served simulated bench only: so many bench seconds pass in one real second.

    cautions_acknowledged   who has seen to the cautions of the manual's `safety` on this rig, and when: "name, date"
    """

    name: Annotated[str, Words(80)]
    drive_kind: Literal["power_switch", "control_input"]
    stage: Literal["low_side_diode", "half_bridge", "h_bridge"] | None = None
    conducting_level: Literal["high", "low"] = "high"
    voltage_at: Literal["across_motor", "switch_node"] | None = None
    current_at: Literal["motor_lead", "supply_lead", "switch_shunt"] | None = None
    switch_delay: (
        Annotated[float, Amount("s", 0.0, 1e-3, "On-time minus commanded on-time; a slower switch is no PWM switch")]
        | None
    ) = None
    drive_step: Annotated[float, Amount("%", 0.0, 10.0, "One step of the commanded duty", above=True)] | None = None
    cautions_acknowledged: Annotated[str, Words(120), AfterValidator(_read_acknowledged)] | None = None
    rate: Annotated[float, Number(1.0, 1000.0, "Bench seconds in one real second")] | None = None
    pwm_timer: PwmTimer | None = None
    limits: Limits
    roles: dict[
        Annotated[str, StringConstraints(), AfterValidator(_read_role)], Annotated[str, Words(80, ascii_only=True)]
    ]
    instruments: Annotated[
        dict[Annotated[str, AfterValidator(_read_name)], Instrument], Field(min_length=1, max_length=32)
    ]
    simulated: dict[
        str,
        Annotated[
            dict[str, float],
            BeforeValidator(_read_faults),
            PlainSerializer(_write_faults),
            WithJsonSchema({"type": "object", "additionalProperties": {"type": ["number", "string"]}}),
        ],
    ] = Field(default_factory=dict)
    simulated_faults: Annotated[tuple[SimulatedFault, ...], Field(max_length=64, strict=False)] | None = None
    simulated_stage: SimulatedStage | None = None
    simulated_source: SimulatedSource | None = None

    @property
    def in_process(self) -> bool:
        """Every instrument is answered inside this process: no supervisor is needed."""
        return all(instrument.in_process for instrument in self.instruments.values())
