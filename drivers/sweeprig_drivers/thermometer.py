"""A thermometer with several inputs, one sensor each, named by where the sensor sits.

Which input is where, the rig file says; a wrong one cannot be seen from here.
"""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.errors import ConfigError
from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Identity, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import CLEAR, ERROR, IDENTITY, Dialect, Form

COMMANDS = {"identity": IDENTITY, "clear": CLEAR, "error": ERROR, "temperature": Form(("channel",), query=True)}
PLACES = ("winding", "case", "ambient")
MOST_CHANNELS = 64
COLDEST_DEGC = -273.15


class ScpiThermometer:
    """Options: `winding`, `case`, `ambient`, each the number of the input whose sensor sits there; at least one.

    Channels: those of the three that are given, degC. One conversion a reading: sensors are slower than a window.
    """

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        options = common.Options(setup)
        inputs = {place: options.whole(place, 1, MOST_CHANNELS) for place in PLACES}
        options.done()
        wired = {place: number for place, number in inputs.items() if number is not None}
        if not wired or len(set(wired.values())) < len(wired):
            raise ConfigError(
                f"{name}: each sensor needs an input of its own, and at least one must be stated",
                value=", ".join(f"{place} = {number}" for place, number in wired.items()) or "no sensor",
                allowed=", ".join(PLACES),
                remedy="write for example winding = 1",
                topic="rig",
            )
        self.channels: Mapping[str, str] = dict.fromkeys(wired, "degC")
        common.check_accuracy(setup, self.channels)
        self._dialect = dialect = Dialect(name, setup.dialect, "thermometer", COMMANDS)
        self._identity = query(dialect.command("identity"), early=True)
        self._clear, self._error = tell(dialect.command("clear")), query(dialect.command("error"))
        self._plan = {place: query(dialect.command("temperature", channel=str(n))) for place, n in wired.items()}
        self._accuracy = {place: setup.accuracy.get(place, common.NO_ACCURACY) for place in wired}

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, self._identity)

    def configure(self) -> Steps[None]:
        """Status and error queue emptied; sensor kinds stay as the person set them."""
        standing = yield from common.begin(self.name, self._clear, self._error)
        yield from common.no_new_errors(self.name, self._error, standing)

    def settings(self) -> Steps[dict[str, str]]:
        """Nothing is set by this adapter; what is asked is on record."""
        yield from ()
        return {place: ask.message.decode("ascii") for place, ask in self._plan.items()}

    def check_window(self, window: Window) -> None:
        common.check_window(self.name, window)

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """A broken sensor is no data. Below absolute zero no sensor reads: LinkGarbled."""
        del window
        readings = {}
        for place, ask in self._plan.items():
            answer = yield ask
            value, why = common.number(self.name, answer.raw, self._dialect.no_value)
            if value is not None and value < COLDEST_DEGC:
                raise common.garbled(self.name, "temperature in degC", answer.raw)
            raw, channel = common.shown(answer.raw), f"{self.name}.{place}"
            u = 0.0 if value is None else self._accuracy[place].u(value)
            flags = () if value is not None else (why,)
            readings[place] = Reading(value, u, "degC", answer.at, channel, flags, raw)
        return readings

    def switch_off(self) -> Steps[None]:
        """A thermometer drives nothing."""
        yield from ()
