"""The simulated bench supply: it feeds the motor's stage and measures its own terminal voltage and lead current."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING

from sweeprig.simbench.instrument import Instrument, ScaleError, Setup, draw_scale_error, require_connection
from sweeprig.simbench.scpi import Later, Refused, boolean, integer, nr1, nr3, number

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

VOLTS = (0.0, 32.0)
AMPS = (0.0, 10.0)
SET_STEP = 1e-3
"""Settings are whole millivolts and milliamperes."""
AVERAGE_S = 0.1
MOST_AVERAGED = 100
VOLTS_NOISE = 5e-4
AMPS_NOISE = 1e-4
"""Standard deviations of one reading. Own choice: a few steps of a 16-bit converter on these ranges."""
VOLTAGE_NOT_HELD = 1
TRIPPED = 2
DEFAULT_LIMIT_AMPS = 0.1
LOOK_S = 0.01
DELAY_S = (0.0, 10.0)
DEFAULT_DELAY_S = 0.05
"""How long the current must be above its protection before the output goes off. Own choice."""


class Supply(Instrument):
    """`SOUR:VOLT`, `SOUR:CURR`, `…:PROT`, `OUTP`, `MEAS:…`, `SENS:AVER:COUN`, `STAT:QUES:COND?`: table in
    DEVELOPERS.md.

    A trip turns the output off; until it is cleared the output cannot be switched on.
    """

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
        self._defaults()
        self._watch = 0
        self._add_commands()

    def _defaults(self) -> None:
        self._count = 1
        self._levels, self._armed = {"A": AMPS[1], "V": VOLTS[1]}, {"A": False, "V": False}
        self._delay_s, self._tripped = DEFAULT_DELAY_S, False
        self._above_since = math.inf

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
        add("[SENSe]:AVERage:COUNt", self._set_count, 1, 1)
        add("[SENSe]:AVERage:COUNt?", lambda _: nr1(self._count))
        add("STATus:QUEStionable:CONDition?", self._condition)
        self._add_protection("CURRent", "A", AMPS)
        self._add_protection("VOLTage", "V", VOLTS)
        add("[SOURce]:CURRent:PROTection:DELay", self._set_delay, 1, 1)
        add("[SOURce]:CURRent:PROTection:DELay?", lambda _: nr3(self._delay_s, 4))
        add("OUTPut:PROTection:CLEar", self._clear_trip)
        add("OUTPut:PROTection:TRIPped?", lambda _: nr1(self._tripped))

    def _add_protection(self, what: str, unit: str, span: tuple[float, float]) -> None:
        add, head = self.tree.add, f"[SOURce]:{what}:PROTection"

        def set_level(parameters: tuple[str, ...]) -> None:
            self._levels[unit] = round(number(parameters[0], unit, *span) / SET_STEP) * SET_STEP

        def set_state(parameters: tuple[str, ...]) -> None:
            self._armed[unit] = boolean(parameters[0])
            self._watch_trip()

        add(f"{head}[:LEVel]", set_level, 1, 1)
        add(f"{head}[:LEVel]?", lambda _: nr3(self._levels[unit], 5))
        add(f"{head}:STATe", set_state, 1, 1)
        add(f"{head}:STATe?", lambda _: nr1(self._armed[unit]))

    def reset(self) -> None:
        self._volts, self._amps = 0.0, DEFAULT_LIMIT_AMPS
        self._switch(False, "*RST")
        self._defaults()

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
        if on and self._tripped:
            raise Refused(-221, "tripped; clear the protection first")
        self._switch(on, f"OUTP {'ON' if on else 'OFF'}")

    def _switch(self, on: bool, why: str) -> None:
        changed, self._on = on != self._on, on
        self._apply()
        if changed:
            self._watch_trip()
            self.bench.note("supply_on" if on else "supply_off", why)

    def _apply(self) -> None:
        self.bench.plant_now().set_supply(self._volts, self._amps, self._on)

    # trips

    def _condition(self, _: tuple[str, ...]) -> str:
        return nr1((VOLTAGE_NOT_HELD if self.questionable() else 0) | (TRIPPED if self._tripped else 0))

    def _set_delay(self, parameters: tuple[str, ...]) -> None:
        self._delay_s = number(parameters[0], "S", *DELAY_S)

    def _clear_trip(self, _: tuple[str, ...]) -> None:
        self._tripped = False

    def _watch_trip(self) -> None:
        """Look every 10 ms while the output is on and a protection is armed; an earlier watch ends."""
        self._watch += 1
        if self._on and any(self._armed.values()):
            plant = self.bench.plant_now()
            self._seen = (self.bench.now, plant.supply_amp_seconds, plant.supply_volt_seconds)
            self._above_since = math.inf
            self.bench.at(self.bench.now + LOOK_S, self._look, self._watch)

    def _look(self, watch: object) -> None:
        if watch != self._watch:
            return
        plant, now = self.bench.plant_now(), self.bench.now
        since, amp_seconds, volt_seconds = self._seen
        seconds = now - since
        amps = (plant.supply_amp_seconds - amp_seconds) / seconds
        volts = (plant.supply_volt_seconds - volt_seconds) / seconds
        self._seen = (now, plant.supply_amp_seconds, plant.supply_volt_seconds)
        too_much = self._armed["A"] and amps > self._levels["A"]
        self._above_since = min(self._above_since, since) if too_much else math.inf
        if self._armed["V"] and volts > self._levels["V"]:
            self._trip("over-voltage trip")
        elif now - self._above_since >= self._delay_s:
            self._trip("over-current trip")
        else:
            self.bench.at(now + LOOK_S, self._look, watch)

    def _trip(self, why: str) -> None:
        self._tripped = True
        self._switch(False, why)

    # readings

    def _measure_volts(self, _: tuple[str, ...]) -> Later:
        plant = self.bench.plant_now()
        return self._average(lambda: plant.supply_volt_seconds, self._volts_scale, self._volts_noise)

    def _measure_amps(self, _: tuple[str, ...]) -> Later:
        plant = self.bench.plant_now()
        return self._average(lambda: plant.supply_amp_seconds, self._amps_scale, self._amps_noise)

    def _set_count(self, parameters: tuple[str, ...]) -> None:
        """The filter: so many times 0.1 s back to back make one reading."""
        self._count = integer(parameters[0], 1, MOST_AVERAGED)

    def _average(self, integral: Callable[[], float], scale: ScaleError, noise: float) -> Later:
        """The mean over the next 0.1 s (times the filter's count) of what `integral` runs up (V·s or A·s), with this
        supply's errors; the noise is that of 0.1 s, white."""
        bench, start, count = self.bench, integral(), self._count
        seconds = AVERAGE_S * count
        noise = noise / math.sqrt(count)

        def finish() -> str:
            bench.plant_now()
            mean = (integral() - start) / seconds
            return f"{mean * scale.gain + scale.offset + self.setup.noise.gauss(0.0, noise):+.6E}"

        return Later(bench.now + seconds, finish)
