"""A function generator as PWM source: a rectangle of two stated levels at the switch's gate.

It has no heartbeat: when the host falls silent it goes on driving. Unattended it is refused on a real rig.
"""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.errors import ConfigError
from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Answer, DriveSetting, Identity, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import CLEAR, ERROR, EVENT_STATUS, IDENTITY, REMOTE, Dialect, Form, number_text

COMMANDS = {
    "identity": IDENTITY,
    "clear": CLEAR,
    "error": ERROR,
    "event_status": EVENT_STATUS,
    "remote": REMOTE,
    "load": Form(),
    "load_query": Form(query=True),
    "high": Form(("volts",)),
    "high_query": Form(query=True),
    "low": Form(("volts",)),
    "low_query": Form(query=True),
    "frequency": Form(("hz",)),
    "frequency_query": Form(query=True),
    "duty": Form(("percent",)),
    "duty_query": Form(query=True),
    "rectangle": Form(),
    "constant": Form(),
    "shape_query": Form(query=True),
    "level": Form(("volts",)),
    "level_query": Form(query=True),
    "on": Form(),
    "off": Form(),
    "output_query": Form(query=True),
}
TEXTS = ("rectangle_answer", "constant_answer")
LEAST_LOAD_OHM = 9e5
"""A gate draws nothing: from here up the generator was told so (most answer 9.9E37 for infinity)."""
LEVEL_TOLERANCE_VOLTS = 0.01
FREQUENCY_TOLERANCE = 1e-3
DUTY_TOLERANCE_PERCENT = 0.05
MOST_HZ = 1e6


