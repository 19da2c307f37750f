"""The simulated thermometer: four inputs, each a sensor with a lag of its own at the winding, the case or in the air.

The true temperatures are the plant's; a sensor only follows them. No heat is computed here.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from sweeprig.errors import ConfigError
from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error
from sweeprig.simbench.scpi import NOT_A_NUMBER, Later, channel_list

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

INPUTS = 4
CONVERSION_S = 0.1
RESOLUTION_K = 0.01
NOISE_K = 0.02
"""Standard deviation of one reading. Own choice: a resistance thermometer on a slow converter."""
LAG_S = 5.0
"""Time constant of a sensor glued on; common practice, no source."""
AIR_DEGC = 20.0
PLACES = {"winding": "winding_degc", "case": "case_degc", "ambient": "ambient_degc"}
"""Place → what the plant calls its temperature; a plant that does not tell one leaves its sensor in the room's air."""


class Thermometer(Instrument):
    """`MEAS:TEMP? (@n)`, degC. Options as the adapter's: place → input number (`winding = 1`).

    An input without a sensor answers 9.91E37. Between two looks the true temperature is taken as a straight line.
    """

    model = "thermometer"
    quantities = tuple(PLACES)
    error_keys = ("temperature_noise", "sensor_lag_s")

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        self._places = _places(setup)
        self._scales = {place: draw_scale_error(setup, place) for place in PLACES}
        self._noise = setup.error("temperature_noise", NOISE_K)
        self._lag_s = setup.error("sensor_lag_s", LAG_S)
        self._looked: dict[str, tuple[float, float, float]] = {}
        self.tree.add("MEASure:TEMPerature?", self._temperature, 1, 1)

    def _temperature(self, parameters: tuple[str, ...]) -> Later:
        inputs = channel_list(parameters[0], INPUTS)
        return Later(self.bench.now + CONVERSION_S, lambda: ",".join(self._read(one) for one in inputs))

    def _read(self, one: int) -> str:
        place = self._places.get(one)
        if place is None:
            return NOT_A_NUMBER
        scale = self._scales[place]
        value = self._sensor(place) * scale.gain + scale.offset + self.setup.noise.gauss(0.0, self._noise)
        return f"{round(value / RESOLUTION_K) * RESOLUTION_K:+.2f}"

    def _sensor(self, place: str) -> float:
        """What the sensor has reached by now, degC: first order behind the true temperature.

        Behind a ramp from x0 to x1 in t it reaches y1 = x1 − lag·slope + (y0 − x0 + lag·slope)·e^(−t/lag).
        """
        now, true = self.bench.now, float(getattr(self.bench.plant_now(), PLACES[place], AIR_DEGC))
        before, x0, y0 = self._looked.get(place, (now, true, true))
        y1 = y0
        if now > before:
            behind = self._lag_s * (true - x0) / (now - before)
            fade = math.exp(-(now - before) / self._lag_s) if self._lag_s > 0.0 else 0.0
            y1 = true - behind + (y0 - x0 + behind) * fade
        self._looked[place] = (now, true, y1)
        return y1


def _places(setup: Setup) -> dict[int, str]:
    """Input number → place. ConfigError for an input that is not there or has two sensors."""
    found: dict[int, str] = {}
    for place in PLACES:
        one = setup.options.get(place)
        if one is None:
            continue
        if not isinstance(one, int) or not 1 <= one <= INPUTS or one in found:
            raise ConfigError(
                f"the simulated thermometer {setup.name} cannot read {place} there",
                value=str(one),
                allowed=f"inputs 1 to {INPUTS}, one sensor each",
                remedy=f"Set options.{place} of {setup.name} in the rig file",
                topic="simbench",
            )
        found[one] = place
    return found
