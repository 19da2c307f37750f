"""Findings as values, and as the JSON of findings.json (schema beside this file). Contracts fix the names and keys.

Nothing here computes a finding, and nothing here opens a file.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field, fields
from typing import Any, Literal

from sweeprig.errors import ConfigError
from sweeprig.holds import Condition

VERSION = 1
Bound = Literal["two_sided", "upper", "lower"]
EXTRAPOLATED = "extrapolated_in_time"
"""Flag of a finding for a service time that no hold lasted: limits are not decided by it."""


@dataclass(frozen=True, slots=True)
class Finding:
    """One number with its uncertainty, or the reason why there is none (`value` None, `reason` filled).

    value     in the unit that ends the finding's name; for a bound the bound itself
    u         standard uncertainty, same unit; None where it is only a bound
    low,high  the interval of `coverage_probability`; the open side of a bound is None
    holds     numbers of the holds it rests on
    """

    value: float | None = None
    u: float | None = None
    low: float | None = None
    high: float | None = None
    bound: Bound = "two_sided"
    coverage_probability: float | None = None
    coverage_factor: float | None = None
    holds: tuple[int, ...] = ()
    method: str = ""
    assumes: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()
    reason: str = ""

    @property
    def found(self) -> bool:
        return self.value is not None

    def as_json(self) -> dict[str, Any]:
        shown = {f.name: getattr(self, f.name) for f in fields(self) if f.name != "reason"}
        shown |= {key: list(shown[key]) for key in ("holds", "assumes", "flags")}
        return shown if self.found else {**shown, "reason": self.reason}

    @classmethod
    def from_json(cls, value: Mapping[str, Any]) -> Finding:
        lists = {key: tuple(value[key]) for key in ("holds", "assumes", "flags")}
        return cls(**{**value, **lists})


def not_found(reason: str, *, flags: tuple[str, ...] = ()) -> Finding:
    """A finding that keeps its name without a value; `reason` is one sentence for people."""
    return Finding(reason=reason, flags=flags)


@dataclass(frozen=True, slots=True)
class UsableRange:
    """The low duties and the low speed are one-sided upper bounds, so `turndown` (a ratio) is a lower one."""

    low_duty_percent: Finding
    low_duty_from_rest_percent: Finding
    high_duty_percent: Finding
    low_speed_rpm: Finding
    high_speed_rpm: Finding
    turndown: Finding


@dataclass(frozen=True, slots=True)
class SpeedCurve:
    """Fitted speed at the duties measured; equally long. branch: `falling` or `rising`. u_rpm: with the accuracy."""

    duty_percent: tuple[float, ...] = ()
    speed_rpm: tuple[float, ...] = ()
    u_rpm: tuple[float, ...] = ()
    branch: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class ConditionFindings:
    """All findings of one condition. The times are plain numbers: what the duties were found for."""

    condition: Condition
    hold_time_s: float | None
    start_time_s: float | None
    rest_time_s: float | None
    stall_duty_percent: Finding
    sustain_99_duty_percent: Finding
    start_duty_percent: Finding
    start_99_duty_percent: Finding
    cold_start_duty_percent: Finding
    long_run_duty_percent: Finding
    long_run_extrapolation_factor: Finding
    long_run_model_free_percent: Finding
    long_run_binary_duty_percent: Finding
    start_stall_hysteresis_percent: Finding
    kick_99_s: Finding
    kick_99_second_s: Finding
    kick_99_third_s: Finding
    kick_charge_amp_seconds: Finding
    kick_charge_second_amp_seconds: Finding
    kick_charge_third_amp_seconds: Finding
    stall_speed_rpm: Finding
    stall_voltage_volts: Finding
    lowest_reliable_speed_rpm: Finding
    top_speed_rpm: Finding
    linearity_percent: Finding
    curve_hysteresis_rpm: Finding
    resolution_rpm_per_step: Finding
    repeatability_rpm: Finding
    drift_percent_per_hour: Finding
    lapse: Finding
    coast_time_s: Finding
    usable_range: UsableRange
    speed_curve: SpeedCurve

    def finding(self, name: str) -> Finding:
        """The finding of that full name; those of the usable range by their own name. ConfigError for another name."""
        found = getattr(self, name, None) if name in FINDING_NAMES else getattr(self.usable_range, name, None)
        if isinstance(found, Finding):
            return found
        raise ConfigError("no finding has this name", value=name, allowed=", ".join((*FINDING_NAMES, *RANGE_NAMES)))

    def as_json(self) -> dict[str, Any]:
        shown: dict[str, Any] = asdict(self.condition)
        shown |= {name: getattr(self, name) for name in TIME_NAMES}
        shown |= {name: getattr(self, name).as_json() for name in FINDING_NAMES}
        shown["usable_range"] = {name: getattr(self.usable_range, name).as_json() for name in RANGE_NAMES}
        shown["speed_curve"] = {f.name: list(getattr(self.speed_curve, f.name)) for f in fields(SpeedCurve)}
        return shown

    @classmethod
    def from_json(cls, value: Mapping[str, Any]) -> ConditionFindings:
        found: dict[str, Any] = {name: _read(value, name) for name in FINDING_NAMES}
        within = {name: Finding.from_json(value["usable_range"][name]) for name in RANGE_NAMES}
        return cls(
            condition=Condition(**{f.name: value[f.name] for f in fields(Condition)}),
            usable_range=UsableRange(**within),
            speed_curve=SpeedCurve(**{key: tuple(row) for key, row in value["speed_curve"].items()}),
            **{name: value[name] for name in TIME_NAMES},
            **found,
        )


def _read(condition: Mapping[str, Any], name: str) -> Finding:
    """A finding of a condition; one that an earlier release did not know yet keeps its name without a value."""
    if name in condition:
        return Finding.from_json(condition[name])
    return not_found("the release that wrote these findings did not know it")


NOT_ASKED = "the sweep asks for no"
"""How the reason of a finding begins that nobody asked for."""
TIME_NAMES = ("hold_time_s", "start_time_s", "rest_time_s")
RANGE_NAMES = tuple(f.name for f in fields(UsableRange))
FINDING_NAMES = tuple(
    f.name for f in fields(ConditionFindings) if f.name not in {"condition", "usable_range", "speed_curve", *TIME_NAMES}
)
_LOW_IS_WORST = frozenset({"top_speed_rpm", "high_speed_rpm", "high_duty_percent", "turndown"})


@dataclass(frozen=True, slots=True)
class WorstCase:
    """The condition where a finding is worst. `missing`: conditions without it, so that the worst may be elsewhere."""

    name: str
    condition: Condition | None
    finding: Finding
    missing: tuple[Condition, ...]


@dataclass(frozen=True, slots=True)
class Findings:
    """What a run found. motor, rig, software: JSON values as the caller gave them."""

    job_hash: str
    simulated: bool
    motor: object
    rig: object
    software: object
    conditions: tuple[ConditionFindings, ...]
    limits: tuple[Mapping[str, Any], ...] = ()
    suspicions: tuple[Mapping[str, Any], ...] = ()
    advice: tuple[Mapping[str, Any], ...] = ()
    version: int = field(default=VERSION)

    def of(self, condition: Condition) -> ConditionFindings | None:
        return next((one for one in self.conditions if one.condition == condition), None)

    def worst_case(self, name: str) -> WorstCase:
        """The worst over the conditions: lowest for top speed, high duty and speed, turndown; else the highest."""
        pairs = [(one.condition, one.finding(name)) for one in self.conditions]
        missing = tuple(condition for condition, finding in pairs if not finding.found)
        sign = -1.0 if name in _LOW_IS_WORST else 1.0
        known = [(sign * f.value, condition, f) for condition, f in pairs if f.value is not None]
        if not known:
            return WorstCase(name, None, not_found("no condition has this finding"), missing)
        _, condition, finding = max(known, key=lambda row: row[0])
        return WorstCase(name, condition, finding, missing)

    def as_json(self) -> dict[str, Any]:
        """A JSON value (no text) after findings.schema.json."""
        return {
            "version": self.version,
            "job_hash": self.job_hash,
            "simulated": self.simulated,
            "motor": self.motor,
            "rig": self.rig,
            "software": self.software,
            "conditions": [one.as_json() for one in self.conditions],
            "limits": [dict(row) for row in self.limits],
            "suspicions": [dict(row) for row in self.suspicions],
            "advice": [dict(row) for row in self.advice],
        }

    def as_text(self) -> str:
        """The text of findings.json; numbers that JSON cannot hold are an error, never written."""
        return json.dumps(self.as_json(), indent=1, ensure_ascii=False, allow_nan=False) + "\n"

    @classmethod
    def from_json(cls, value: str | bytes | Mapping[str, Any]) -> Findings:
        """From what `as_json` or `as_text` gave. ConfigError for a version that this release does not read."""
        shown: Mapping[str, Any] = json.loads(value) if isinstance(value, str | bytes) else value
        if shown.get("version") != VERSION:
            raise ConfigError(
                "these findings were written in another format",
                value=f"version {shown.get('version')}",
                allowed=f"version {VERSION}",
                remedy="Let this release work out the findings again from the logbook",
            )
        rows: dict[str, Any] = {key: tuple(shown[key]) for key in ("limits", "suspicions", "advice")}
        conditions = tuple(ConditionFindings.from_json(one) for one in shown["conditions"])
        about = {key: shown[key] for key in ("job_hash", "simulated", "motor", "rig", "software", "version")}
        return cls(conditions=conditions, **about, **rows)
