"""The simulated board: PWM source, tachometer, digital potentiometer and heartbeat on a serial line.

After drivers/firmware/README.md. The firmware answers in the order in which lines came; nothing interrupts it.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from sweeprig.simbench.counter import GATE_S, PWM_HZ, GateCounter, quantise
from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error
from sweeprig.simbench.pwm_timer import REFERENCE_DEGC, PwmTimer
from sweeprig.simbench.scpi import NOT_A_NUMBER, Refused, boolean, integer, nr1, nr3, number

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

BITS_A_BYTE = 10
BAUD = 115_200
HEARTBEAT_MS = (100.0, 10_000.0)
DEFAULT_HEARTBEAT_S = 1.0
DEFAULT_PWM_HZ = 1000.0
DEFAULT_GATE_S = 0.25
HIGHEST_TAP = 255


def crc8(data: bytes) -> int:
    """CRC-8, polynomial 0x07, initial value 0x00, not reflected; 0xF4 for b"123456789"."""
    crc = 0
    for byte in data:
        crc = _CRC_TABLE[crc ^ byte]
    return crc


def _crc_table() -> tuple[int, ...]:
    table = []
    for value in range(256):
        for _ in range(8):
            value = (value << 1) ^ 0x07 if value & 0x80 else value << 1
        table.append(value & 0xFF)
    return tuple(table)


_CRC_TABLE = _crc_table()


def with_errors(setup: Setup, timer: PwmTimer) -> PwmTimer:
    """The timer as it is fitted: with the errors of the rig file's `[simulated.<board>]`."""
    return replace(
        timer,
        potentiometer_ohm=timer.potentiometer_ohm * (1.0 + setup.error("potentiometer_error_percent", 0.0) / 100.0),
        ends_percent=setup.error("timer_ends_percent", 0.0),
        skips_from=int(setup.error("wiper_skips_from", HIGHEST_TAP + 1.0)),
        skips_taps=int(setup.error("wiper_skips_taps", 0.0)),
    )


