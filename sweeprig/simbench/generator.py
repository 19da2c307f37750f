"""The simulated function generator as PWM source: rectangle or constant level at the switch's gate, no heartbeat.

What it does not know: the board's tachometer and watchdog. When the host falls silent it goes on.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error, require_connection
from sweeprig.simbench.scpi import Refused, boolean, nr1, nr3, number

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

FREQUENCY_HZ = (1e-3, 1e6)
DUTY_PERCENT = (0.01, 99.99)
"""A rectangle needs both levels; always high or always low is the function DC."""
LEVEL_VOLTS = (-10.0, 10.0)
FREQUENCY_STEP_HZ = 1e-6
DUTY_STEP_PERCENT = 1e-2
LEVEL_STEP_VOLTS = 1e-3
MATCHED_OHM = 50.0
GATE_VOLTS = 2.5
"""From here up the switch conducts. Own choice: a logic-level switch with its driver."""
SHAPES = {"PULS": "PULS", "PULSE": "PULS", "DC": "DC"}


class Generator(Instrument):
    """`SOUR:FUNC:SHAP`, `SOUR:FREQ`, `SOUR:PULS:DCYC`, `SOUR:VOLT:HIGH|LOW|OFFS`, `OUTP`, `OUTP:LOAD`.

    Connected to `drive_signal` it is the gate's source; else its output is on nothing. With `OUTP:LOAD 50`, its
    setting at power-on, it believes in a matched load: at a gate, which is none, every level is twice what was set.
    """

    model = "generator"
    quantities = ("frequency", "duty")

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        require_connection(setup, ("drive_signal", "none"))
        self._at_gate = setup.connected_to == "drive_signal"
        self._frequency_scale = draw_scale_error(setup, "frequency")
        self._duty_scale = draw_scale_error(setup, "duty")
        self._on = False
        self._defaults()
        self._add_commands()

    def _defaults(self) -> None:
        self._shape, self._hz, self._duty_percent = "PULS", 1000.0, 50.0
        self._high, self._low, self._offset, self._load = 0.1, 0.0, 0.0, MATCHED_OHM

    def _add_commands(self) -> None:
        add = self.tree.add
        add("[SOURce]:FUNCtion[:SHAPe]", self._set_shape, 1, 1)
        add("[SOURce]:FUNCtion[:SHAPe]?", lambda _: self._shape)
        add("[SOURce]:FREQuency[:CW]", self._set_frequency, 1, 1)
        add("[SOURce]:FREQuency[:CW]?", lambda _: nr3(self._hz, 9))
        add("[SOURce]:PULSe:DCYCle", self._set_duty, 1, 1)
        add("[SOURce]:PULSe:DCYCle?", lambda _: nr3(self._duty_percent, 6))
        add("[SOURce]:VOLTage[:LEVel][:IMMediate]:HIGH", self._set_high, 1, 1)
        add("[SOURce]:VOLTage[:LEVel][:IMMediate]:HIGH?", lambda _: nr3(self._high, 5))
        add("[SOURce]:VOLTage[:LEVel][:IMMediate]:LOW", self._set_low, 1, 1)
        add("[SOURce]:VOLTage[:LEVel][:IMMediate]:LOW?", lambda _: nr3(self._low, 5))
        add("[SOURce]:VOLTage[:LEVel][:IMMediate]:OFFSet", self._set_offset, 1, 1)
        add("[SOURce]:VOLTage[:LEVel][:IMMediate]:OFFSet?", lambda _: nr3(self._offset, 5))
        add("OUTPut[:STATe]", self._set_output, 1, 1)
        add("OUTPut[:STATe]?", lambda _: nr1(self._on))
        add("OUTPut:LOAD", self._set_load, 1, 1)
        add("OUTPut:LOAD?", lambda _: nr3(self._load, 5))

    def reset(self) -> None:
        self._switch(False, "*RST")
        self._defaults()
        self._apply()

    def power_on(self) -> None:
        self._switch(False, "power")
        super().power_on()

    # settings

    def _set_shape(self, parameters: tuple[str, ...]) -> None:
        shape = SHAPES.get(parameters[0].upper())
        if shape is None:
            raise Refused(-224, parameters[0])
        self._shape = shape
        self._apply()

    def _set_frequency(self, parameters: tuple[str, ...]) -> None:
        hz = number(parameters[0], "HZ", *FREQUENCY_HZ)
        self._hz = round(hz / FREQUENCY_STEP_HZ) * FREQUENCY_STEP_HZ
        self._apply()

    def _set_duty(self, parameters: tuple[str, ...]) -> None:
        percent = number(parameters[0], "%", *DUTY_PERCENT)
        self._duty_percent = round(percent / DUTY_STEP_PERCENT) * DUTY_STEP_PERCENT
        self._apply()

    def _set_high(self, parameters: tuple[str, ...]) -> None:
        high = _level(parameters[0])
        if high <= self._low:
            raise Refused(-221, "high not above low")
        self._high = high
        self._apply()

    def _set_low(self, parameters: tuple[str, ...]) -> None:
        low = _level(parameters[0])
        if low >= self._high:
            raise Refused(-221, "low not below high")
        self._low = low
        self._apply()

    def _set_offset(self, parameters: tuple[str, ...]) -> None:
        self._offset = _level(parameters[0])
        self._apply()

    def _set_load(self, parameters: tuple[str, ...]) -> None:
        """`INF` for a load that draws nothing, else ohms."""
        infinite = parameters[0].upper() in ("INF", "INFINITY")
        self._load = 9.9e37 if infinite else number(parameters[0], "", 1.0, 1e4)
        self._apply()

    def _set_output(self, parameters: tuple[str, ...]) -> None:
        on = boolean(parameters[0])
        self._switch(on, f"OUTP {'ON' if on else 'OFF'}")

    def _switch(self, on: bool, why: str) -> None:
        if on == self._on:
            return
        self._on = on
        self._apply()
        if self._at_gate:
            self.bench.note("drive_on" if on else "drive_off", why)

    # what comes out

    def _apply(self) -> None:
        """Put on the gate what this setting makes there."""
        if not self._at_gate:
            return
        hz = self._hz * self._frequency_scale.gain + self._frequency_scale.offset
        duty = self._gate_duty_percent()
        self.bench.plant_now().set_drive(hz, duty, self._on)
        self.bench.signal.change(self.bench.now, hz, duty, self._on)

    def _gate_duty_percent(self) -> float:
        """Percent of the time for which the gate is above its threshold."""
        unloaded = 2.0 if self._load == MATCHED_OHM else 1.0
        if self._shape == "DC":
            return 100.0 if self._offset * unloaded >= GATE_VOLTS else 0.0
        if self._low * unloaded >= GATE_VOLTS:
            return 100.0
        if self._high * unloaded < GATE_VOLTS:
            return 0.0
        true = self._duty_percent * self._duty_scale.gain + self._duty_scale.offset
        return min(100.0, max(0.0, true))


def _level(text: str) -> float:
    return round(number(text, "V", *LEVEL_VOLTS) / LEVEL_STEP_VOLTS) * LEVEL_STEP_VOLTS
