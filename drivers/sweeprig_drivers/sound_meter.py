"""A sound-level meter: the level averaged over a stated time, with a stated frequency weighting.

What else makes a noise in the room, it cannot tell.
"""

from __future__ import annotations

from collections.abc import Mapping

from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Identity, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import CLEAR, ERROR, IDENTITY, Dialect, Form, number_text

COMMANDS = {
    "identity": IDENTITY,
    "clear": CLEAR,
    "error": ERROR,
    "average": Form(("seconds",)),
    "average_query": Form(query=True),
    "weighting": Form(("weighting",)),
    "weighting_query": Form(query=True),
    "level": Form(query=True),
}
AVERAGE_TOLERANCE = 0.01


class ScpiSoundMeter:
    """Options: `average` (s over which one reading averages, 1 s), `weighting` ("A" or "C"). Channels: level (dB)."""

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        self.channels: Mapping[str, str] = {"level": "dB"}
        common.check_accuracy(setup, self.channels)
        options = common.Options(setup)
        self._average_s = average_s = options.quantity("average", "s", 0.125, 30.0, 1.0)
        self._weighting = options.choice("weighting", ("A", "C"))
        options.done()
        self._dialect = dialect = Dialect(name, setup.dialect, "sound-meter", COMMANDS)
        self._identity = query(dialect.command("identity"), early=True)
        self._clear, self._error = tell(dialect.command("clear")), query(dialect.command("error"))
        self._average = tell(dialect.command("average", seconds=number_text(average_s)))
        self._average_query = query(dialect.command("average_query"))
        self._weighting_query = query(dialect.command("weighting_query"))
        self._level = query(dialect.command("level"), within_s=average_s + 1.0)
        self._accuracy = setup.accuracy.get("level", common.NO_ACCURACY)

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, self._identity)

    def configure(self) -> Steps[None]:
        """Averaging time and weighting, both read back."""
        name, error, wanted = self.name, self._error, self._average_s
        standing = yield from common.begin(name, self._clear, error)
        near = AVERAGE_TOLERANCE * wanted
        yield from common.confirm(name, "average", self._average, self._average_query, error, wanted, near, "s")
        answer = yield self._weighting_query
        if not self._is_weighting(answer.raw):
            yield tell(self._dialect.command("weighting", weighting=self._weighting))
            answer = yield self._weighting_query
            if not self._is_weighting(answer.raw):
                entries = yield from common.drain(name, error)
                found = common.shown(answer.raw)
                raise common.refused(name, "the weighting reads back differently", found, self._weighting, entries)
        yield from common.no_new_errors(name, error, standing)

    def _is_weighting(self, raw: bytes) -> bool:
        return common.shown(raw).strip().strip('"').upper() == self._weighting

    def settings(self) -> Steps[dict[str, str]]:
        found = {}
        for key, ask in (("average_s", self._average_query), ("weighting", self._weighting_query)):
            answer = yield ask
            found[key] = common.shown(answer.raw)
        return found

    def check_window(self, window: Window) -> None:
        common.check_window(self.name, window)

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """One average a reading: levels do not add up as numbers, so several are not averaged here."""
        del window
        answer = yield self._level
        value, why = common.number(self.name, answer.raw, self._dialect.no_value)
        raw, channel = common.shown(answer.raw), f"{self.name}.level"
        if value is None:
            return {"level": Reading(None, 0.0, "dB", answer.at, channel, (why,), raw)}
        return {"level": Reading(value, self._accuracy.u(value), "dB", answer.at, channel, (), raw)}

    def switch_off(self) -> Steps[None]:
        """A sound-level meter drives nothing."""
        yield from ()
