"""What every adapter here needs: options, identities, numbers, the error queue, and setting with read-back.

Pure: steps that yield asks, and functions on bytes. Nothing about any one kind of instrument.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from sweeprig.errors import ConfigError, InstrumentRefused, LinkGarbled, OffNotProved
from sweeprig.quantities import NO_DATA_MAGNITUDE, Accuracy, parse_number, parse_quantity, show_quantity
from sweeprig.roles import AdapterSetup, Answer, Ask, Identity, Reply, Steps, Window
from sweeprig_drivers.dialect import Dialect

MOST_ERRORS = 64
"""Entries taken from an error queue before giving up: queues of 16 and 30 were seen, and instruments that never
run empty because they report a standing error again and again."""
LONGEST_WINDOW_S = 600.0
MOST_AVERAGED = 100
"""Values that an instrument is asked to average in one reading; longer windows take several. Own choice, modest."""
NO_ACCURACY = Accuracy()
EVENT_STATUS = "event_status"
"""The key of `settings`, and the dialect's command: whoever performs a hold looks there for a restart."""


def tell(message: bytes | str, early: bool = False) -> Ask:
    """An ask that has no reply."""
    return Ask(message if isinstance(message, bytes) else message.encode("ascii"), Reply.NOTHING, early=early)


def query(message: bytes | str, within_s: float = 2.0, after_s: float = 0.0, early: bool = False) -> Ask:
    """An ask for one line."""
    data = message if isinstance(message, bytes) else message.encode("ascii")
    return Ask(data, Reply.LINE, within_s, after_s, early)


def shown(raw: bytes) -> str:
    """Bytes as text for the record: any byte has a letter in Latin-1, so nothing is lost and nothing raises."""
    return raw.decode("latin-1")


class Options:
    """The option table of one instrument, taken piece by piece; what is left at `done` is unknown and refused."""

    def __init__(self, setup: AdapterSetup) -> None:
        self._name = setup.name
        self._table = dict(setup.options)
        self._known: list[str] = []

    def quantity(self, key: str, unit: str, low: float, high: float, default: float | None = None) -> float:
        """A number with its unit, from `low` to `high`; without a default it must be there."""
        found = self._take(key)
        if found is None and default is not None:
            return default
        allowed = f"{show_quantity(low, unit)} to {show_quantity(high, unit)}"
        remedy = f"write for example {key} = '{show_quantity(low if default is None else default, unit)}'"
        if not isinstance(found, str):
            why = "is missing" if found is None else "is not a text with a unit"
            raise self._wrong(key, why, found, allowed, remedy)
        try:
            value = parse_quantity(found, unit)
        except ValueError as fault:
            raise self._wrong(key, f"cannot be read: {fault}", found, allowed, remedy) from fault
        if not low <= value <= high:
            raise self._wrong(key, "is out of range", found, allowed, remedy)
        return value

    def whole(self, key: str, low: int, high: int, default: int | None = None) -> int | None:
        """A whole number from `low` to `high`, or the default."""
        found = self._take(key)
        if found is None:
            return default
        if isinstance(found, bool) or not isinstance(found, int) or not low <= found <= high:
            raise self._wrong(
                key, "is not a whole number in range", found, f"{low} to {high}", f"write for example {key} = {low}"
            )
        return found

    def choice(self, key: str, allowed: tuple[str, ...]) -> str:
        """One of `allowed`; the first where the option is not given."""
        found = self._take(key)
        if found is None:
            return allowed[0]
        if found not in allowed:
            raise self._wrong(
                key, "is not one of the choices", found, ", ".join(allowed), f"write for example {key} = '{allowed[0]}'"
            )
        return str(found)

    def done(self) -> None:
        for key, found in self._table.items():
            allowed = ", ".join(self._known) or "no options"
            raise self._wrong(key, "is not known", found, allowed, "correct or remove it in the rig file")

    def _take(self, key: str) -> object:
        self._known.append(key)
        return self._table.pop(key, None)

    def _wrong(self, key: str, why: str, found: object, allowed: str, remedy: str) -> ConfigError:
        value = None if found is None else repr(found)
        text = f"{self._name}: the option '{key}' {why}"
        return ConfigError(text, value=value, allowed=allowed, remedy=remedy, topic="rig")


def check_accuracy(setup: AdapterSetup, channels: Mapping[str, str]) -> None:
    """A statement for a quantity that the instrument does not have would silently count for nothing: ConfigError."""
    for quantity in setup.accuracy:
        if quantity not in channels:
            raise ConfigError(
                f"{setup.name}: an accuracy is stated for a quantity this instrument does not have",
                value=quantity,
                allowed=", ".join(channels),
                remedy="correct the name in the rig file",
                topic="rig",
            )