class Board(Instrument):
    """Protocol table of drivers/firmware/README.md. Checksum suffixes are checked on lines in; answers carry none."""

    model = "board"
    quantities = ("speed",)
    byte_s = BITS_A_BYTE / BAUD
    latency_s = 3e-4
    """Time for a command in the firmware; a prototype took 0.18 to 0.35 ms."""
    longest_line = 128
    error_keys = (
        "timer_degc", "potentiometer_error_percent", "timer_ends_percent", "wiper_skips_from", "wiper_skips_taps",
    )  # fmt: skip
    has_panel = False

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        self._pwm_timer = None if setup.pwm_timer is None else with_errors(setup, setup.pwm_timer)
        self._timer_degc = setup.error("timer_degc", REFERENCE_DEGC)
        self._crystal = draw_scale_error(setup, "speed").gain
        self.counter = GateCounter(bench, self._crystal)
        self._pwm_hz, self._duty_percent = DEFAULT_PWM_HZ, 0.0
        self._timer = quantise(DEFAULT_PWM_HZ, 0.0)
        self._on = False
        self._tap = 0
        self._heartbeat_s = DEFAULT_HEARTBEAT_S
        self._last_valid = 0.0
        self._watch = 0
        self._line_in_error = False
        self._sealed = False
        self._add_commands()

    def _add_commands(self) -> None:
        add = self.tree.add
        add("[SOURce]:FREQuency", self._set_frequency, 1, 1)
        add("[SOURce]:FREQuency?", lambda _: nr3(self._timer.pwm_hz, 9))
        add("[SOURce]:PULSe:DCYCle", self._set_duty, 1, 1)
        add("[SOURce]:PULSe:DCYCle?", lambda _: nr3(self._timer.duty_percent, 9))
        add("[SOURce]:RESistance:TAP", self._set_tap, 1, 1)
        add("[SOURce]:RESistance:TAP?", lambda _: nr1(self._tap))
        add("OUTPut[:STATe]", self._set_output, 1, 1)
        add("OUTPut[:STATe]?", lambda _: nr1(self._on))
        add("FETCh:COUNt?", self._fetch_count)
        add("MEASure:FREQuency?", self._measure_frequency)
        add("SENSe:FREQuency:APERture", self._set_gate, 1, 1)
        add("SENSe:FREQuency:APERture?", lambda _: nr3(self.counter.gate_s, 6))
        add("SYSTem:COMMunicate:TIMeout", self._set_heartbeat, 1, 1)
        add("SYSTem:COMMunicate:TIMeout?", lambda _: nr3(self._heartbeat_s * 1000.0, 3))

    def reset(self) -> None:
        self._switch(False, "*RST")
        self._pwm_hz, self._duty_percent, self._tap = DEFAULT_PWM_HZ, 0.0, 0
        self._heartbeat_s = DEFAULT_HEARTBEAT_S
        self.counter.gate_s = DEFAULT_GATE_S
        self._sealed = False
        self._apply()

    def power_on(self) -> None:
        self._switch(False, "power")
        self.counter.power_on()
        super().power_on()

    # lines: checksum and heartbeat

    def receive(self, line: bytes) -> None:
        if self._sealed or line[-3:-2] == b"~":
            unsealed = self._unseal(line)
            if unsealed is None:
                self.error(-361, "checksum")
                return
            line = unsealed
        if not line.strip():
            return
        self._line_in_error = False
        super().receive(line)
        if not self._line_in_error:
            self._last_valid = self.bench.now

    def _unseal(self, line: bytes) -> bytes | None:
        """The line without its checksum, which must be right; None when it is wrong or missing."""
        body, mark, digits = line[:-3], line[-3:-2], line[-2:]
        if mark != b"~" or digits.upper() != b"%02X" % crc8(body):
            return None
        self._sealed = True
        return body

    def error(self, code: int, detail: str = "") -> None:
        if -199 <= code <= -100 or code in (-361, -363):
            self._line_in_error = True
        super().error(code, detail)

    def _set_heartbeat(self, parameters: tuple[str, ...]) -> None:
        milliseconds = number(parameters[0], "MS", 0.0, HEARTBEAT_MS[1])
        if 0.0 < milliseconds < HEARTBEAT_MS[0]:
            raise Refused(-222, parameters[0])
        if milliseconds == 0.0 and self._on:
            raise Refused(-221, "output is on")
        self._heartbeat_s = milliseconds / 1000.0
        self._last_valid = self.bench.now
        self._watch_heartbeat()

    def _watch_heartbeat(self) -> None:
        self._watch += 1
        if self._on and self._heartbeat_s > 0.0:
            self.bench.at(self._last_valid + self._heartbeat_s, self._heartbeat_due, self._watch)

    def _heartbeat_due(self, watch: object) -> None:
        if watch != self._watch:
            return
        due = self._last_valid + self._heartbeat_s
        if due > self.bench.now:
            self.bench.at(due, self._heartbeat_due, watch)
            return
        self.lapse()

    def lapse(self) -> None:
        """The heartbeat is lost: the output goes off, an error is queued."""
        self._switch(False, "heartbeat")
        self.error(-365, "heartbeat")

    # drive

    def _set_frequency(self, parameters: tuple[str, ...]) -> None:
        self._pwm_hz = number(parameters[0], "HZ", *PWM_HZ)
        self._apply()

    def _set_duty(self, parameters: tuple[str, ...]) -> None:
        self._duty_percent = number(parameters[0], "%", 0.0, 100.0)
        self._apply()

    def _set_tap(self, parameters: tuple[str, ...]) -> None:
        self._tap = integer(parameters[0], 0, HIGHEST_TAP)
        if self._pwm_timer is not None:
            self._apply()

    def _set_output(self, parameters: tuple[str, ...]) -> None:
        on = boolean(parameters[0])
        self._switch(on, f"OUTP {'ON' if on else 'OFF'}")

    def _switch(self, on: bool, why: str) -> None:
        if on == self._on:
            return
        self._on = on
        self._last_valid = self.bench.now
        self._apply()
        self._watch_heartbeat()
        if self._at_gate:
            self.bench.note("drive_on" if on else "drive_off", why)
        if on:
            self.counter.start(forget=True, watch=True)

    @property
    def _at_gate(self) -> bool:
        return self.bench.gate_from in ("", self.name)

    def _apply(self) -> None:
        """Put the nearest possible frequency and duty on the pin. Another prescaler starts the intervals anew.

        With a timer the pin only releases its reset: what the gate sees is the timer's.
        """
        self._timer = quantise(self._pwm_hz, self._duty_percent)
        true_hz, duty_percent = self._timer.pwm_hz * self._crystal, self._timer.duty_percent
        if self._pwm_timer is not None:
            true_hz = self._pwm_timer.pwm_hz(self._tap, self._timer_degc)
            duty_percent = self._pwm_timer.duty_percent(self._tap)
        if self._at_gate:
            self.bench.plant_now().set_drive(true_hz, duty_percent, self._on)
            self.bench.signal.change(self.bench.now, true_hz, duty_percent, self._on)
        if self.counter.set_clock(self._timer.clock_hz) and self.counter.running:
            self.counter.start(forget=True, watch=self._on)

    # tachometer

    def _fetch_count(self, _: tuple[str, ...]) -> str:
        counter = self.counter
        if not counter.running:
            counter.start(forget=True, watch=False)
        age = counter.ticks_since_last_edge()
        return f"{counter.number},{counter.edges},{counter.ticks},{counter.clock_hz},{age}"

    def _measure_frequency(self, _: tuple[str, ...]) -> str:
        counter = self.counter
        if not counter.running:
            counter.start(forget=True, watch=False)
        return nr3(counter.edges / counter.ticks * counter.clock_hz, 9) if counter.edges else NOT_A_NUMBER

    def _set_gate(self, parameters: tuple[str, ...]) -> None:
        self.counter.gate_s = number(parameters[0], "S", *GATE_S)
        if self.counter.running:
            self.counter.start(forget=False, watch=self._on)
