"""The simulated sound-level meter: the fan's noise by its pulse rate, over the room's background, averaged in energy.

A model of one line, to have something to read; no acoustics of rooms or of PWM lives here.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error
from sweeprig.simbench.scpi import Later, Refused, nr3, number

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

AVERAGE_S = (0.125, 60.0)
DEFAULT_AVERAGE_S = 1.0
DECIBELS_A_DECADE = 50.0
"""Sound power of a fan goes with the fifth power of its speed: common practice, no source."""
REFERENCE_PULSE_HZ = 100.0
LEVEL_AT_REFERENCE_DB = 55.0
BACKGROUND_DB = 32.0
NOISE_DB = 0.2
"""Own choices: a small fan in a quiet room."""
WEIGHTINGS = ("A", "C")


class SoundMeter(Instrument):
    """`MEAS:SLEV?` (dB, the level averaged over the time that starts now), `SENS:AVER:TIME s`, `SENS:WEIG A|C`."""

    model = "sound_meter"
    quantities = ("level",)
    error_keys = ("level_noise", "level_at_reference_db", "reference_pulse_hz", "background_db")

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        self._scale = draw_scale_error(setup, "level")
        self._noise = setup.error("level_noise", NOISE_DB)
        self._reference_db = setup.error("level_at_reference_db", LEVEL_AT_REFERENCE_DB)
        self._reference_hz = setup.error("reference_pulse_hz", REFERENCE_PULSE_HZ)
        self._background_db = setup.error("background_db", BACKGROUND_DB)
        add = self.tree.add
        add("MEASure:SLEVel?", self._measure)
        add("[SENSe]:AVERage:TIME", self._set_average, 1, 1)
        add("[SENSe]:AVERage:TIME?", lambda _: nr3(self._average_s, 4))
        add("[SENSe]:WEIGhting", self._set_weighting, 1, 1)
        add("[SENSe]:WEIGhting?", lambda _: self._weighting)
        self.reset()

    def reset(self) -> None:
        self._average_s, self._weighting = DEFAULT_AVERAGE_S, "A"

    def _set_average(self, parameters: tuple[str, ...]) -> None:
        self._average_s = number(parameters[0], "S", *AVERAGE_S)

    def _set_weighting(self, parameters: tuple[str, ...]) -> None:
        if parameters[0].upper() not in WEIGHTINGS:
            raise Refused(-224, parameters[0])
        self._weighting = parameters[0].upper()

    def _measure(self, _: tuple[str, ...]) -> Later:
        began = self.bench.plant_now().edges
        seconds = self._average_s

        def finish() -> str:
            pulse_hz = (self.bench.plant_now().edges - began) / seconds
            value = self.level_db(pulse_hz) * self._scale.gain + self._scale.offset
            return f"{value + self.setup.noise.gauss(0.0, self._noise):.1f}"

        return Later(self.bench.now + seconds, finish)

    def level_db(self, pulse_hz: float) -> float:
        """The true level, dB, at a pulse rate of the tachometer, Hz: the sum of the energies of fan and background."""
        energy = 10.0 ** (self._background_db / 10.0)
        if pulse_hz > 0.0:
            fan = self._reference_db + DECIBELS_A_DECADE * math.log10(pulse_hz / self._reference_hz)
            energy += 10.0 ** (fan / 10.0)
        return 10.0 * math.log10(energy)
