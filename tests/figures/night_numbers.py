"""Whether the numbers of a short night are right: against the truth of its bench, and against healthy nights with other
seeds where no truth is worked out. Running nights is fault_nights.py's."""

from __future__ import annotations

import math
import statistics
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

TOO_FAR = 3.0
"""Times its own expanded uncertainty (95 %) that a finding may be off before it is a wrong number."""
TRIALS = 300
"""A threshold, for the truth of the physical motor, counted; the prescribed motor's are formulas."""


@dataclass
class Value:
    """value: what is true, u: how well that is known (standard), spread: of one healthy night's finding; by_nights: it
    is known from healthy nights alone."""

    value: float
    u: float = 0.0
    spread: float = 0.0
    by_nights: bool = True


@dataclass
class Reference:
    """findings by name; points: fewest curve points of a healthy night; curve: (branch, duty rounded) → (duty, Value);
    flags: those that healthy nights have, by finding."""

    findings: dict[str, Value] = field(default_factory=dict)
    points: int = 0
    curve: dict[tuple[str, float], tuple[float, Value]] = field(default_factory=dict)
    flags: dict[str, set[str]] = field(default_factory=dict)


def flat(condition: Mapping[str, Any]) -> Iterator[tuple[str, Mapping[str, Any]]]:
    """(full name, finding) of everything found."""
    for name, value in condition.items():
        if name == "usable_range":
            yield from ((f"{name}.{part}", each) for part, each in value.items() if each["value"] is not None)
        elif isinstance(value, Mapping) and value.get("value") is not None:
            yield name, value


def points(condition: Mapping[str, Any]) -> Iterator[tuple[str, float, float, float]]:
    """(branch, duty, speed, expanded uncertainty) of the speed curve."""
    curve = condition["speed_curve"]
    for branch, duty, speed, u in zip(*(curve[key] for key in ("branch", "duty_percent", "speed_rpm", "u_rpm")),
                                      strict=True):  # fmt: skip
        yield branch, duty, speed, 2.0 * u


def reference(truth: Mapping[str, Any], nights: Sequence[Mapping[str, Any]]) -> Reference:
    """From the truth's condition and the conditions of healthy nights.

    What the truth has comes from it; the rest (linearity, hysteresis, resolution, curve points) is the median of the
    healthy nights. Those give the spread of each finding and the flags that are nothing special, too.
    """
    made = Reference(points=min((len(list(points(night))) for night in nights), default=0))
    found: dict[str, list[float]] = {}
    curve: dict[tuple[str, float], list[tuple[float, float]]] = {}
    for night in nights:
        for name, each in flat(night):
            found.setdefault(name, []).append(float(each["value"]))
            made.flags.setdefault(name, set()).update(plain(each["flags"]))
        for branch, duty, speed, _ in points(night):
            curve.setdefault((branch, float(round(duty))), []).append((duty, speed))
    for name, values in found.items():
        if len(values) >= 4:
            spread = statistics.stdev(values)
            made.findings[name] = Value(statistics.median(values), spread / math.sqrt(len(values)), spread)
    for name, true in truth["findings"].items():
        known = made.findings.pop(name, Value(0.0))
        if true["value"] is not None:
            made.findings[name] = Value(true["value"], true.get("u") or 0.0, known.spread, by_nights=False)
    for key, pairs in curve.items():
        if len(pairs) >= 4:
            speeds = [speed for _, speed in pairs]
            spread = statistics.stdev(speeds)
            at = statistics.median(duty for duty, _ in pairs)
            made.curve[key] = (at, Value(statistics.median(speeds), spread / math.sqrt(len(pairs)), spread))
    return made


def plain(flags: Sequence[str]) -> set[str]:
    """Without what stands behind the colon, which differs from night to night."""
    return {flag.partition(":")[0] for flag in flags}


def wrong_numbers(condition: Mapping[str, Any], true: Reference) -> tuple[list[str], list[str]]:
    """(wrong without a flag, wrong with one that healthy nights do not have): each in words."""
    wrong: list[str] = []
    flagged: list[str] = []
    whole = len(list(points(condition))) >= true.points
    for name, found in flat(condition):
        known = true.findings.get(name)
        # Linearity and hysteresis of part of the curve are those of that part: healthy nights have no such number.
        if known is None or (known.by_nights and not whole) or not (off := _off(found, known)):
            continue
        unusual = plain(found["flags"]) - true.flags.get(name, set())
        words = f"{name} {found['value']:.5g} [{found['low']}, {found['high']}], true {known.value:.5g} ({off:.1f} U)"
        (flagged if unusual else wrong).append(words)
    for branch, duty, speed, expanded in points(condition):
        at, value = true.curve.get((branch, float(round(duty))), (duty, None))
        if value is None:
            continue
        allowed = max(expanded, 2.0 * value.spread)  # as for findings: another night scatters, too
        off = (abs(speed - value.value) - _slope(true, branch, at) * abs(duty - at) - 2.0 * value.u) / allowed
        if off > TOO_FAR:
            wrong.append(f"{branch} curve at {duty:.3f} %: {speed:.5g} rpm, true {value.value:.5g} ({off:.1f} U)")
    return wrong, flagged


def _off(found: Mapping[str, Any], known: Value) -> float:
    """How far off, in expanded uncertainties of the side on which the truth lies; 0 where it is within TOO_FAR."""
    error = known.value - found["value"]
    if (found["bound"] == "upper" and error <= 0) or (found["bound"] == "lower" and error >= 0):
        return 0.0
    if found["bound"] == "two_sided":
        expanded = found["high"] - found["value"] if error > 0 else found["value"] - found["low"]
    else:
        expanded = 0.0  # a bound has no uncertainty of its own
    if known.by_nights or found["bound"] != "two_sided":
        # One night's own instruments differ from the next one's: what is common to many nights is no truth for one.
        expanded = max(expanded, 2.0 * known.spread)
    beyond = abs(error) - 2.0 * known.u
    if beyond <= TOO_FAR * expanded:
        return 0.0
    return float(beyond / expanded) if expanded > 0 else math.inf


def _slope(true: Reference, branch: str, at: float) -> float:
    """rpm a percent of duty about there, from the neighbours; 0 where there are none."""
    there = sorted((duty, value.value) for (which, _), (duty, value) in true.curve.items() if which == branch)
    below = [pair for pair in there if pair[0] < at][-1:]
    above = [pair for pair in there if pair[0] > at][:1]
    ends = [*below, *[pair for pair in there if pair[0] == at], *above]
    return max((abs(b[1] - a[1]) / (b[0] - a[0]) for a, b in pairwise(ends)), default=0.0)
