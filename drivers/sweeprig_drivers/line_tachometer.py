"""A tachometer that sends a line by itself, again and again; what a line means stands in its dialect.

Nothing is ever set. What it sent before it is asked is passed over: a speed of some time ago is no speed of now.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping

from sweeprig.errors import ConfigError
from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Answer, Ask, Identity, Reply, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.dialect import Dialect, Form

COMMANDS = {"identity": Form(query=True, optional=True)}
VALUES = {"line_every_s": (0.01, 10.0), "scale": (1e-9, 1e9)}
TEXTS = ("line", "unit")
UNITS = ("rpm", "Hz")
MOST_LINES = 1000


class LineTachometer:
    """Options: `resolution` (rpm: by how much a reading may be off for its last digit or its last count; 0 rpm).

    The dialect: `[texts] line`, a regular expression for one whole line with the group `value`; `unit`, "rpm" of the
    shaft or "Hz" of pulses; `[values] scale`, by which the number is multiplied, and `line_every_s`, the time from
    line to line. Without the command `identity` a line that fits is all that can be known of the instrument.

    Channels:
    speed     mean of the lines in the window; no data, `no_data:no_edges`, when the last one says zero
    edge_age  s since the last line that said more than zero, and one line's time more: an upper bound
    edge_gap  s, the largest such age in the window
    """

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        self.channels: Mapping[str, str] = {"speed": "rpm", "edge_age": "s", "edge_gap": "s"}
        common.check_accuracy(setup, self.channels)
        options = common.Options(setup)
        self._resolution = options.quantity("resolution", "rpm", 0.0, 10_000.0, 0.0)
        options.done()
        self._dialect = dialect = Dialect(name, setup.dialect, "line-tachometer", COMMANDS, VALUES, TEXTS)
        self._line = self._pattern(dialect.text("line"))
        self._every_s = dialect.value("line_every_s")
        self._rpm = dialect.value("scale") * self._rpm_per_unit(setup)
        within_s = 3.0 * self._every_s + 1.0
        self._next = Ask(b"", Reply.STREAM, within_s)
        message = dialect.command("identity") if dialect.has("identity") else b""
        self._identity = Ask(message, Reply.STREAM, within_s, early=True)
        self._accuracy = setup.accuracy
        self._turned_at = math.nan

    def _pattern(self, text: str) -> re.Pattern[str]:
        try:
            pattern = re.compile(text)
        except re.error as fault:
            raise self._wrong("line", f"is no regular expression: {fault}", text) from fault
        if "value" not in pattern.groupindex or pattern.fullmatch("") is not None:
            raise self._wrong("line", "has no group (?P<value>…), or fits an empty line", text)
        return pattern

    def _rpm_per_unit(self, setup: AdapterSetup) -> float:
        unit = self._dialect.text("unit")
        if unit not in UNITS:
            raise self._wrong("unit", "is not one that this adapter knows", unit, " or ".join(UNITS))
        if unit == "rpm":
            return 1.0
        if not (math.isfinite(setup.pulses_per_revolution) and setup.pulses_per_revolution > 0.0):
            raise self._wrong("unit", "needs pulses per revolution in the motor file", unit)
        return 60.0 / setup.pulses_per_revolution

    def _wrong(
        self, key: str, why: str, value: str, allowed: str = "a whole line, its number as (?P<value>…)"
    ) -> ConfigError:
        return ConfigError(
            f"{self.name}: the dialect's 'texts.{key}' {why}",
            value=repr(value),
            allowed=allowed,
            remedy="correct the dialect file",
            topic="dialects",
        )

    def identify(self) -> Steps[Identity]:
        """Its identity where it has one; else one line that fits the pattern. LinkGarbled for anything else."""
        answer = yield self._identity
        if self._dialect.has("identity"):
            return common.parse_identity(self.name, answer.raw)
        self._value(answer.raw)
        return Identity("unnamed", "line tachometer", "0", "0")

    def configure(self) -> Steps[None]:
        """There is nothing to set."""
        yield from ()

    def settings(self) -> Steps[dict[str, str]]:
        yield from ()
        return {"line": self._dialect.text("line"), "unit": self._dialect.text("unit"), "every_s": f"{self._every_s:g}"}

    def check_window(self, window: Window) -> None:
        common.check_window(self.name, window)

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """Lines until they cover the window, at least one."""
        count = min(MOST_LINES, max(1, round(window.seconds / self._every_s)))
        speeds: list[float] = []
        gap, raws, lost = 0.0, [], ""
        for _ in range(count):
            answer = yield self._next
            value, why = self._value(answer.raw)
            raws.append(answer.raw)
            lost = lost or why
            speeds.append(value or 0.0)
            gap = max(gap, self._age(answer, speeds[-1] > 0.0))
        age = self._age(answer, speeds[-1] > 0.0)
        return {
            "speed": self._speed(speeds, lost, answer, b" | ".join(raws)),
            "edge_age": self._seconds("edge_age", age, lost, answer),
            "edge_gap": self._seconds("edge_gap", gap, lost, answer),
        }

    def _age(self, answer: Answer, turning: bool) -> float:
        """Seconds since an edge was surely there, as of this line. Before any, since the first line that was read."""
        if turning or math.isnan(self._turned_at):
            self._turned_at = answer.at
        return answer.at - self._turned_at + self._every_s

    def _value(self, raw: bytes) -> tuple[float | None, str]:
        """A line → (rpm, "") or (None, reason); LinkGarbled for one that does not fit the pattern."""
        text = common.shown(raw).strip()
        if text in self._dialect.no_value:
            return None, "no_data:marker"
        match = self._line.fullmatch(text)
        if match is None or not text.isascii():
            raise common.garbled(self.name, "line of this tachometer's form", raw)
        value, why = common.number(self.name, match.group("value").encode("ascii"), self._dialect.no_value)
        if value is not None and value < 0.0:
            raise common.garbled(self.name, "speed of zero or more", raw)
        return (None, why) if value is None else (value * self._rpm, "")

    def _speed(self, speeds: list[float], lost: str, answer: Answer, raw: bytes) -> Reading:
        channel, text = f"{self.name}.speed", common.shown(raw)
        if lost or speeds[-1] == 0.0:
            return Reading(None, 0.0, "rpm", answer.at, channel, (lost or "no_data:no_edges",), text)
        turning = [speed for speed in speeds if speed > 0.0]
        flags = ("short_window",) if len(turning) < len(speeds) else ()
        mean = sum(turning) / len(turning)
        u = math.hypot(self._accuracy.get("speed", common.NO_ACCURACY).u(mean), self._resolution / math.sqrt(3.0))
        return Reading(mean, u, "rpm", answer.at, channel, flags, text)

    def _seconds(self, quantity: str, seconds: float, lost: str, answer: Answer) -> Reading:
        channel, raw = f"{self.name}.{quantity}", common.shown(answer.raw)
        if lost:
            return Reading(None, 0.0, "s", answer.at, channel, (lost,), raw)
        u = self._accuracy.get(quantity, common.NO_ACCURACY).u(seconds)
        return Reading(seconds, u, "s", answer.at, channel, (), raw)

    def switch_off(self) -> Steps[None]:
        """A tachometer drives nothing."""
        yield from ()