def check_window(name: str, window: Window) -> None:
    """ConfigError unless the window is a positive, finite time of at most ten minutes and any frequency positive."""
    if not 0.0 < window.seconds <= LONGEST_WINDOW_S or not (window.pwm_hz is None or 0.0 < window.pwm_hz < math.inf):
        raise ConfigError(
            f"{name}: a reading cannot average over this window",
            value=f"{window.seconds:g} s, PWM {window.pwm_hz} Hz",
            allowed=f"above 0 to {LONGEST_WINDOW_S:g} s, PWM above 0 Hz",
            remedy="correct the window",
            topic="rig",
        )


def garbled(name: str, what: str, raw: bytes) -> LinkGarbled:
    return LinkGarbled(
        f"{name}: the reply is no {what}: {shown(raw[:80])!r}",
        partial=raw,
        remedy="check the wiring, the terminator and the dialect",
    )


def parse_identity(name: str, raw: bytes) -> Identity:
    """The four fields of *IDN? (IEEE 488.2, 10.14), leniently: blanks around them, empty ones, commas in the last.

    LinkGarbled when there are fewer, when a byte is not printable, or when the maker has no letter in it: the last
    is how a late reply with numbers in it would look.
    """
    text = shown(raw).strip()
    fields = [part.strip() for part in text.split(",", 3)]
    if len(fields) != 4 or not text.isascii() or not text.isprintable() or not any(c.isalpha() for c in fields[0]):
        raise garbled(name, "identity of four fields", raw)
    return Identity(*fields)


def identify(name: str, ask: Ask) -> Steps[Identity]:
    """The identity query and nothing else."""
    answer = yield ask
    return parse_identity(name, answer.raw)


def number(name: str, raw: bytes, no_value: tuple[str, ...] = ()) -> tuple[float | None, str]:
    """One number → (value, "") or (None, reason); LinkGarbled for anything else.

    The quick way is `float`, which takes more than instruments may write: `nan`, `inf` and `1_0` go the slow way,
    where they are refused."""
    try:
        value = float(raw)
    except ValueError:
        value = math.nan
    if -NO_DATA_MAGNITUDE < value < NO_DATA_MAGNITUDE and b"_" not in raw:
        return value, ""
    try:
        return parse_number(shown(raw), no_value)
    except ValueError as fault:
        raise garbled(name, "number", raw) from fault


def whole_number(name: str, raw: bytes) -> int:
    """A register or a count: NR1, or NR2 and NR3 without a fraction. LinkGarbled for anything else."""
    value, _ = number(name, raw)
    if value is None or value != int(value):
        raise garbled(name, "whole number", raw)
    return int(value)


def is_on(name: str, raw: bytes) -> bool:
    """A boolean as SCPI-1999 vol. 1, 7.3 answers it (0 or 1), or in words as some do."""
    word = raw.strip().upper()
    if word in (b"1", b"+1", b"ON"):
        return True
    if word in (b"0", b"+0", b"OFF"):
        return False
    raise garbled(name, "0 or 1", raw)


def status_query(dialect: Dialect) -> Ask | None:
    """The ask for the event status register (IEEE 488.2, 11.5.1), of which bit 7 says that the instrument started since
    it was last asked; None where the dialect has no such command. `begin` clears it, and so does asking."""
    return query(dialect.command(EVENT_STATUS)) if dialect.has(EVENT_STATUS) else None


def with_status(name: str, found: dict[str, str], ask: Ask | None) -> Steps[dict[str, str]]:
    """The settings that were found, and the event status register where it can be asked: one more query."""
    if ask is not None:
        answer = yield ask
        found[EVENT_STATUS] = str(whole_number(name, answer.raw))
    return found


def drain(name: str, error: Ask) -> Steps[tuple[str, ...]]:
    """Take every entry from the error queue, 64 at the most; texts as the instrument wrote them, oldest first.

    Entry −350 stands for some that were lost (SCPI-1999 vol. 2, 21.8)."""
    entries: list[str] = []
    while len(entries) < MOST_ERRORS:
        answer = yield error
        text = shown(answer.raw).strip()
        code = number(name, text.partition(",")[0].encode("latin-1"))[0]
        if code is None:
            raise garbled(name, "entry of an error queue", answer.raw)
        if code == 0:
            break
        entries.append(text)
    return tuple(entries)


def refused(name: str, what: str, value: str, allowed: str, entries: tuple[str, ...]) -> InstrumentRefused:
    queue = f"; its error queue: {' | '.join(entries)}" if entries else "; its error queue is empty"
    return InstrumentRefused(
        f"{name}: {what}{queue}",
        value=value,
        allowed=allowed,
        remedy="check the setting against the instrument's ranges",
        topic="rig",
    )