class ScpiGenerator:
    """Options: `high_level` (V, at the gate, required), `low_level` (0 V), `remote` ("stays" or "ask", see
    `common.Remote`).

    Channels: pwm_hz, duty_set, as read back; from `apply` and again from `measure`. A rectangle has both levels, so
    duties of 0 and 100 % are the constant low and high level.
    """

    heartbeat_s: float | None = None

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        self.channels: Mapping[str, str] = {"pwm_hz": "Hz", "duty_set": "%"}
        common.check_accuracy(setup, self.channels)
        options = common.Options(setup)
        self._high = options.quantity("high_level", "V", 0.5, 20.0)
        self._low = options.quantity("low_level", "V", -10.0, 10.0, 0.0)
        self._remote = common.Remote(name, options)
        options.done()
        if self._low >= self._high:
            raise ConfigError(
                f"{name}: the option 'low_level' is not below 'high_level'",
                value=f"{self._low:g} V",
                allowed=f"below {self._high:g} V",
                remedy="exchange the two in the rig file",
                topic="rig",
            )
        self._dialect = dialect = Dialect(name, setup.dialect, "generator", COMMANDS, texts=TEXTS)
        self._remote.use(dialect)
        self._identity = query(dialect.command("identity"), early=True)
        self._clear, self._error = tell(dialect.command("clear")), query(dialect.command("error"))
        self._status = common.status_query(dialect)
        self._shape_query = query(dialect.command("shape_query"))
        self._output = query(dialect.command("output_query"))
        self._accuracy = {key: setup.accuracy.get(key, common.NO_ACCURACY) for key in self.channels}

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, self._identity)

    def configure(self) -> Steps[None]:
        """The load first (it decides what a level means), then the levels, the high one first, then the shape; all are
        read back."""
        name, error, dialect = self.name, self._error, self._dialect
        yield from self._remote.take()
        standing = yield from common.begin(name, self._clear, error)
        yield tell(dialect.command("load"))
        answer = yield query(dialect.command("load_query"))
        ohm, why = common.number(name, answer.raw)
        if ohm is not None and ohm < LEAST_LOAD_OHM:
            entries = yield from common.drain(name, error)
            raise common.refused(name, "it was told that a gate draws nothing", f"{ohm:g} ohm {why}", "inf", entries)
        for key, volts in (("high", self._high), ("low", self._low)):
            yield from self._set(key, f"{key} level", "volts", volts, LEVEL_TOLERANCE_VOLTS, "V")
        yield from self._shape("rectangle")
        yield from common.no_new_errors(name, error, standing)

    def settings(self) -> Steps[dict[str, str]]:
        found = {}
        for key in ("load", "high", "low", "frequency", "duty", "shape", "level", "output"):
            answer = yield query(self._dialect.command(f"{key}_query"))
            found[key] = common.shown(answer.raw)
        return (yield from common.with_status(self.name, found, self._status))

    def check_window(self, window: Window) -> None:
        common.check_window(self.name, window)

    def apply(self, setting: DriveSetting) -> Steps[dict[str, Reading]]:
        """Frequency, then duty, each read back; InstrumentRefused when off by more than 0.1 % or 0.05 % duty."""
        self._check(setting)
        hz, duty = setting.pwm_hz, setting.duty_percent
        near = FREQUENCY_TOLERANCE * hz
        found_hz, answer = yield from self._set("frequency", "PWM frequency", "hz", hz, near, "Hz")
        readings = {"pwm_hz": self._reading("pwm_hz", found_hz, answer)}
        if 0.0 < duty < 100.0:
            near = DUTY_TOLERANCE_PERCENT
            duty, answer = yield from self._set("duty", "duty", "percent", duty, near, "%")
            answer = yield from self._shape("rectangle")
        else:
            volts = self._high if duty > 0.0 else self._low
            yield from self._set("level", "constant level", "volts", volts, LEVEL_TOLERANCE_VOLTS, "V")
            answer = yield from self._shape("constant")
        readings["duty_set"] = self._reading("duty_set", duty, answer)
        return readings

    def _set(
        self, key: str, what: str, place: str, value: float, near: float, unit: str
    ) -> Steps[tuple[float, Answer]]:
        send = tell(self._dialect.command(key, **{place: number_text(value)}))
        back = query(self._dialect.command(f"{key}_query"))
        return common.confirm(self.name, what, send, back, self._error, value, near, unit)

    def _shape(self, key: str) -> Steps[Answer]:
        """The wanted shape, set where it is another one, and read back."""
        wanted = self._dialect.text(f"{key}_answer")
        answer = yield self._shape_query
        if self._shape_of(answer.raw) != wanted:
            yield tell(self._dialect.command(key))
            answer = yield self._shape_query
            if self._shape_of(answer.raw) != wanted:
                entries = yield from common.drain(self.name, self._error)
                text = common.shown(answer.raw)
                raise common.refused(self.name, "the shape was set and reads back differently", text, wanted, entries)
        return answer

    def _shape_of(self, raw: bytes) -> str:
        text = common.shown(raw).strip().upper()
        if not text.isalpha() or not text.isascii():
            raise common.garbled(self.name, "name of a shape", raw)
        return text

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """What it says that it makes; nothing is measured."""
        del window
        answer = yield self._shape_query
        shape = self._shape_of(answer.raw)
        rectangle, constant = (self._dialect.text(key) for key in TEXTS)
        if shape not in (rectangle, constant):
            raise common.garbled(self.name, "shape that this adapter sets", answer.raw)
        answer = yield query(self._dialect.command("frequency_query"))
        readings = {"pwm_hz": self._maybe("pwm_hz", answer)}
        key = "duty" if shape == rectangle else "level"
        answer = yield query(self._dialect.command(f"{key}_query"))
        reading = self._maybe("duty_set", answer)
        if shape == constant and reading.value is not None:
            full = reading.value >= 0.5 * (self._high + self._low)
            reading = self._reading("duty_set", 100.0 if full else 0.0, answer)
        readings["duty_set"] = reading
        return readings

    def switch_on(self) -> Steps[None]:
        return common.turn_on(self.name, tell(self._dialect.command("on")), self._output, self._error)

    def switch_off(self) -> Steps[None]:
        off, state = self._dialect.command("off"), self._dialect.command("output_query")
        return common.turn_off(self.name, tell(off, early=True), query(state, early=True), self._remote)

    def _maybe(self, quantity: str, answer: Answer) -> Reading:
        value, why = common.number(self.name, answer.raw, self._dialect.no_value)
        if value is not None:
            return self._reading(quantity, value, answer)
        unit, channel = self.channels[quantity], f"{self.name}.{quantity}"
        return Reading(None, 0.0, unit, answer.at, channel, (why,), common.shown(answer.raw))

    def _reading(self, quantity: str, value: float, answer: Answer) -> Reading:
        u, unit = self._accuracy[quantity].u(value), self.channels[quantity]
        return Reading(value, u, unit, answer.at, f"{self.name}.{quantity}", (), common.shown(answer.raw))

    def _check(self, setting: DriveSetting) -> None:
        for what, value, low, high, unit in (
            ("PWM frequency", setting.pwm_hz, 1.0, MOST_HZ, "Hz"),
            ("duty", setting.duty_percent, 0.0, 100.0, "%"),
            ("tap", 0 if setting.tap is None else 1, 0, 0, ""),
        ):
            if not low <= value <= high:
                raise ConfigError(
                    f"{self.name}: the {what} cannot be set",
                    value=f"{value:g} {unit}".strip(),
                    allowed=f"{low:g} to {high:g} {unit}".strip(),
                    remedy="correct the sweep; a tap needs the board",
                    topic="job-files",
                )
