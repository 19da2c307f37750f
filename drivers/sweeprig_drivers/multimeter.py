"""A multimeter that averages a DC voltage or current over a settable aperture, one reading a query.

The mean over whole PWM periods is what it is asked for; what a broken period costs is in the reading's u.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from sweeprig.errors import ConfigError
from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, Ask, Identity, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import CLEAR, ERROR, EVENT_STATUS, IDENTITY, REMOTE, Dialect, Form, number_text

COMMANDS = {
    "identity": IDENTITY,
    "clear": CLEAR,
    "error": ERROR,
    "event_status": EVENT_STATUS,
    "remote": REMOTE,
    "function": Form(("range",)),
    "range_query": Form(query=True),
    "autorange_query": Form(query=True, optional=True),
    "aperture": Form(("aperture",)),
    "aperture_query": Form(query=True),
    "amps_function": Form(("range",), optional=True),
    "amps_range_query": Form(query=True, optional=True),
    "amps_autorange_query": Form(query=True, optional=True),
    "amps_aperture": Form(("aperture",), optional=True),
    "amps_aperture_query": Form(query=True, optional=True),
    "average": Form(("count",), optional=True),
    "average_query": Form(query=True, optional=True),
    "read": Form(query=True),
}
RANGES = {"volts": ("V", 1e-3, 1000.0), "amps": ("A", 1e-6, 100.0)}
"""What the option `function` chooses: the channel, its unit, the least and greatest range."""
SETTING_TOLERANCE = 0.01
"""Range and aperture must read back within 1 %: another range or aperture than the one asked for is refused."""
BROKEN_PERIOD_TOLERANCE = 1e-4
"""Largest share of the wave's amplitude that a broken period may add before readings are flagged."""


def broken_period(aperture_s: float, pwm_hz: float) -> float:
    """Largest error of the mean, over the wave's amplitude, that a broken period brings (0 for whole periods).

    For a wave between 0 and V of frequency f, duty D, averaged over T at any phase, with r = frac(fT):
    |error| ≤ V/(fT)·max{min(D, r) − rD, rD − max(0, r + D − 1)} (derived; the whole periods average exactly D). Over
    all D that is at most V/(fT)·min(e, 1/4) with e the distance of fT from the next whole number: for r ≤ 1/2 both
    terms are at most r, and neither exceeds D(1 − D) ≤ 1/4.
    """
    periods = aperture_s * pwm_hz
    return min(abs(periods - round(periods)), 0.25) / periods


