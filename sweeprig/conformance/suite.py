"""The named checks: each is given a bed and returns what it saw, or raises `Failed` or `NotApplicable`.

What each holds an adapter to stands in `sweeprig.roles`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from functools import partial
from typing import Any

from sweeprig.conformance.bed import Bed, Exchange, Failed, NotApplicable, Refusing, Watch, actuator, need, perform
from sweeprig.conformance.scripted import POWER_ON
from sweeprig.errors import InstrumentRefused, LinkMisuse, LinkTimeout, RigError
from sweeprig.quantities import NO_DATA_MAGNITUDE, Reading
from sweeprig.roles import Adapter, Answer, Ask, Drive, Identity, Reply, Steps, Supply

LONGEST_WITHIN_S = 60.0
SENTINELS = (b"9.91E37", b"+9.9E37", b"-9.900000302E+37")
GARBAGE = (b"\xff\x00\xb5", b"1.2.3", b"nan", b"1_0", b"volts 12", b"0x10")
NO_IDENTITY = (b"", b"1.5", b"\xff\xfe,\x00", b"maker,model", b"812,4,16000,16000000,12")


def identity_is_asked_first_early_and_alone(bed: Bed) -> str:
    watch = Watch(bed.exchange())
    identity = perform(bed.adapter().identify(), watch)
    need(len(watch.asks) == 1, f"identify sends {len(watch.asks)} messages")
    asked = watch.asks[0].reply in (Reply.LINE, Reply.STREAM)
    need(watch.asks[0].early and asked, f"not an early query: {watch.asks[0]}")
    need(isinstance(identity, Identity), f"identify returned {identity!r}")
    return f"{identity.maker}, {identity.model}, serial {identity.serial}"


def no_identity_is_refused(bed: Bed) -> str:
    for raw in NO_IDENTITY:
        watch = Watch(bed.exchange(), _always(raw))
        _must_raise(RigError, bed.adapter().identify(), watch, f"the identity {raw!r}")
    return f"{len(NO_IDENTITY)} replies that are none were refused"


def asks_are_bounded(bed: Bed) -> str:
    longest, count = 0.0, 0
    for method, ask in _all_asks(bed):
        bounded = 0.0 < ask.within_s <= LONGEST_WITHIN_S and 0.0 <= ask.after_s <= LONGEST_WITHIN_S
        need(bounded, f"{method}: {ask.message!r} within {ask.within_s} s, after {ask.after_s} s")
        longest, count = max(longest, ask.within_s), count + 1
    return f"{count} asks, the longest within {longest:g} s"


def messages_are_clean(bed: Bed) -> str:
    for method, ask in _all_asks(bed):
        said = bool(ask.message) or ask.reply is Reply.STREAM
        clean = said and all(0x20 <= byte <= 0x7E for byte in ask.message)
        need(clean, f"{method}: {ask.message!r} has bytes that are not printable ASCII")
    return "printable ASCII only, terminators left to the link"


def asking_sets_nothing(bed: Bed) -> str:
    asking = ("identify", "settings", "measure")
    for method, ask in _all_asks(bed):
        need(method not in asking or ask.reply is not Reply.NOTHING, f"{method} sends the command {ask.message!r}")
    return "identify, settings and measure send queries only"


def settings_are_texts(bed: Bed) -> str:
    adapter, exchange = bed.fresh()
    found = perform(adapter.settings(), exchange)
    texts = all(isinstance(key, str) and isinstance(value, str) for key, value in found.items())
    need(texts, f"settings returned {found!r}")
    return ", ".join(f"{key} {value}" for key, value in found.items()) or "no settings"


def a_restart_shows(bed: Bed) -> str:
    """Who shows its event status register shows it as whoever looks for a restart reads it, and after `configure` with
    bit 7 clear: left set, every hold would pass for one in which the instrument restarted."""
    adapter, exchange = bed.fresh()
    status = perform(adapter.settings(), exchange).get("event_status")
    if status is None:
        raise NotApplicable("its settings show no event_status: a restart that leaves them as they were is not seen")
    need(status.isdecimal() and int(status) < 256, f"event_status is {status!r}, no register of eight bits in digits")
    need(not int(status) & POWER_ON, f"event_status {status} after configure: its power-on bit is still set")
    return f"event_status {status} after configure"


def configure_is_confirmed(bed: Bed) -> str:
    def prepare() -> tuple[Steps[Any], Exchange]:
        adapter, exchange = bed.adapter(), bed.exchange()
        perform(adapter.identify(), exchange)
        return adapter.configure(), exchange

    return _confirmed(prepare)


def apply_is_confirmed(bed: Bed) -> str:
    settings = _settings(bed)

    def prepare() -> tuple[Steps[Any], Exchange]:
        adapter, exchange = bed.ready()
        return actuator(adapter).apply(settings[1]), exchange

    return _confirmed(prepare)


def switch_on_is_confirmed(bed: Bed) -> str:
    settings = _settings(bed)

    def prepare() -> tuple[Steps[Any], Exchange]:
        adapter, exchange = bed.fresh()
        perform(actuator(adapter).apply(settings[0]), exchange)
        perform(adapter.switch_off(), exchange)
        return actuator(adapter).switch_on(), exchange

    return _confirmed(prepare)


def off_is_early(bed: Bed) -> str:
    """On a link that has not said who it is everything but early asks is misuse, and the first must need no answer."""
    adapter = bed.ready()[0]
    exchange = bed.exchange()

    def unidentified(ask: Ask) -> Answer:
        if not ask.early:
            raise LinkMisuse(f"{ask.message!r} is not early")
        return exchange(ask)

    watch = Watch(unidentified)
    perform(adapter.switch_off(), watch)
    if not watch.asks:
        if bed.settings is not None:
            raise Failed("an actuator's switch_off sends nothing")
        return "nothing to switch off"
    need(watch.asks[0].reply is Reply.NOTHING, f"the first message waits for an answer: {watch.asks[0].message!r}")
    return " then ".join(ask.message.decode("ascii") for ask in watch.asks)


def off_is_proved(bed: Bed) -> str:
    _settings(bed)
    adapter, exchange = bed.ready()
    refusing = Refusing(exchange, 0)
    _must_raise(RigError, adapter.switch_off(), refusing, "an output that stays on")
    perform(adapter.switch_off(), exchange)
    return f"{refusing.refused.decode('ascii')} had no effect and that was noticed"


def every_channel_is_read(bed: Bed) -> str:
    adapter, exchange = bed.ready()
    applied = {} if bed.settings is None else perform(actuator(adapter).apply(bed.settings[0]), exchange)
    watch = Watch(exchange)
    readings = perform(adapter.measure(bed.window), watch)
    need(bool(readings), "measure returned no reading")
    missing = set(adapter.channels) - set(readings) - set(applied)
    need(not missing, f"no reading of {', '.join(sorted(missing))}")
    for quantity, reading in {**applied, **readings}.items():
        _check_reading(adapter, quantity, reading)
    asked = {answer.at for answer in watch.answers}
    for quantity, reading in readings.items():
        need(reading.at in asked, f"{quantity}: at {reading.at} is the time of no answer")
    return ", ".join(f"{key} {reading.value} {reading.unit}" for key, reading in readings.items())


def no_data_stays_no_data(bed: Bed) -> str:
    replies = _replies_of_measure(bed)
    outcomes = [_spoilt(bed, which, partial(_every_field, sentinel)) for sentinel in SENTINELS for which in replies]
    need("a number" not in outcomes, "a reply that says 'no value' left every reading with a number")
    return f"{outcomes.count('no data')} times no data, {outcomes.count('refused')} times refused"


def garbage_is_refused(bed: Bed) -> str:
    count = 0
    for garbage in GARBAGE:
        for which in _replies_of_measure(bed):
            seen = _spoilt(bed, which, partial(_instead, garbage))
            need(seen == "refused", f"{garbage!r} as reply {which} of measure gave {seen}")
            count += 1
    return f"{count} garbled replies, each a typed error"


def a_wrong_count_is_refused(bed: Bed) -> str:
    for which in _replies_of_measure(bed):
        seen = _spoilt(bed, which, lambda raw: raw + b",1")
        need(seen == "refused", f"one value too many in reply {which} of measure gave {seen}")
        seen = _spoilt(bed, which, lambda raw: raw.rpartition(b",")[0] if b"," in raw else raw + b",")
        need(seen == "refused", f"one value too few in reply {which} of measure gave {seen}")
    return "one value too many and one too few, in each reply"


def steps_can_be_closed_anywhere(bed: Bed) -> str:
    closed = 0
    for name, count in _asks_of_methods(bed).items():
        for stop in range(count):
            adapter, exchange = _before(bed, name)
            steps = bed.methods(adapter)[name]()
            ask = next(steps)
            for _ in range(stop):
                ask = steps.send(exchange(ask))
            steps.close()
            closed += 1
    return f"closed at {closed} places"


def link_errors_come_through(bed: Bed) -> str:
    """Nothing below conduct repeats anything, and a timeout must end the steps with that very error."""
    ended = 0
    for name, count in _asks_of_methods(bed).items():
        for stop in range(count):
            adapter, exchange = _before(bed, name)
            steps = bed.methods(adapter)[name]()
            ask = next(steps)
            for _ in range(stop):
                ask = steps.send(exchange(ask))
            error = LinkTimeout("no reply")
            try:
                steps.throw(error)
            except LinkTimeout as seen:
                need(seen is error, f"{name}: another error came out at ask {stop}")
            except StopIteration:
                raise Failed(f"{name}: a timeout at ask {stop} was swallowed") from None
            else:
                raise Failed(f"{name}: a timeout at ask {stop} was answered with another ask")
            ended += 1
    return f"at {ended} places"


SUITE: Mapping[str, Callable[[Bed], str]] = {
    check.__name__: check
    for check in (
        identity_is_asked_first_early_and_alone, no_identity_is_refused, asks_are_bounded, messages_are_clean,
        asking_sets_nothing, settings_are_texts, a_restart_shows, configure_is_confirmed, apply_is_confirmed,
        switch_on_is_confirmed, off_is_early, off_is_proved, every_channel_is_read, no_data_stays_no_data,
        garbage_is_refused, a_wrong_count_is_refused, steps_can_be_closed_anywhere, link_errors_come_through,
    )
}  # fmt: skip


# What the checks share


def _settings(bed: Bed) -> tuple[Any, Any]:
    if bed.settings is not None:
        return bed.settings
    if isinstance(bed.adapter(), Drive | Supply):
        raise Failed("an actuator, and no settings were given to check it with")
    raise NotApplicable("no actuator")


def _must_raise(kind: type[Exception], steps: Steps[Any], exchange: Exchange, what: str) -> None:
    try:
        result = perform(steps, exchange)
    except kind:
        return
    raise Failed(f"{what} was taken and gave {result!r}")


def _confirmed(prepare: Callable[[], tuple[Steps[Any], Exchange]]) -> str:
    """Every set, kept from the instrument in turn, must end in InstrumentRefused; the last message must be a query."""
    steps, exchange = prepare()
    watch = Watch(exchange)
    perform(steps, watch)
    sets = [ask for ask in watch.asks if ask.reply is Reply.NOTHING and not ask.message.startswith(b"*")]
    if not sets:
        raise NotApplicable("it sets nothing")
    need(watch.asks[-1].reply is not Reply.NOTHING, f"the last message, {watch.asks[-1].message!r}, is not confirmed")
    for which in range(len(sets)):
        steps, exchange = prepare()
        refusing = Refusing(exchange, which)
        _must_raise(InstrumentRefused, steps, refusing, f"that {sets[which].message!r} was refused")
    return ", ".join(ask.message.decode("ascii") for ask in sets)


def _check_reading(adapter: Adapter, quantity: str, reading: Reading) -> None:
    need(quantity in adapter.channels, f"{quantity} is not among the adapter's channels")
    need(reading.unit == adapter.channels[quantity], f"{quantity} is in {reading.unit}")
    need(reading.channel == f"{adapter.name}.{quantity}", f"{quantity} calls itself {reading.channel}")
    need(math.isfinite(reading.u) and reading.u >= 0.0, f"{quantity} has u = {reading.u}")
    if reading.value is None:
        need(any(flag.startswith("no_data") for flag in reading.flags), f"{quantity} has no value and no reason")
    else:
        need(abs(reading.value) < NO_DATA_MAGNITUDE, f"{quantity} is {reading.value}")


def _replies_of_measure(bed: Bed) -> list[int]:
    adapter, exchange = bed.ready()
    watch = Watch(exchange)
    perform(adapter.measure(bed.window), watch)
    return [index for index, ask in enumerate(watch.asks) if ask.reply in (Reply.LINE, Reply.STREAM)]


def _spoilt(bed: Bed, which: int, spoil: Callable[[bytes], bytes]) -> str:
    """What a measure comes to whose reply `which` is spoilt: "refused", "no data" or "a number"."""
    adapter, exchange = bed.ready()
    watch = Watch(exchange, lambda index, _, answer: Answer(spoil(answer.raw), answer.at) if index == which else answer)
    try:
        readings = perform(adapter.measure(bed.window), watch)
    except RigError:
        return "refused"
    for quantity, reading in readings.items():
        _check_reading(adapter, quantity, reading)
    return "no data" if any(reading.value is None for reading in readings.values()) else "a number"


def _every_field(text: bytes, raw: bytes) -> bytes:
    return b",".join([text] * (raw.count(b",") + 1))


def _instead(text: bytes, raw: bytes) -> bytes:
    del raw
    return text


def _always(raw: bytes) -> Callable[[int, Ask, Answer], Answer]:
    return lambda _, __, answer: Answer(raw, answer.at)


def _asks_of_methods(bed: Bed) -> dict[str, int]:
    counts: dict[str, int] = {}
    for name, _ in _all_asks(bed):
        counts[name] = counts.get(name, 0) + 1
    return counts


def _before(bed: Bed, name: str) -> tuple[Adapter, Exchange]:
    if name in ("identify", "configure"):
        adapter, exchange = bed.adapter(), bed.exchange()
        perform(adapter.identify(), exchange)
        return adapter, exchange
    return bed.ready()


def _all_asks(bed: Bed) -> Iterator[tuple[str, Ask]]:
    adapter, exchange = bed.adapter(), bed.exchange()
    for name, method in bed.methods(adapter).items():
        watch = Watch(exchange)
        perform(method(), watch)
        yield from ((name, ask) for ask in watch.asks)
