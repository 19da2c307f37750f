"""The rig's own board: PWM source, tachometer, digital-potentiometer stepper, with a heartbeat of its own.

Its protocol is the table in drivers/firmware/README.md. Asking for the counts is the heartbeat, so nothing here blocks
for a whole gate: the counts are polled.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from sweeprig.errors import ConfigError, InstrumentRefused
from sweeprig.quantities import Reading
from sweeprig.roles import AdapterSetup, DriveSetting, Identity, Steps, Window
from sweeprig_drivers import common
from sweeprig_drivers.common import query, tell
from sweeprig_drivers.dialect import number_text

TIMER_HZ = 16e6
POWER_ON = 128
"""Bit 7 of the event status register (IEEE 488.2, 11.5.1): the board started since the register was last read."""
LEAST_POLL_S, MOST_POLL_S = 0.1, 0.2
LEAST_GATE_S = LEAST_POLL_S / 0.8
"""Polls come every 0.8 of a gate, so that no gate passes unseen."""
LEAST_HEARTBEAT_S, MOST_HEARTBEAT_S = 3.0 * LEAST_POLL_S, 10.0
"""A heartbeat is at least three polls long."""
FREQUENCY_TOLERANCE = 1e-3
DUTY_TOLERANCE_PERCENT = 0.01
SPARE_S = 0.5


def timer_ticks(pwm_hz: float) -> float:
    """Timer ticks in one PWM period, not rounded: 16 MHz over the prescaler (1, 8 or 64, by the frequency)."""
    prescaler = 1.0 if pwm_hz > 244.2 else 8.0 if pwm_hz > 30.52 else 64.0
    return TIMER_HZ / (prescaler * pwm_hz)


class Board:
    """Options: `heartbeat` (2 s; "0 s" for none), `gate` (0.25 s). No dialect: the protocol is the board's own.

    Channels, from `measure`:
    speed     Σedges / Σticks · clock · 60 / pulses per revolution; without edges no data, `no_data:no_edges`, never 0
    edge_age  s since the last edge, at the last poll
    edge_gap  s, the largest such age seen at a poll of the window
    and from `apply`, as quantised by the board: pwm_hz, duty_set.

    `power_on` says whether the board had restarted before the last `configure`; None before the first.
    """

    def __init__(self, setup: AdapterSetup) -> None:
        self.name = name = setup.name
        self.channels: Mapping[str, str] = {
            "speed": "rpm",
            "edge_age": "s",
            "edge_gap": "s",
            "pwm_hz": "Hz",
            "duty_set": "%",
        }
        self.power_on: bool | None = None
        common.check_accuracy(setup, self.channels)
        options = common.Options(setup)
        heartbeat_s = options.quantity("heartbeat", "s", 0.0, MOST_HEARTBEAT_S, 2.0)
        self._gate_s = options.quantity("gate", "s", LEAST_GATE_S, 10.0, 0.25)
        options.done()
        self._check(setup, heartbeat_s)
        self.heartbeat_s: float | None = heartbeat_s or None
        longest = MOST_POLL_S if self.heartbeat_s is None else min(MOST_POLL_S, heartbeat_s / 3.0)
        poll_s = max(LEAST_POLL_S, min(longest, 0.8 * self._gate_s))
        self._fetch = query("FETC:COUN?")
        self._poll = query("FETC:COUN?", after_s=poll_s)
        self._error = query("SYST:ERR?")
        self._heartbeat_ms = round(heartbeat_s * 1000.0)
        self._rpm_per_hz = 60.0 / setup.pulses_per_revolution
        self._accuracy = {key: setup.accuracy.get(key, common.NO_ACCURACY) for key in self.channels}
        self._names = {quantity: f"{name}.{quantity}" for quantity in self.channels}

    def _check(self, setup: AdapterSetup, heartbeat_s: float) -> None:
        if 0.0 < heartbeat_s < LEAST_HEARTBEAT_S:
            raise ConfigError(
                f"{self.name}: the option 'heartbeat' is shorter than three polls of the tachometer",
                value=f"{heartbeat_s:g} s",
                allowed=f"{LEAST_HEARTBEAT_S:g} s to {MOST_HEARTBEAT_S:g} s, or 0 s for none",
                remedy="write for example heartbeat = '2 s'",
                topic="rig",
            )
        if setup.dialect:
            raise ConfigError(
                f"{self.name}: the board speaks its own protocol and takes no dialect",
                remedy="remove the dialect from the rig file",
                topic="rig",
            )
        if not (math.isfinite(setup.pulses_per_revolution) and setup.pulses_per_revolution > 0.0):
            raise ConfigError(
                f"{self.name}: the tachometer needs its pulses per revolution",
                value=f"{setup.pulses_per_revolution}",
                allowed="above 0",
                remedy="correct pulses_per_revolution in the motor file",
                topic="job-files",
            )

    def identify(self) -> Steps[Identity]:
        return common.identify(self.name, query("*IDN?", early=True))

    def configure(self) -> Steps[None]:
        """Heartbeat and gate, both read back. The event register is read before anything clears it."""
        name, error = self.name, self._error
        answer = yield query("*ESR?")
        self.power_on = bool(common.whole_number(name, answer.raw) & POWER_ON)
        standing = yield from common.begin(name, tell("*CLS"), error)
        beat, back = tell(f"SYST:COMM:TIM {self._heartbeat_ms}"), query("SYST:COMM:TIM?")
        yield from common.confirm(name, "heartbeat", beat, back, error, self._heartbeat_ms, 0.5, "ms")
        gate, back = tell(f"SENS:FREQ:APER {number_text(self._gate_s)}"), query("SENS:FREQ:APER?")
        yield from common.confirm(name, "gate", gate, back, error, self._gate_s, 0.01 * self._gate_s, "s")
        yield from common.no_new_errors(name, error, standing)

    def settings(self) -> Steps[dict[str, str]]:
        """What the board reports now. `event_status` is read and thereby cleared: bit 7 set here means that the board
        restarted since `configure`."""
        found = {}
        for key, message in (
            ("heartbeat_ms", "SYST:COMM:TIM?"),
            ("gate_s", "SENS:FREQ:APER?"),
            ("pwm_hz", "SOUR:FREQ?"),
            ("duty_percent", "SOUR:PULS:DCYC?"),
            ("tap", "SOUR:RES:TAP?"),
            ("output", "OUTP?"),
            ("event_status", "*ESR?"),
        ):
            answer = yield query(message)
            found[key] = common.shown(answer.raw)
        return found

    def check_window(self, window: Window) -> None:
        common.check_window(self.name, window)

    def apply(self, setting: DriveSetting) -> Steps[dict[str, Reading]]:
        """Frequency, then duty (or potentiometer tap), each read back as the board quantised it.

        InstrumentRefused when the frequency is off by more than 0.1 % beyond half a timer tick, the duty by more than
        0.01 % beyond a whole one, the tap at all. With a tap an analogue timer makes the PWM, and the board's pin only
        releases it: duty and frequency are not the board's, and both are no data."""
        self._check_setting(setting)
        name, error, hz = self.name, self._error, setting.pwm_hz
        ticks = timer_ticks(hz)
        near = hz * (FREQUENCY_TOLERANCE + 0.5 / ticks)
        send, back = tell(f"SOUR:FREQ {number_text(hz)}"), query("SOUR:FREQ?")
        found, answer = yield from common.confirm(name, "PWM frequency", send, back, error, hz, near, "Hz")
        readings = {"pwm_hz": self._reading("pwm_hz", found, answer.at, answer.raw)}
        if setting.tap is not None:
            send, back = tell(f"SOUR:RES:TAP {setting.tap}"), query("SOUR:RES:TAP?")
            _, answer = yield from common.confirm(name, "tap", send, back, error, setting.tap, 0.0, "")
            flags, raw = ("no_data:set_by_tap",), common.shown(answer.raw)
            return {
                quantity: Reading(None, 0.0, self.channels[quantity], answer.at, self._names[quantity], flags, raw)
                for quantity in ("pwm_hz", "duty_set")
            }
        duty, near = setting.duty_percent, DUTY_TOLERANCE_PERCENT + 100.0 / ticks
        send, back = tell(f"SOUR:PULS:DCYC {number_text(duty)}"), query("SOUR:PULS:DCYC?")
        found, answer = yield from common.confirm(name, "duty", send, back, error, duty, near, "%")
        readings["duty_set"] = self._reading("duty_set", found, answer.at, answer.raw)
        return readings

    def _check_setting(self, setting: DriveSetting) -> None:
        for what, value, low, high, unit in (
            ("PWM frequency", setting.pwm_hz, 1.0, 1e6, "Hz"),
            ("duty", setting.duty_percent, 0.0, 100.0, "%"),
            ("tap", setting.tap or 0, 0, 255, ""),
        ):
            if not low <= value <= high:
                raise ConfigError(
                    f"{self.name}: the {what} cannot be set",
                    value=f"{value:g} {unit}".strip(),
                    allowed=f"{low:g} to {high:g} {unit}".strip(),
                    remedy="correct the sweep",
                    topic="job-files",
                )

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        """Poll the counts until gates that ended after the first poll cover the window.

        The first of them began before the first poll, by less than a gate. Gates that passed between polls count for
        nothing and are flagged `gates_missed`. Should the gates stand still, the polling ends two gates and half a
        second after the window: `no_data:no_gates` or, with some, `short_window`. A gate number that goes backwards is
        a board that restarted: InstrumentRefused.
        """
        gate_s, wanted, counts = self._gate_s, window.seconds * (1.0 - 1e-9), self._counts
        answer = yield self._fetch
        gate, _, _, clock_hz, age = counts(answer.raw)
        until = answer.at + window.seconds + 2.0 * gate_s + SPARE_S
        poll, oldest, covered, edges, ticks, missed = self._poll, age, 0.0, 0, 0, 0
        raws = []
        while covered < wanted and answer.at < until:
            answer = yield poll
            number, more_edges, more_ticks, now_hz, age = counts(answer.raw)
            if age > oldest:
                oldest = age
            if now_hz != clock_hz or number < gate:
                raise self._restarted(gate, number)
            if number == gate:
                continue
            missed += number - gate - 1
            gate = number
            covered += gate_s
            raws.append(answer.raw)
            if more_ticks:
                edges += more_edges
                ticks += more_ticks
        flags = ("gates_missed",) if missed else ()
        if covered < wanted:
            flags = ("short_window", *flags) if raws else ("no_data:no_gates",)
        at, raw, names = answer.at, answer.raw.decode("latin-1"), self._names
        speed = self._speed(edges, ticks, clock_hz, at, flags, b" ".join(raws) or answer.raw)
        age_s, gap_s = age / clock_hz, oldest / clock_hz
        return {
            "speed": speed,
            "edge_age": Reading(age_s, self._accuracy["edge_age"].u(age_s), "s", at, names["edge_age"], (), raw),
            "edge_gap": Reading(gap_s, self._accuracy["edge_gap"].u(gap_s), "s", at, names["edge_gap"], (), raw),
        }

    def _speed(self, edges: int, ticks: int, clock_hz: int, at: float, flags: tuple[str, ...], raw: bytes) -> Reading:
        """u: the accuracy statement, and one tick more or less in all ticks as a rectangle's half-width."""
        text, channel = raw.decode("latin-1"), self._names["speed"]
        if not edges:
            why = flags if "no_data:no_gates" in flags else ("no_data:no_edges", *flags)
            return Reading(None, 0.0, "rpm", at, channel, why, text)
        rpm = edges / ticks * clock_hz * self._rpm_per_hz
        u = math.hypot(self._accuracy["speed"].u(rpm), rpm / (ticks * math.sqrt(3.0)))
        return Reading(rpm, u, "rpm", at, channel, flags, text)

    def _counts(self, raw: bytes) -> tuple[int, int, int, int, int]:
        """gate_number, edges, ticks, clock_hz, ticks_since_last_edge; LinkGarbled unless five sane whole numbers."""
        fields = raw.split(b",")
        try:
            gate, edges, ticks, clock_hz, age = map(int, fields)
        except ValueError as fault:
            raise common.garbled(self.name, "set of five counts", raw) from fault
        if gate < 0 or edges < 0 or ticks < 0 or clock_hz <= 0 or age < 0 or (ticks and not edges) or b"_" in raw:
            raise common.garbled(self.name, "set of five counts", raw)
        return gate, edges, ticks, clock_hz, age

    def _restarted(self, before: int, after: int) -> InstrumentRefused:
        return InstrumentRefused(
            f"{self.name}: the board restarted during a reading, or changed its clock",
            value=f"gate {after} after gate {before}",
            allowed="gate numbers that rise",
            remedy="check the board's supply and its reset line; its settings are lost",
            topic="rig",
        )

    def switch_on(self) -> Steps[None]:
        return common.turn_on(self.name, tell("OUTP ON"), query("OUTP?"), self._error)

    def switch_off(self) -> Steps[None]:
        return common.turn_off(self.name, tell("OUTP OFF", early=True), query("OUTP?", early=True))

    def _reading(self, quantity: str, value: float, at: float, raw: bytes) -> Reading:
        u = self._accuracy[quantity].u(value)
        return Reading(value, u, self.channels[quantity], at, self._names[quantity], (), common.shown(raw))
