"""The simulated integrating multimeter: direct voltage over an aperture, with range, resolution and overload.

It sees the true voltage through the plant's running integrals and the chopper's waveform; nothing of the analysis.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from sweeprig.simbench.chopper import motor_voltage_integral
from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error, require_connection
from sweeprig.simbench.scpi import OVERLOAD, Later, Refused, boolean, nr1, nr3, number

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

RANGES_V = (0.1, 1.0, 10.0, 100.0, 1000.0)
OVER_RANGE = 1.2
"""A range is good up to 120 % of its name, as on common bench meters."""
RESOLUTION_OF_RANGE = 1e-6
NOISE_OF_RANGE = 2e-6
"""Standard deviation at an aperture of 0.1 s; white, so it falls with the root of the aperture. Own choice."""
APERTURE_S = (1e-4, 10.0)
APERTURE_STEP_S = 1e-5
DEFAULT_APERTURE_S = 0.02


class Multimeter(Instrument):
    """`CONF:VOLT:DC`, `SENS:VOLT:DC:…`, `READ?`, `INIT`, `FETC?` of the command table in DEVELOPERS.md."""

    model = "multimeter"
    quantities = ("volts",)
    error_keys = ("volts_noise_of_range",)

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        require_connection(setup, ("across_motor", "switch_node", "supply_terminals", "none"))
        self._scale = draw_scale_error(setup, "volts")
        self._noise_of_range = setup.error("volts_noise_of_range", NOISE_OF_RANGE)
        self._connected_to = setup.connected_to
        self._start = 0.0
        self._until = 0.0
        self._reading = 0
        self._latest: str | None = None
        self._add_commands()
        self.reset()

    def _add_commands(self) -> None:
        add = self.tree.add
        add("CONFigure[:VOLTage][:DC]", self._configure, 0, 2)
        add("[SENSe]:VOLTage[:DC]:RANGe[:UPPer]", self._set_range, 1, 1)
        add("[SENSe]:VOLTage[:DC]:RANGe[:UPPer]?", lambda _: nr3(self._range))
        add("[SENSe]:VOLTage[:DC]:RANGe:AUTO", self._set_auto, 1, 1)
        add("[SENSe]:VOLTage[:DC]:RANGe:AUTO?", lambda _: nr1(self._auto))
        add("[SENSe]:VOLTage[:DC]:APERture", self._set_aperture, 1, 1)
        add("[SENSe]:VOLTage[:DC]:APERture?", lambda _: nr3(self._aperture))
        add("READ?", self._read)
        add("INITiate[:IMMediate]", self._initiate)
        add("FETCh?", self._fetch)

    def reset(self) -> None:
        self._range = RANGES_V[-1]
        self._auto = True
        self._aperture = DEFAULT_APERTURE_S
        self._abort()
        self._latest = None

    def pending_until(self) -> float:
        return self._until

    # settings

    def _configure(self, parameters: tuple[str, ...]) -> None:
        """Presets; `DEF` or no range means autorange. The resolution, a second parameter, is fixed here."""
        if len(parameters) == 2 and parameters[1].upper() not in ("DEF", "DEFAULT"):
            raise Refused(-224, parameters[1])
        wanted = parameters[0] if parameters else "DEF"
        automatic = wanted.upper() in ("DEF", "DEFAULT")
        chosen = RANGES_V[-1] if automatic else _range_for(wanted)
        self._abort()
        self._aperture = DEFAULT_APERTURE_S
        self._auto, self._range, self._latest = automatic, chosen, None

    def _set_range(self, parameters: tuple[str, ...]) -> None:
        self._range = _range_for(parameters[0])
        self._auto = False
        self._abort()

    def _set_auto(self, parameters: tuple[str, ...]) -> None:
        self._auto = boolean(parameters[0])
        self._abort()

    def _set_aperture(self, parameters: tuple[str, ...]) -> None:
        seconds = number(parameters[0], "S", *APERTURE_S)
        self._aperture = round(round(seconds / APERTURE_STEP_S) * APERTURE_STEP_S, 9)
        self._abort()

    # readings

    def _abort(self) -> None:
        self._reading += 1
        self._until = 0.0

    def _read(self, _: tuple[str, ...]) -> Later:
        self._reading += 1
        self._until = until = self.bench.now + self._aperture
        self._start = self._volt_seconds()
        return Later(until, self._finish)

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
        aperture = self._aperture
        mean = (self._volt_seconds() - self._start) / aperture
        value = mean * self._scale.gain + self._scale.offset
        full = self._range
        if self._auto:
            full = next((one for one in RANGES_V if abs(value) <= OVER_RANGE * one), RANGES_V[-1])
        if abs(value) > OVER_RANGE * full:
            self._latest = OVERLOAD if value > 0 else f"-{OVERLOAD}"
            return self._latest
        value += self.setup.noise.gauss(0.0, self._noise_of_range * full * (0.1 / aperture) ** 0.5)
        step = full * RESOLUTION_OF_RANGE
        self._latest = f"{round(value / step) * step:+.8E}"
        return self._latest

    def _volt_seconds(self) -> float:
        """The running integral, V·s, of the voltage between the leads, up to now.

        The plant integrates the mean of each PWM period; what the unfinished period adds comes from the waveform.
        """
        if self._connected_to == "none":
            return 0.0
        plant = self.bench.plant_now()
        if self._connected_to == "supply_terminals":
            return plant.supply_volt_seconds
        wave = plant.wave()
        motor = plant.motor_volt_seconds
        if wave is not None:
            phase = plant.pwm_phase_s()
            motor += motor_voltage_integral(wave, 0.0, phase) - wave.mean_motor_volts * phase
        return motor if self._connected_to == "across_motor" else plant.supply_volt_seconds - motor


def _range_for(text: str) -> float:
    """The smallest range that holds the wanted value."""
    wanted = abs(number(text, "V", -RANGES_V[-1], RANGES_V[-1]))
    return next(one for one in RANGES_V if wanted <= one)
