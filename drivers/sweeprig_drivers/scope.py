"""A scope's automatic measurements of the drive signal: frequency and duty, and a mean voltage where one is wired.

Which point the probe sits on decides what the duty means (bench practice: at the gate or drive signal).
"""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Identity, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import CLEAR, ERROR, IDENTITY, Dialect, Form

COMMANDS = {
    "identity": IDENTITY,
    "clear": CLEAR,
    "error": ERROR,
    "frequency": Form(("channel",), query=True),
    "duty": Form(("channel",), query=True),
    "volts": Form(("channel",), query=True),
}
UNITS = {"frequency": "Hz", "duty": "%", "volts": "V"}
MOST_CHANNELS = 64


class ScpiScope:
    """Options: `channel` (of the drive signal, 1), `volts_channel` (of a mean voltage; none unless given),
    `conducting_level` ("high" or "low": the level of the drive signal at which the switch conducts).

    Channels: frequency, duty (%, of the conducting level), and volts where `volts_channel` is given. One acquisition
    a reading: both hold still during a hold, so a window longer than an acquisition is not filled with repeats.
    """

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        options = common.Options(setup)
        channel = options.whole("channel", 1, MOST_CHANNELS, 1)
        volts_channel = options.whole("volts_channel", 1, MOST_CHANNELS)
        self._inverted = options.choice("conducting_level", ("high", "low")) == "low"
        options.done()
        wired = {"frequency": channel, "duty": channel}
        if volts_channel is not None:
            wired["volts"] = volts_channel
        self.channels: Mapping[str, str] = {quantity: UNITS[quantity] for quantity in wired}
        common.check_accuracy(setup, self.channels)
        dialect = Dialect(name, setup.dialect, "scope", COMMANDS)
        self._identity = query(dialect.command("identity"), early=True)
        self._clear, self._error = tell(dialect.command("clear")), query(dialect.command("error"))
        self._plan = tuple(
            (quantity, query(dialect.command(quantity, channel=str(number))), UNITS[quantity], f"{name}.{quantity}")
            for quantity, number in wired.items()
        )
        self._no_value = dialect.no_value
        self._accuracy = {key: setup.accuracy.get(key, common.NO_ACCURACY) for key in self.channels}

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, self._identity)

    def configure(self) -> Steps[None]:
        """Status and error queue emptied; timebase and trigger stay as the person set them, seen on the screen."""
        standing = yield from common.begin(self.name, self._clear, self._error)
        yield from common.no_new_errors(self.name, self._error, standing)

    def settings(self) -> Steps[dict[str, str]]:
        """Nothing of a scope is set by this adapter; what is asked is on record."""
        yield from ()
        return {quantity: ask.message.decode("ascii") for quantity, ask, _, _ in self._plan}

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
        return readings

    def switch_off(self) -> Steps[None]:
        """A scope drives nothing."""
        yield from ()