class ScpiMultimeter:
    """Options: `function` ("volts", or "amps" where the dialect has its commands), `range` (V or A) and `aperture` (s),
    these two required, `averaging` ("host" or "instrument", who takes the mean over a window), `remote` ("stays" or
    "ask", see `common.Remote`). Channels: volts, or amps. The range is fixed: an autoranging ammeter interrupts the
    motor.

    `measure` averages round(window / aperture) apertures, at least one.
    """

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        options = common.Options(setup)
        self._quantity = options.choice("function", tuple(RANGES))
        self._unit, least, most = RANGES[self._quantity]
        self.channels: Mapping[str, str] = {self._quantity: self._unit}
        common.check_accuracy(setup, self.channels)
        self._full = options.quantity("range", self._unit, least, most)
        self._aperture_s = aperture_s = options.quantity("aperture", "s", 1e-4, 10.0)
        self._averaging = common.Averaging(name, options)
        self._remote = common.Remote(name, options)
        options.done()
        dialect = Dialect(name, setup.dialect, "multimeter", COMMANDS)
        self._remote.use(dialect)
        self._offered(dialect.apertures)
        self._identity = query(dialect.command("identity"), early=True)
        self._clear, self._error = tell(dialect.command("clear")), query(dialect.command("error"))
        self._status = common.status_query(dialect)
        head = "" if self._quantity == "volts" else "amps_"
        self._require(dialect, [f"{head}{key}" for key in ("function", "range_query", "aperture", "aperture_query")])
        autorange = f"{head}autorange_query"
        self._function = tell(dialect.command(f"{head}function", range=number_text(self._full)))
        self._range_query = query(dialect.command(f"{head}range_query"))
        self._autorange = query(dialect.command(autorange)) if dialect.has(autorange) else None
        self._aperture = tell(dialect.command(f"{head}aperture", aperture=number_text(aperture_s)))
        self._aperture_query = query(dialect.command(f"{head}aperture_query"))
        self._averaging.use(dialect, self._error)
        self._read = query(dialect.command("read"), within_s=aperture_s + 1.0)
        self._read_longer: dict[int, Ask] = {1: self._read}
        self._no_value = dialect.no_value
        self._accuracy = setup.accuracy.get(self._quantity, common.NO_ACCURACY)
        self._channel = f"{name}.{self._quantity}"

    def _offered(self, apertures: tuple[float, ...]) -> None:
        """Refuse an aperture that this family does not offer: it would take the nearest, or an error."""
        if not apertures or any(abs(self._aperture_s - each) <= SETTING_TOLERANCE * each for each in apertures):
            return
        nearest = min(apertures, key=lambda each: abs(each - self._aperture_s))
        raise ConfigError(
            f"{self.name}: the instrument does not offer this aperture",
            value=f"{self._aperture_s:g} s",
            allowed=", ".join(f"{each:g} s" for each in apertures),
            remedy=f"set the option aperture to '{nearest:g} s'",
            topic="rig",
        )

    def _require(self, dialect: Dialect, keys: list[str]) -> None:
        for key in keys:
            if not dialect.has(key):
                raise ConfigError(
                    f"{self.name}: the dialect does not say how this function is spelt",
                    value=self._quantity,
                    allowed=f"a dialect with the command {key}",
                    remedy="choose another function or dialect in the rig file",
                    topic="dialects",
                )

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, self._identity)

    def configure(self) -> Steps[None]:
        """Fixed range first (choosing the function presets the aperture), then the aperture; both read back."""
        name, error = self.name, self._error
        self._averaging.forget()
        yield from self._remote.take()
        standing = yield from common.begin(name, self._clear, error)
        near = SETTING_TOLERANCE
        wanted, unit = self._full, self._unit
        yield from common.confirm(name, "range", self._function, self._range_query, error, wanted, near * wanted, unit)
        if self._autorange is not None:
            answer = yield self._autorange
            if common.is_on(name, answer.raw):
                entries = yield from common.drain(name, error)
                raise common.refused(name, "the range was fixed and autorange stayed on", "1", "0", entries)
        wanted = self._aperture_s
        back = self._aperture_query
        yield from common.confirm(name, "aperture", self._aperture, back, error, wanted, near * wanted, "s")
        yield from common.no_new_errors(name, error, standing)

    def settings(self) -> Steps[dict[str, str]]:
        found = {}
        for key, ask in ((f"range_{self._quantity}", self._range_query), ("aperture_s", self._aperture_query)):
            answer = yield ask
            found[key] = common.shown(answer.raw)
        return (yield from common.with_status(self.name, found, self._status))

    def check_window(self, window: Window) -> None:
        """ConfigError when the aperture is not close to a whole number of the window's PWM periods."""
        common.check_window(self.name, window)
        if window.pwm_hz is None or broken_period(self._aperture_s, window.pwm_hz) <= BROKEN_PERIOD_TOLERANCE:
            return
        periods = self._aperture_s * window.pwm_hz
        best = max(1.0, round(periods)) / window.pwm_hz
        raise ConfigError(
            f"{self.name}: the aperture is not a whole number of PWM periods",
            value=f"{self._aperture_s:g} s at {window.pwm_hz:g} Hz, {periods:.4g} periods",
            allowed=f"a broken period worth at most {BROKEN_PERIOD_TOLERANCE:.0e} of the wave",
            remedy=f"set the option aperture to '{best:.6g} s', change the PWM frequency, or let it be moved "
            "(pwm_tolerance in the sweep)",
            topic="rig",
        )

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """The mean of the readings. One without a value makes the whole mean no data: leaving it out would
        bias the mean towards what the meter could read. With `window.pwm_hz` the broken period's part is in u, and
        the flag `aperture_not_whole_periods` says when it matters."""
        name, no_value = self.name, self._no_value
        count, each = self._averaging.plan(max(1, round(window.seconds / self._aperture_s)))
        yield from self._averaging.apply(each)
        ask = self._read_longer.get(each) or self._longer(each)
        total, lost = 0.0, ""
        raws = []
        for _ in range(count):
            answer = yield ask
            value, why = common.number(name, answer.raw, no_value)
            raws.append(answer.raw)
            if value is None:
                lost = lost or why
            else:
                total += value
        raw = b" ".join(raws).decode("latin-1")
        if lost:
            return {self._quantity: Reading(None, 0.0, self._unit, answer.at, self._channel, (lost,), raw)}
        mean = total / count
        u = self._accuracy.u(mean)
        flags: tuple[str, ...] = ()
        if window.pwm_hz is not None:
            u, flags = self._with_broken_period(mean, u, window.pwm_hz)
        return {self._quantity: Reading(mean, u, self._unit, answer.at, self._channel, flags, raw)}

    def _longer(self, each: int) -> Ask:
        ask = self._read_longer[each] = query(self._read.message, within_s=each * self._aperture_s + 1.0)
        return ask

    def _with_broken_period(self, mean: float, u: float, pwm_hz: float) -> tuple[float, tuple[str, ...]]:
        """u with the broken period's part, and the flags.

        The amplitude V (of a current: its peak) is not known to a meter. Two bounds hold for any wave from 0 to V: V is
        below the fixed range (else the reading is an overload), and for fT > 1 the error is below
        (true mean)·(1 − D)/(fT), with the true mean below |reading|/(1 − 1/(fT)), that is below |reading|/(fT − 1).
        The smaller is the half-width of a rectangle: u = bound/√3. The n readings of one window keep a phase relation,
        so the bound is not divided.
        """
        share = broken_period(self._aperture_s, pwm_hz)
        bound = share * self._full
        periods = self._aperture_s * pwm_hz
        if periods > 1.0:
            bound = min(bound, abs(mean) / (periods - 1.0))
        flags = ("aperture_not_whole_periods",) if share > BROKEN_PERIOD_TOLERANCE else ()
        return math.hypot(u, bound / math.sqrt(3.0)), flags

    def switch_off(self) -> Steps[None]:
        """A meter drives nothing."""
        yield from ()
