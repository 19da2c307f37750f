"""A scope's automatic measurements of the drive signal: frequency and duty, and a mean voltage where one is wired.

Which point the probe sits on decides what the duty means (bench practice: at the gate or drive signal).
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from sweeprig.errors import ConfigError
from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Ask, Identity, Reply, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import CLEAR, ERROR, EVENT_STATUS, IDENTITY, Dialect, Form, number_text

COMMANDS = {
    "identity": IDENTITY,
    "clear": CLEAR,
    "error": ERROR,
    "event_status": EVENT_STATUS,
    "frequency": Form(("channel",), query=True),
    "duty": Form(("channel",), query=True),
    "volts": Form(("channel",), query=True),
    "threshold": Form(("volts",), optional=True),
    "threshold_query": Form(query=True, optional=True),
    "trace": Form(("channel",), query=True, optional=True),
    "preamble": Form(("channel",), query=True, optional=True),
}
UNITS = {"frequency": "Hz", "duty": "%", "volts": "V", "highest": "V", "lowest": "V"}
THRESHOLD_TOLERANCE = 0.02
MOST_POINTS = 1_000_000
LONGEST_SCREEN_S = 11.0
MOST_CHANNELS = 64


class ScpiScope:
    """Options: `channel` (of the drive signal, 1), `volts_channel` (of a mean voltage; none unless given),
    `conducting_level` ("high" or "low": the level of the drive signal at which the switch conducts), `threshold` (V,
    at which high and low part; as the person set it unless given), `trace_channel` (whose captured waveform is read).

    Channels: frequency, duty (%, of the conducting level), volts where `volts_channel` is given, highest and lowest
    (V, over one screen) where `trace_channel` is. One acquisition
    a reading: both hold still during a hold, so a window longer than an acquisition is not filled with repeats.
    """

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        options = common.Options(setup)
        channel = options.whole("channel", 1, MOST_CHANNELS, 1)
        volts_channel = options.whole("volts_channel", 1, MOST_CHANNELS)
        trace_channel = options.whole("trace_channel", 1, MOST_CHANNELS)
        self._inverted = options.choice("conducting_level", ("high", "low")) == "low"
        threshold = options.quantity("threshold", "V", -200.0, 200.0, math.inf)
        options.done()
        wired = {"frequency": channel, "duty": channel}
        if volts_channel is not None:
            wired["volts"] = volts_channel
        traced = () if trace_channel is None else ("highest", "lowest")
        self.channels: Mapping[str, str] = {quantity: UNITS[quantity] for quantity in (*wired, *traced)}
        common.check_accuracy(setup, self.channels)
        dialect = Dialect(name, setup.dialect, "scope", COMMANDS)
        self._identity = query(dialect.command("identity"), early=True)
        self._clear, self._error = tell(dialect.command("clear")), query(dialect.command("error"))
        self._status = common.status_query(dialect)
        self._plan = tuple(
            (quantity, query(dialect.command(quantity, channel=str(number))), UNITS[quantity], f"{name}.{quantity}")
            for quantity, number in wired.items()
        )
        self._threshold: tuple[float, Ask, Ask] | None = None
        if math.isfinite(threshold):
            self._require(dialect, "threshold", "threshold_query")
            send = tell(dialect.command("threshold", volts=number_text(threshold)))
            self._threshold = (threshold, send, query(dialect.command("threshold_query")))
        self._trace: tuple[Ask, Ask] | None = None
        if trace_channel is not None:
            self._require(dialect, "trace", "preamble")
            number = str(trace_channel)
            trace = Ask(dialect.command("trace", channel=number), Reply.BLOCK, LONGEST_SCREEN_S)
            self._trace = (query(dialect.command("preamble", channel=number)), trace)
        self._no_value = dialect.no_value
        self._accuracy = {key: setup.accuracy.get(key, common.NO_ACCURACY) for key in self.channels}

    def _require(self, dialect: Dialect, *keys: str) -> None:
        for key in keys:
            if not dialect.has(key):
                raise ConfigError(
                    f"{self.name}: the dialect lacks a command that an option needs",
                    value=key,
                    allowed="a dialect that has it",
                    remedy="remove the option from the rig file, or name another dialect",
                    topic="dialects",
                )

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, self._identity)

    def configure(self) -> Steps[None]:
        """Status and error queue emptied; timebase and trigger stay as the person set them, seen on the screen.

        The threshold is set where the rig file states one, and read back within 2 %."""
        standing = yield from common.begin(self.name, self._clear, self._error)
        if self._threshold is not None:
            wanted, send, back = self._threshold
            near = THRESHOLD_TOLERANCE * abs(wanted) + 1e-3
            yield from common.confirm(self.name, "threshold", send, back, self._error, wanted, near, "V")
        yield from common.no_new_errors(self.name, self._error, standing)

    def settings(self) -> Steps[dict[str, str]]:
        """Nothing of a scope is set by this adapter; what is asked is on record, and whether it restarted."""
        found = {quantity: ask.message.decode("ascii") for quantity, ask, _, _ in self._plan}
        return (yield from common.with_status(self.name, found, self._status))

    def check_window(self, window: Window) -> None:
        common.check_window(self.name, window)

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """At 0 % and 100 % duty there are no edges and the scope says so: no data, never a frequency of 0."""
        del window
        readings = {}
        for quantity, ask, unit, channel in self._plan:
            answer = yield ask
            value, why = common.number(self.name, answer.raw, self._no_value)
            raw = answer.raw.decode("latin-1")
            if value is None:
                readings[quantity] = Reading(None, 0.0, unit, answer.at, channel, (why,), raw)
                continue
            if self._inverted and quantity == "duty":
                value = 100.0 - value
            readings[quantity] = Reading(value, self._accuracy[quantity].u(value), unit, answer.at, channel, (), raw)
        if self._trace is not None:
            readings.update((yield from self._extremes(*self._trace)))
        return readings

    def _extremes(self, preamble: Ask, trace: Ask) -> Steps[dict[str, Reading]]:
        """Highest and lowest sample of one screen. u: the accuracy statement and half a step of the converter. A sample
        at the converter's end is flagged `clipped`: the voltage went beyond the screen.
        """
        answer = yield preamble
        points, step, bottom = self._scaling(answer.raw)
        answer = yield trace
        codes = answer.raw
        if len(codes) != points:
            raise common.garbled(self.name, f"waveform of {points} points", codes)
        readings = {}
        for quantity, code, end in (("highest", max(codes), 255), ("lowest", min(codes), 0)):
            value = bottom + code * step
            u = math.hypot(self._accuracy[quantity].u(value), step / math.sqrt(12.0))
            flags = ("clipped",) if code == end else ()
            channel = f"{self.name}.{quantity}"
            readings[quantity] = Reading(value, u, "V", answer.at, channel, flags, f"code {code} of {points} points")
        return readings

    def _scaling(self, raw: bytes) -> tuple[int, float, float]:
        """Points, volts a step, volts at code 0, of `points,seconds,volts a step,volts at code 0`."""
        fields = raw.split(b",")
        if len(fields) != 4:
            raise common.garbled(self.name, "preamble of four numbers", raw)
        points, seconds, step, bottom = (common.number(self.name, each)[0] for each in fields)
        if points is None or seconds is None or step is None or bottom is None:
            raise common.garbled(self.name, "preamble of four numbers", raw)
        if not (1 <= points <= MOST_POINTS and points == int(points) and seconds > 0.0 and step > 0.0):
            raise common.garbled(self.name, "preamble that makes sense", raw)
        return int(points), step, bottom

    def switch_off(self) -> Steps[None]:
        """A scope drives nothing."""
        yield from ()
