"""The simulated integrating multimeter: direct voltage or current over an aperture, with range, noise and overload.

It sees the true values through the plant's running integrals and the chopper's waveform (`probes`); nothing of the
analysis.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error, require_connection
from sweeprig.simbench.probes import CURRENT_PLACES, VOLTAGE_PLACES, amp_seconds, volt_seconds
from sweeprig.simbench.scpi import OVERLOAD, Later, Refused, boolean, integer, nr1, nr3, number

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

OVER_RANGE = 1.2
"""A range is good up to 120 % of its name, as on common bench meters."""
UNDER_RANGE = 0.1
"""Below 10 % of its range an autoranging meter takes the next lower one."""
RESOLUTION_OF_RANGE = 1e-6
NOISE_OF_RANGE = 2e-6
"""Standard deviation at an aperture of 0.1 s; white, so it falls with the root of the aperture. Own choice."""
APERTURE_S = (1e-4, 10.0)
APERTURE_STEP_S = 1e-5
DEFAULT_APERTURE_S = 0.02
MOST_AVERAGED = 100
INTERRUPTION_S = 0.05
"""How long the current path is open while an ammeter's relays change its range. Own choice: common relays."""


@dataclass(frozen=True, slots=True)
class Function:
    """What the meter can be set to. `mnemonic` as the standard prints it; `unit` of its numbers."""

    quantity: str
    mnemonic: str
    unit: str
    ranges: tuple[float, ...]


VOLTS = Function("volts", "VOLTage", "V", (0.1, 1.0, 10.0, 100.0, 1000.0))
AMPS = Function("amps", "CURRent", "A", (0.01, 0.1, 1.0, 10.0))


@dataclass(slots=True)
class Settings:
    """Of one function."""

    full: float
    auto: bool = True
    aperture_s: float = DEFAULT_APERTURE_S


