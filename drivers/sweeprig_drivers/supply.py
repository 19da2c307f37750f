"""A bench supply that sets voltage and current limit and measures both.

An actuator: it powers the motor, so every set is read back and off is shown to be off.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from sweeprig.errors import ConfigError
from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Ask, Identity, Steps, SupplySetting, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import CLEAR, ERROR, EVENT_STATUS, IDENTITY, REMOTE, Dialect, Form, number_text

COMMANDS = {
    "identity": IDENTITY,
    "clear": CLEAR,
    "error": ERROR,
    "event_status": EVENT_STATUS,
    "remote": REMOTE,
    "volts": Form(("volts",)),
    "volts_query": Form(query=True),
    "amps": Form(("amps",)),
    "amps_query": Form(query=True),
    "on": Form(),
    "off": Form(),
    "output_query": Form(query=True),
    "measure_volts": Form(query=True),
    "measure_amps": Form(query=True),
    "limiting_query": Form(query=True),
    "average": Form(("count",), optional=True),
    "average_query": Form(query=True, optional=True),
}
VALUES = {"limiting_mask": (1, 65535), "average_s": (1e-4, 10.0)}
MOST_VOLTS, MOST_AMPS = 1000.0, 1000.0


class ScpiSupply:
    """Options: `volts_resolution`, `amps_resolution` (what a read-back may differ by; 1 mV and 1 mA), `most_readings`
    (cap on the pairs of readings averaged in one window; none unless given), `averaging` ("host" or "instrument", who
    takes the mean over a window), `remote` ("stays" or "ask", see `common.Remote`).

    Channels: volts, amps (from `measure`), volts_set, amps_limit (from `apply`, the values read back).
    """

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        self.channels: Mapping[str, str] = {"volts": "V", "amps": "A", "volts_set": "V", "amps_limit": "A"}
        common.check_accuracy(setup, self.channels)
        options = common.Options(setup)
        self._volts_step = options.quantity("volts_resolution", "V", 1e-6, 1.0, 1e-3)
        self._amps_step = options.quantity("amps_resolution", "A", 1e-6, 1.0, 1e-3)
        self._most = options.whole("most_readings", 1, 1000)
        self._averaging = common.Averaging(name, options)
        self._remote = common.Remote(name, options)
        options.done()
        self._dialect = dialect = Dialect(name, setup.dialect, "supply", COMMANDS, VALUES)
        self._remote.use(dialect)
        self._mask = int(dialect.value("limiting_mask"))
        self._pair_s = 2.0 * dialect.value("average_s")
        within_s = 2.0 + dialect.value("average_s")
        self._identity = query(dialect.command("identity"), early=True)
        self._clear, self._error = tell(dialect.command("clear")), query(dialect.command("error"))
        self._status = common.status_query(dialect)
        self._volts_query, self._amps_query = (
            query(dialect.command("volts_query")),
            query(dialect.command("amps_query")),
        )
        self._on, self._output = tell(dialect.command("on")), query(dialect.command("output_query"))
        self._off = tell(dialect.command("off"), early=True)
        self._output_early = query(dialect.command("output_query"), early=True)
        self._averaging.use(dialect, self._error)
        self._volts = query(dialect.command("measure_volts"), within_s)
        self._amps = query(dialect.command("measure_amps"), within_s)
        self._pairs: dict[int, tuple[Ask, Ask]] = {1: (self._volts, self._amps)}
        self._limiting = query(dialect.command("limiting_query"))
        self._accuracy = {key: setup.accuracy.get(key, common.NO_ACCURACY) for key in self.channels}

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, self._identity)

    def configure(self) -> Steps[None]:
        """Status and error queue emptied; nothing is set: voltage, limit and output belong to `apply`."""
        self._averaging.forget()
        yield from self._remote.take()
        standing = yield from common.begin(self.name, self._clear, self._error)
        yield from common.no_new_errors(self.name, self._error, standing)

    def settings(self) -> Steps[dict[str, str]]:
        found = {}
        asks = (("volts_set", self._volts_query), ("amps_limit", self._amps_query), ("output", self._output))
        for key, ask in asks:
            answer = yield ask
            found[key] = common.shown(answer.raw)
        return (yield from common.with_status(self.name, found, self._status))

    def check_window(self, window: Window) -> None:
        common.check_window(self.name, window)

    def apply(self, setting: SupplySetting) -> Steps[dict[str, Reading]]:
        """The limit before the voltage, so that no moment has the new voltage with the old limit."""
        self._check(setting)
        name, error = self.name, self._error
        limit = tell(self._dialect.command("amps", amps=number_text(setting.current_limit_amps)))
        volts = tell(self._dialect.command("volts", volts=number_text(setting.volts)))
        amps_set, amps_answer = yield from common.confirm(
            name, "current limit", limit, self._amps_query, error, setting.current_limit_amps, self._amps_step, "A"
        )
        volts_set, volts_answer = yield from common.confirm(
            name, "voltage", volts, self._volts_query, error, setting.volts, self._volts_step, "V"
        )
        return {
            "volts_set": self._reading("volts_set", volts_set, "", volts_answer.at, (), volts_answer.raw),
            "amps_limit": self._reading("amps_limit", amps_set, "", amps_answer.at, (), amps_answer.raw),
        }

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """volts and amps: means over as many pairs as fill the window; one without a value makes its mean no data.

        Readings taken while the current limit acts carry `supply_limited`: what they show is the supply, not the motor.
        """
        name, no_value = self.name, self._dialect.no_value
        count = max(1, round(window.seconds / self._pair_s))
        if self._most is not None:
            count = min(count, self._most)
        count, each = self._averaging.plan(count)
        yield from self._averaging.apply(each)
        ask_volts, ask_amps = self._pairs.get(each) or self._longer(each)
        volts = amps = 0.0
        no_volts = no_amps = ""
        volts_raws, amps_raws = [], []
        for _ in range(count):
            answer = yield ask_volts
            value, why = common.number(name, answer.raw, no_value)
            volts_raws.append(answer.raw)
            if value is None:
                no_volts = why
            else:
                volts += value
            answer = yield ask_amps
            value, why = common.number(name, answer.raw, no_value)
            amps_raws.append(answer.raw)
            if value is None:
                no_amps = why
            else:
                amps += value
        answer = yield self._limiting
        limited = common.whole_number(name, answer.raw) & self._mask
        flags = ("supply_limited",) if limited else ()
        return {
            "volts": self._reading("volts", volts / count, no_volts, answer.at, flags, b" ".join(volts_raws)),
            "amps": self._reading("amps", amps / count, no_amps, answer.at, flags, b" ".join(amps_raws)),
        }

    def _longer(self, each: int) -> tuple[Ask, Ask]:
        within_s = self._volts.within_s + (each - 1) * self._pair_s / 2.0
        pair = query(self._volts.message, within_s), query(self._amps.message, within_s)
        self._pairs[each] = pair
        return pair

    def switch_on(self) -> Steps[None]:
        return common.turn_on(self.name, self._on, self._output, self._error)

    def switch_off(self) -> Steps[None]:
        return common.turn_off(self.name, self._off, self._output_early, self._remote)

    def _reading(self, quantity: str, value: float, why: str, at: float, flags: tuple[str, ...], raw: bytes) -> Reading:
        unit, channel = self.channels[quantity], f"{self.name}.{quantity}"
        if why:
            return Reading(None, 0.0, unit, at, channel, (why, *flags), raw.decode("latin-1"))
        return Reading(value, self._accuracy[quantity].u(value), unit, at, channel, flags, raw.decode("latin-1"))

    def _check(self, setting: SupplySetting) -> None:
        for what, value, most, unit in (
            ("voltage", setting.volts, MOST_VOLTS, "V"),
            ("current limit", setting.current_limit_amps, MOST_AMPS, "A"),
        ):
            if not (math.isfinite(value) and 0.0 <= value <= most):
                raise ConfigError(
                    f"{self.name}: the {what} cannot be set",
                    value=f"{value:g} {unit}",
                    allowed=f"0 to {most:g} {unit}",
                    remedy="correct the sweep or the rig file",
                    topic="rig",
                )
