"""The simulated oscilloscope with automatic measurements: frequency, positive duty cycle and mean of a channel.

At the switch node or across the motor its threshold lies near the conducting level, so that a current-free gap does
not count as on-time.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from sweeprig.errors import ConfigError
from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error, require_connection
from sweeprig.simbench.scpi import NOT_A_NUMBER, Later, channel_list

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

CHANNELS = 4
MEASUREMENT_S = 0.05
SIGNAL_VOLTS = 5.0
"""High level of the drive signal: the board's logic supply."""
FREQUENCY_NOISE_PERCENT = 0.002
DUTY_NOISE_PERCENT = 0.02
VOLTS_NOISE = 0.01
"""Standard deviations of one measurement. Own choice: an 8-bit scope that averages a screen of periods."""


class Scope(Instrument):
    """`MEAS:FREQ?`, `MEAS:PDUT?`, `MEAS:VOLT:DC?`, each with a channel list."""

    model = "scope"
    quantities = ("frequency", "duty", "volts")
    error_keys = ("frequency_noise_percent", "duty_noise_percent", "volts_noise")

    def __init__(self, setup: Setup, bench: Bench) -> None:
        super().__init__(setup, bench)
        require_connection(setup, ("drive_signal", "switch_node", "across_motor", "supply_terminals", "none"))
        self._channel = _channel(setup)
        self._frequency_scale = draw_scale_error(setup, "frequency")
        self._duty_scale = draw_scale_error(setup, "duty")
        self._volts_scale = draw_scale_error(setup, "volts")
        self._frequency_noise = setup.error("frequency_noise_percent", FREQUENCY_NOISE_PERCENT) / 100.0
        self._duty_noise = setup.error("duty_noise_percent", DUTY_NOISE_PERCENT)
        self._volts_noise = setup.error("volts_noise", VOLTS_NOISE)
        self._sees_pwm = setup.connected_to in ("drive_signal", "switch_node", "across_motor")
        self.tree.add("MEASure:FREQuency?", self._frequency, 1, 1)
        self.tree.add("MEASure:PDUTycycle?", self._duty, 1, 1)
        self.tree.add("MEASure:VOLTage[:DC]?", self._volts, 1, 1)

    def _frequency(self, parameters: tuple[str, ...]) -> Later:
        def measured() -> float:
            hz = self.bench.signal.pwm_hz * self._frequency_scale.gain + self._frequency_scale.offset
            return hz * (1.0 + self.setup.noise.gauss(0.0, self._frequency_noise))

        return self._of_pwm(parameters, measured)

    def _duty(self, parameters: tuple[str, ...]) -> Later:
        def measured() -> float:
            percent = self.bench.signal.duty_percent * self._duty_scale.gain + self._duty_scale.offset
            return min(100.0, max(0.0, percent + self.setup.noise.gauss(0.0, self._duty_noise)))

        return self._of_pwm(parameters, measured)

    def _of_pwm(self, parameters: tuple[str, ...], measured: Callable[[], float]) -> Later:
        """A measurement that needs edges for its whole time: without them the answer is 9.91E37."""
        channels = channel_list(parameters[0], CHANNELS)
        edges_at_start = self.bench.signal.has_edges

        def one(channel: int) -> str:
            there = channel == self._channel and self._sees_pwm
            return f"{measured():.7E}" if there and edges_at_start and self.bench.signal.has_edges else NOT_A_NUMBER

        return Later(self.bench.now + MEASUREMENT_S, lambda: ",".join(one(channel) for channel in channels))

    def _volts(self, parameters: tuple[str, ...]) -> Later:
        channels = channel_list(parameters[0], CHANNELS)
        start = self._volt_seconds()

        def one(channel: int) -> str:
            mean = (self._volt_seconds() - start) / MEASUREMENT_S if channel == self._channel else 0.0
            noise = self.setup.noise.gauss(0.0, self._volts_noise)
            return f"{mean * self._volts_scale.gain + self._volts_scale.offset + noise:+.5E}"

        return Later(self.bench.now + MEASUREMENT_S, lambda: ",".join(one(channel) for channel in channels))

    def _volt_seconds(self) -> float:
        """Running integral of the probed voltage, V·s; the drive signal is taken as it is now."""
        plant, place = self.bench.plant_now(), self.setup.connected_to
        if place == "across_motor":
            return plant.motor_volt_seconds
        if place == "switch_node":
            return plant.supply_volt_seconds - plant.motor_volt_seconds
        if place == "supply_terminals":
            return plant.supply_volt_seconds
        if place == "drive_signal":
            return self.bench.signal.high_seconds(self.bench.now) * SIGNAL_VOLTS
        return 0.0


def _channel(setup: Setup) -> int:
    channel = setup.options.get("channel", 1)
    if not isinstance(channel, int) or not 1 <= channel <= CHANNELS:
        raise ConfigError(
            f"the simulated scope {setup.name} has no such channel",
            value=str(channel),
            allowed=f"1 to {CHANNELS}",
            remedy=f"Set options.channel of {setup.name} in the rig file",
        )
    return channel