class Remote:
    """The option `remote`: "stays" (an instrument that obeys its link from the start, as most on a network do) or "ask"
    (one that obeys only after it was told to, as many on RS-232; SCPI-1999 vol. 2, chapter 21, from memory).

    It is told so when it is configured, and before every switching off: a person may have turned it to local meanwhile.
    """

    def __init__(self, name: str, options: Options) -> None:
        self.name = name
        self.wanted = options.choice("remote", ("stays", "ask")) == "ask"
        self._ask: Ask | None = None

    def use(self, dialect: Dialect) -> None:
        """ConfigError where the dialect does not say how."""
        if not self.wanted:
            return
        if not dialect.has("remote"):
            raise ConfigError(
                f"{self.name}: the dialect does not say how this instrument is told to obey its link",
                value="remote = 'ask'",
                allowed="a dialect with the command remote",
                remedy="leave the option out, or name another dialect in the rig file",
                topic="dialects",
            )
        self._ask = tell(dialect.command("remote"), early=True)

    def take(self) -> Steps[None]:
        if self._ask is not None:
            yield self._ask


def begin(name: str, clear: Ask, error: Ask) -> Steps[tuple[str, ...]]:
    """Clear the status and empty the error queue; what cannot be emptied is a standing error and returned."""
    yield clear
    return (yield from drain(name, error))


def no_new_errors(name: str, error: Ask, standing: tuple[str, ...] = ()) -> Steps[None]:
    """InstrumentRefused when the queue holds an entry that was not there when configuring began."""
    entries = yield from drain(name, error)
    new = tuple(entry for entry in entries if entry not in standing)
    if new:
        raise refused(name, "it reports an error after having been configured", new[0], "no error", new)


def confirm(
    name: str, what: str, setting: Ask, back: Ask, error: Ask, wanted: float, tolerance: float, unit: str
) -> Steps[tuple[float, Answer]]:
    """Send `setting`, ask it back with `back`: (the value read back, its answer).

    InstrumentRefused, with what the error queue says, when it differs from `wanted` by more than `tolerance`."""
    yield setting
    answer = yield back
    value, why = number(name, answer.raw)
    if value is None or abs(value - wanted) > tolerance:
        entries = yield from drain(name, error)
        text = f"the {what} was set to {wanted:.9g} {unit} and reads back differently"
        found = f"{value:.9g} {unit}" if value is not None else why
        raise refused(name, text, found, f"{wanted:.9g} ± {tolerance:.3g} {unit}", entries)
    return value, answer


class Averaging:
    """The option `averaging`: "host" (several readings a window, their mean taken here) or "instrument" (its own filter
    takes the mean of so many, one reading a window: fewer messages over the same time).

    It remembers what the filter was last set to, and sets it (read back) when a window needs another number.
    """

    def __init__(self, name: str, options: Options) -> None:
        self.name = name
        self.in_instrument = options.choice("averaging", ("host", "instrument")) == "instrument"
        self._set = 0

    def forget(self) -> None:
        """The instrument is about to be configured anew: what its filter is set to is not known."""
        self._set = 0

    def use(self, dialect: Dialect, error: Ask) -> None:
        """ConfigError where the dialect does not say how the filter is set."""
        self._dialect, self._error = dialect, error
        if self.in_instrument and not (dialect.has("average") and dialect.has("average_query")):
            raise ConfigError(
                f"{self.name}: the dialect does not say how this instrument averages",
                value="averaging = 'instrument'",
                allowed="a dialect with the commands average and average_query",
                remedy="leave the option out, or name another dialect in the rig file",
                topic="dialects",
            )

    def plan(self, count: int) -> tuple[int, int]:
        """(readings, values averaged in each) for a window that `count` values fill."""
        if not self.in_instrument:
            return count, 1
        readings = math.ceil(count / MOST_AVERAGED)
        return readings, round(count / readings)

    def apply(self, each: int) -> Steps[None]:
        """The filter at `each` values a reading, where it is not so already."""
        if not self.in_instrument or each == self._set:
            return
        self._set = 0
        send, back = (
            tell(self._dialect.command("average", count=str(each))),
            query(self._dialect.command("average_query")),
        )
        yield from confirm(self.name, "number averaged", send, back, self._error, each, 0.0, "")
        self._set = each


def turn_on(name: str, on: Ask, state: Ask, error: Ask) -> Steps[None]:
    """Output on, shown to be on; else InstrumentRefused."""
    yield on
    answer = yield state
    if not is_on(name, answer.raw):
        entries = yield from drain(name, error)
        raise refused(name, "the output was switched on and stayed off", shown(answer.raw), "1", entries)


def turn_off(name: str, off: Ask, state: Ask, remote: Remote | None = None) -> Steps[None]:
    """Output off, then shown to be off; else OffNotProved. Both asks must be early: nothing may hold them up."""
    if remote is not None:
        yield from remote.take()
    yield off
    answer = yield state
    if is_on(name, answer.raw):
        raise OffNotProved(
            f"{name}: the output was switched off and says that it is on",
            value=shown(answer.raw),
            allowed="0",
            remedy="cut the supply by hand, then look for the cause",
            topic="safety",
        )
