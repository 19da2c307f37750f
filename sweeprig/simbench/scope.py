"""The simulated oscilloscope: automatic measurements of a channel, and the captured waveform as a block.

As a person has set it, its threshold lies near the conducting level, so that a current-free gap does not count as
on-time; with an automatic or a stated threshold it measures on what it captures (`capture`).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

from sweeprig.errors import ConfigError
from sweeprig.simbench.capture import Capture, Screen, Times, capture, crossings, frequency_and_duty, middle_level
from sweeprig.simbench.instrument import Instrument, Setup, draw_scale_error, require_connection
from sweeprig.simbench.probes import SIGNAL_VOLTS, period_s, running_volts
from sweeprig.simbench.scpi import (
    NOT_A_NUMBER,
    Later,
    Refused,
    block,
    boolean,
    channel_list,
    integer,
    nr1,
    nr3,
    number,
)  # fmt: skip

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

CHANNELS = 4
MEASUREMENT_S = 0.05
FREQUENCY_NOISE_PERCENT = 0.002
DUTY_NOISE_PERCENT = 0.02
VOLTS_NOISE = 0.01
"""Standard deviations of one measurement. Own choice: an 8-bit scope that averages a screen of periods."""
EDGE_S = 2e-7
SAMPLE_NOISE_VOLTS = 0.05
"""Rise time and noise of a sample. Own choices: a switched node seen through a probe with a long ground lead."""
SCREEN_S = (1e-6, 10.0)
POINTS = (50, 10_000)
FULL_VOLTS = (0.1, 400.0)
LEVEL_VOLTS = (-200.0, 200.0)
HYSTERESIS_OF_SCREEN = 0.05


class Scope(Instrument):
    """`MEAS:FREQ?`, `MEAS:PDUT?`, `MEAS:VOLT:DC?`, `READ:TRAC?`, `TRAC:…?`, each with a channel list; the settings
    `SENS:LEV…`, `SENS:SWE…`, `SENS:VOLT:RANG…`, `TRIG…`: table in DEVELOPERS.md.

    Error keys besides noise: `automatic_level` 1 (a person left the threshold on automatic), `edge_s`.
    """

    model = "scope"
    quantities = ("frequency", "duty", "volts")
    error_keys = (
        "frequency_noise_percent", "duty_noise_percent", "volts_noise", "sample_noise", "edge_s", "automatic_level",
    )  # fmt: skip

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
        self._sample_noise = setup.error("sample_noise", SAMPLE_NOISE_VOLTS)
        self._edge_s = setup.error("edge_s", EDGE_S)
        self._sees_pwm = setup.connected_to in ("drive_signal", "switch_node", "across_motor")
        self._capture: Capture | None = None
        self._until = 0.0
        self._add_measurements()
        self._add_settings()
        self.reset()

    def _add_measurements(self) -> None:
        add = self.tree.add
        add("MEASure:FREQuency?", self._frequency, 1, 1)
        add("MEASure:PDUTycycle?", self._duty, 1, 1)
        add("MEASure:VOLTage[:DC]?", self._volts, 1, 1)
        add("INITiate[:IMMediate]", self._initiate)
        add("READ:TRACe?", self._read_trace, 1, 1)
        add("TRACe[:DATA]?", self._trace, 1, 1)
        add("TRACe:PREamble?", self._preamble, 1, 1)

    def _add_settings(self) -> None:
        add = self.tree.add
        add("[SENSe]:LEVel", self._set_level, 1, 1)
        add("[SENSe]:LEVel?", lambda _: NOT_A_NUMBER if self._level is None else nr3(self._level, 5))
        add("[SENSe]:LEVel:AUTO", self._set_level_auto, 1, 1)
        add("[SENSe]:LEVel:AUTO?", lambda _: nr1(self._level_auto))
        self._add_screen("[SENSe]:SWEep:TIME", "seconds", "S", SCREEN_S)
        self._add_screen("[SENSe]:VOLTage:RANGe", "full_volts", "V", FULL_VOLTS)
        self._add_screen("[SENSe]:VOLTage:RANGe:OFFSet", "middle_volts", "V", LEVEL_VOLTS)
        self._add_screen("TRIGger:LEVel", "trigger_volts", "V", LEVEL_VOLTS)
        add("[SENSe]:SWEep:POINts", self._set_points, 1, 1)
        add("[SENSe]:SWEep:POINts?", lambda _: nr1(self._screen.points))
        add("TRIGger:SLOPe:NEGative", self._set_falling, 1, 1)
        add("TRIGger:SLOPe:NEGative?", lambda _: nr1(not self._screen.rising))

    def _add_screen(self, header: str, field: str, unit: str, span: tuple[float, float]) -> None:
        def put(parameters: tuple[str, ...]) -> None:
            self._change(**{field: number(parameters[0], unit, *span)})

        self.tree.add(header, put, 1, 1)
        self.tree.add(f"{header}?", lambda _: nr3(float(getattr(self._screen, field)), 6))

    def reset(self) -> None:
        self._screen = Screen()
        self._level: float | None = None
        self._level_auto = self.setup.error("automatic_level", 0.0) > 0.0
        self._capture, self._until = None, 0.0

    def pending_until(self) -> float:
        return self._until

    # settings

    def _change(self, **fields: float | bool) -> None:
        self._screen = replace(self._screen, **fields)  # type: ignore[arg-type] # each field has its own type
        self._capture = None

    def _set_level(self, parameters: tuple[str, ...]) -> None:
        self._level, self._level_auto = number(parameters[0], "V", *LEVEL_VOLTS), False

    def _set_level_auto(self, parameters: tuple[str, ...]) -> None:
        self._level_auto = boolean(parameters[0])

    def _set_points(self, parameters: tuple[str, ...]) -> None:
        self._change(points=integer(parameters[0], *POINTS))

    def _set_falling(self, parameters: tuple[str, ...]) -> None:
        self._change(rising=not boolean(parameters[0]))

    # automatic measurements

    def _frequency(self, parameters: tuple[str, ...]) -> Later:
        def measured(true: float) -> float:
            hz = true * self._frequency_scale.gain + self._frequency_scale.offset
            return hz * (1.0 + self.setup.noise.gauss(0.0, self._frequency_noise))

        return self._of_pwm(parameters, lambda: self.bench.signal.pwm_hz, measured, 0)

    def _duty(self, parameters: tuple[str, ...]) -> Later:
        def measured(true: float) -> float:
            percent = true * self._duty_scale.gain + self._duty_scale.offset
            return min(100.0, max(0.0, percent + self.setup.noise.gauss(0.0, self._duty_noise)))

        return self._of_pwm(parameters, lambda: self.bench.signal.duty_percent, measured, 1)

    def _of_pwm(
        self,
        parameters: tuple[str, ...],
        at_conducting_level: Callable[[], float],
        measured: Callable[[float], float],
        which: int,
    ) -> Later:
        """A measurement that needs edges for its whole time: without them the answer is 9.91E37."""
        channels = channel_list(parameters[0], CHANNELS)
        edges_at_start = self.bench.signal.has_edges

        def one(channel: int) -> str:
            if channel != self._channel or not self._sees_pwm:
                return NOT_A_NUMBER
            if self._level_auto or self._level is not None:
                found = self._on_screen()
                return NOT_A_NUMBER if found is None else f"{measured(found[which]):.7E}"
            there = edges_at_start and self.bench.signal.has_edges
            return f"{measured(at_conducting_level()):.7E}" if there else NOT_A_NUMBER

        seconds = max(MEASUREMENT_S, self._screen.seconds)
        return Later(self.bench.now + seconds, lambda: ",".join(one(channel) for channel in channels))

    def _on_screen(self) -> tuple[float, float] | None:
        """Frequency and duty above the threshold, of a fresh screen."""
        volts = self._acquire().volts()
        level = self._level
        if self._level_auto or level is None:
            level = middle_level(volts)
        hysteresis = HYSTERESIS_OF_SCREEN * self._screen.full_volts
        return frequency_and_duty(crossings(volts, self._screen.step_s, level, hysteresis))

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
            return plant.node_volt_seconds
        if place == "supply_terminals":
            return plant.supply_volt_seconds
        if place == "drive_signal":
            return self.bench.signal.high_seconds(self.bench.now) * SIGNAL_VOLTS
        return 0.0

    # the captured waveform

    def _acquire(self) -> Capture:
        """A screen of the voltage as it is now, with this scope's gain, offset, noise and eight bits."""
        bench, scale = self.bench, self._volts_scale
        true = running_volts(bench, self.setup.connected_to)

        def integral(to: Times) -> Times:
            return true(to) * scale.gain + scale.offset * to

        period = period_s(bench)
        self._capture = capture(integral, period, self._screen, self._edge_s, self._sample_noise, self.setup.noise)
        return self._capture

    def _initiate(self, _: tuple[str, ...]) -> None:
        if self._until > self.bench.now:
            raise Refused(-213)
        self._until = self.bench.now + self._screen.seconds
        self._capture = None
        self.bench.at(self._until, self._end_of_screen, None)

    def _end_of_screen(self, _: object) -> None:
        self._acquire()

    def _read_trace(self, parameters: tuple[str, ...]) -> Later:
        self._only_mine(parameters)
        return Later(self.bench.now + self._screen.seconds, lambda: _as_block(self._acquire()))

    def _trace(self, parameters: tuple[str, ...]) -> str:
        self._only_mine(parameters)
        return _as_block(self._captured())

    def _preamble(self, parameters: tuple[str, ...]) -> str:
        """Points, seconds a point, volts a step, volts at code 0."""
        self._only_mine(parameters)
        s = self._screen
        bottom = s.middle_volts - s.full_volts / 2.0
        return f"{nr1(s.points)},{nr3(s.step_s)},{nr3(s.step_volts)},{nr3(bottom)}"

    def _captured(self) -> Capture:
        if self._capture is None:
            raise Refused(-230)
        return self._capture

    def _only_mine(self, parameters: tuple[str, ...]) -> None:
        if channel_list(parameters[0], CHANNELS) != [self._channel]:
            raise Refused(-221, "one channel, the one that is wired")


def _as_block(shot: Capture) -> str:
    return block(shot.codes)


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
