"""The simulated bench supply: it feeds the motor's stage and measures its own terminal voltage and lead current."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from sweeprig.simbench.instrument import Instrument, ScaleError, Setup, draw_scale_error, require_connection
from sweeprig.simbench.scpi import Later, boolean, nr1, nr3, number

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

VOLTS = (0.0, 32.0)
AMPS = (0.0, 10.0)
SET_STEP = 1e-3
"""Settings are whole millivolts and milliamperes."""
AVERAGE_S = 0.1
VOLTS_NOISE = 5e-4
AMPS_NOISE = 1e-4
"""Standard deviations of one reading. Own choice: a few steps of a 16-bit converter on these ranges."""
VOLTAGE_NOT_HELD = 1
DEFAULT_LIMIT_AMPS = 0.1


class Supply(Instrument):
    """`SOUR:VOLT`, `SOUR:CURR`, `OUTP`, `MEAS:…`, `STAT:QUES:COND?` of the command table in DEVELOPERS.md."""

    model = "supply"
    quantities = ("volts", "amps")
    error_keys = ("volts_noise", "amps_noise")

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        require_connection(setup, ("supply_terminals", "supply_lead", "none"))
        self._volts_scale = draw_scale_error(setup, "volts")
        self._amps_scale = draw_scale_error(setup, "amps")
        self._volts_noise = setup.error("volts_noise", VOLTS_NOISE)
        self._amps_noise = setup.error("amps_noise", AMPS_NOISE)
        self._volts, self._amps, self._on = 0.0, DEFAULT_LIMIT_AMPS, False
        self._add_commands()

    def _add_commands(self) -> None:
        add = self.tree.add
        add("[SOURce]:VOLTage[:LEVel][:IMMediate][:AMPLitude]", self._set_volts, 1, 1)
        add("[SOURce]:VOLTage[:LEVel][:IMMediate][:AMPLitude]?", lambda _: nr3(self._volts, 5))
        add("[SOURce]:CURRent[:LEVel][:IMMediate][:AMPLitude]", self._set_amps, 1, 1)
        add("[SOURce]:CURRent[:LEVel][:IMMediate][:AMPLitude]?", lambda _: nr3(self._amps, 5))
        add("OUTPut[:STATe]", self._set_output, 1, 1)
        add("OUTPut[:STATe]?", lambda _: nr1(self._on))
        add("MEASure[:SCALar]:VOLTage[:DC]?", self._measure_volts)
        add("MEASure[:SCALar]:CURRent[:DC]?", self._measure_amps)
        add("STATus:QUEStionable:CONDition?", lambda _: nr1(VOLTAGE_NOT_HELD if self.questionable() else 0))

    def reset(self) -> None:
        self._volts, self._amps = 0.0, DEFAULT_LIMIT_AMPS
        self._switch(False, "*RST")

    def power_on(self) -> None:
        self._switch(False, "power")
        super().power_on()

    def questionable(self) -> bool:
        return self._on and self.bench.plant_now().supply_limited

    def _set_volts(self, parameters: tuple[str, ...]) -> None:
        self._volts = round(number(parameters[0], "V", *VOLTS) / SET_STEP) * SET_STEP
        self._apply()

    def _set_amps(self, parameters: tuple[str, ...]) -> None:
        self._amps = round(number(parameters[0], "A", *AMPS) / SET_STEP) * SET_STEP
        self._apply()

    def _set_output(self, parameters: tuple[str, ...]) -> None:
        on = boolean(parameters[0])
        self._switch(on, f"OUTP {'ON' if on else 'OFF'}")

    def _switch(self, on: bool, why: str) -> None:
        changed, self._on = on != self._on, on
        self._apply()
        if changed:
            self.bench.note("supply_on" if on else "supply_off", why)

    def _apply(self) -> None:
        self.bench.plant_now().set_supply(self._volts, self._amps, self._on)

    # readings

    def _measure_volts(self, _: tuple[str, ...]) -> Later:
        plant = self.bench.plant_now()
        return self._average(lambda: plant.supply_volt_seconds, self._volts_scale, self._volts_noise)

    def _measure_amps(self, _: tuple[str, ...]) -> Later:
        plant = self.bench.plant_now()
        return self._average(lambda: plant.supply_amp_seconds, self._amps_scale, self._amps_noise)

    def _average(self, integral: Callable[[], float], scale: ScaleError, noise: float) -> Later:
        """The mean over the next 0.1 s of what `integral` runs up (V·s or A·s), with this supply's errors."""
        start = integral()

        def finish() -> str:
            self.bench.plant_now()
            mean = (integral() - start) / AVERAGE_S
            return f"{mean * scale.gain + scale.offset + self.setup.noise.gauss(0.0, noise):+.6E}"

        return Later(self.bench.now + AVERAGE_S, finish)