class Multimeter(Instrument):
    """`CONF:…`, `SENS:VOLT:DC:…`, `SENS:CURR:DC:…`, `SENS:AVER:…`, `READ?`, `INIT`, `FETC?`: table in DEVELOPERS.md.

    Its leads are at one place: set to the other quantity it reads its own zero. Autorange on a current opens the
    motor's circuit while the range changes: `interruptions` counts how often. `burden_ohm`, the resistance of its
    shunt in the circuit, is the plant's (`build_plant`).
    """

    model = "multimeter"
    quantities = ("volts", "amps")
    error_keys = ("volts_noise_of_range", "amps_noise_of_range", "burden_ohm")

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        require_connection(setup, (*VOLTAGE_PLACES, *CURRENT_PLACES))
        self._scale = draw_scale_error(setup, "volts")
        self._amps_scale = draw_scale_error(setup, "amps")
        self._noise = {q: setup.error(f"{q}_noise_of_range", NOISE_OF_RANGE) for q in self.quantities}
        self._place = setup.connected_to
        self.interruptions = 0
        self._start = 0.0
        self._until = 0.0
        self._reading = 0
        self._latest: str | None = None
        self._add_commands()
        self.reset()

    def _add_commands(self) -> None:
        add = self.tree.add
        add("CONFigure[:VOLTage][:DC]", lambda p: self._configure(VOLTS, p), 0, 2)
        add("CONFigure:CURRent[:DC]", lambda p: self._configure(AMPS, p), 0, 2)
        add("[SENSe]:AVERage:COUNt", self._set_count, 1, 1)
        add("[SENSe]:AVERage:COUNt?", lambda _: nr1(self._count))
        add("READ?", self._read)
        add("INITiate[:IMMediate]", self._initiate)
        add("FETCh?", self._fetch)
        for function in (VOLTS, AMPS):
            self._add_function(function)

    def _add_function(self, one: Function) -> None:
        add, head = self.tree.add, f"[SENSe]:{one.mnemonic}[:DC]"
        add(f"{head}:RANGe[:UPPer]", lambda p: self._set_range(one, p), 1, 1)
        add(f"{head}:RANGe[:UPPer]?", lambda _: nr3(self._settings[one.quantity].full))
        add(f"{head}:RANGe:AUTO", lambda p: self._set_auto(one, p), 1, 1)
        add(f"{head}:RANGe:AUTO?", lambda _: nr1(self._settings[one.quantity].auto))
        add(f"{head}:APERture", lambda p: self._set_aperture(one, p), 1, 1)
        add(f"{head}:APERture?", lambda _: nr3(self._settings[one.quantity].aperture_s))

    def reset(self) -> None:
        self._function = VOLTS
        self._settings = {one.quantity: Settings(one.ranges[-1]) for one in (VOLTS, AMPS)}
        self._count = 1
        self._abort()
        self._latest = None

    def pending_until(self) -> float:
        return self._until

    # settings

    @property
    def _now(self) -> Settings:
        return self._settings[self._function.quantity]

    def _configure(self, function: Function, parameters: tuple[str, ...]) -> None:
        """Presets; `DEF` or no range means autorange. The resolution, a second parameter, is fixed here."""
        if len(parameters) == 2 and parameters[1].upper() not in ("DEF", "DEFAULT"):
            raise Refused(-224, parameters[1])
        wanted = parameters[0] if parameters else "DEF"
        automatic = wanted.upper() in ("DEF", "DEFAULT")
        chosen = function.ranges[-1] if automatic else _range_for(function, wanted)
        self._abort()
        self._function, self._count, self._latest = function, 1, None
        self._settings[function.quantity] = Settings(chosen, automatic)

    def _set_range(self, function: Function, parameters: tuple[str, ...]) -> None:
        settings = self._settings[function.quantity]
        settings.full = _range_for(function, parameters[0])
        settings.auto = False
        self._abort()

    def _set_auto(self, function: Function, parameters: tuple[str, ...]) -> None:
        self._settings[function.quantity].auto = boolean(parameters[0])
        self._abort()

    def _set_aperture(self, function: Function, parameters: tuple[str, ...]) -> None:
        seconds = number(parameters[0], "S", *APERTURE_S)
        seconds = round(round(seconds / APERTURE_STEP_S) * APERTURE_STEP_S, 9)
        self._settings[function.quantity].aperture_s = seconds
        self._abort()

    def _set_count(self, parameters: tuple[str, ...]) -> None:
        """The filter: so many apertures back to back make one reading."""
        self._count = integer(parameters[0], 1, MOST_AVERAGED)
        self._abort()

    # readings

    def _abort(self) -> None:
        self._reading += 1
        self._until = 0.0

    def _read(self, _: tuple[str, ...]) -> Later:
        self._reading += 1
        begin = self.bench.now + self._change_range()
        self._until = until = begin + self._now.aperture_s * self._count
        if begin > self.bench.now:
            self.bench.at(begin, self._begin, self._reading)
        else:
            self._start = self._integral()
        return Later(until, self._finish)

    def _begin(self, reading: object) -> None:
        if reading == self._reading:
            self._start = self._integral()

    def _initiate(self, _: tuple[str, ...]) -> None:
        if self._until > self.bench.now:
            raise Refused(-213)
        self._latest = None
        later = self._read(())
        self.bench.at(later.at, self._finish_initiated, self._reading)

    def _finish_initiated(self, reading: object) -> None:
        if reading == self._reading:
            self._finish()

    def _fetch(self, _: tuple[str, ...]) -> str | Later:
        if self._until > self.bench.now:
            return Later(self._until, lambda: self._latest)
        if self._latest is None:
            raise Refused(-230)
        return self._latest

    def _finish(self) -> str:
        """The end of the aperture is now: the mean over it, with this meter's errors and noise."""
        function, settings = self._function, self._now
        scale = self._scale if function is VOLTS else self._amps_scale
        seconds = settings.aperture_s * self._count
        mean = (self._integral() - self._start) / seconds
        value = mean * scale.gain + scale.offset
        full = settings.full
        if settings.auto and function is VOLTS:
            full = next((one for one in function.ranges if abs(value) <= OVER_RANGE * one), function.ranges[-1])
        if abs(value) > OVER_RANGE * full:
            self._latest = OVERLOAD if value > 0 else f"-{OVERLOAD}"
            return self._latest
        value += self.setup.noise.gauss(0.0, self._noise[function.quantity] * full * (0.1 / seconds) ** 0.5)
        step = full * RESOLUTION_OF_RANGE
        self._latest = f"{round(value / step) * step:+.8E}"
        return self._latest

    def _integral(self) -> float:
        """The running integral, V·s or A·s, of what the leads are on; 0 where they are on the other quantity."""
        on_current = self._place in CURRENT_PLACES
        if on_current is not (self._function is AMPS):
            return 0.0
        return amp_seconds(self.bench, self._place) if on_current else volt_seconds(self.bench, self._place)

    # autorange on a current

    def _change_range(self) -> float:
        """An autoranging ammeter takes the range for what flows now: seconds until the reading can begin.

        While the relays move, the motor's circuit is open. A current that outgrows the range afterwards is an overload.
        """
        settings = self._now
        if not (settings.auto and self._function is AMPS and self._place in CURRENT_PLACES):
            return 0.0
        wave = self.bench.plant_now().wave()
        flows = 0.0 if wave is None else wave.mean_motor_amps if self._place == "motor_lead" else wave.mean_supply_amps
        if UNDER_RANGE * settings.full <= abs(flows) <= OVER_RANGE * settings.full:
            return 0.0
        wanted = next((one for one in AMPS.ranges if abs(flows) <= OVER_RANGE * one), AMPS.ranges[-1])
        if wanted == settings.full:
            return 0.0
        settings.full = wanted
        self.interruptions += 1
        signal = self.bench.signal
        self.bench.plant_now().set_drive(signal.pwm_hz or 1000.0, signal.duty_percent, False)
        self.bench.at(self.bench.now + INTERRUPTION_S, self._close_circuit, None)
        return INTERRUPTION_S

    def _close_circuit(self, _: object) -> None:
        signal = self.bench.signal
        if signal.pwm_hz > 0.0:
            self.bench.plant_now().set_drive(signal.pwm_hz, signal.duty_percent, signal.on)


def _range_for(function: Function, text: str) -> float:
    """The smallest range that holds the wanted value."""
    wanted = abs(number(text, function.unit, -function.ranges[-1], function.ranges[-1]))
    return next(one for one in function.ranges if wanted <= one)
