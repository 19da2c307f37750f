"""What a probe on the rig sees of the motor and its stage: voltages and currents by place, integrated or at a phase.

Everything comes through `Machine` and the waveform of the present PWM period. No instrument's error lives here.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, cast

import numpy as np
import numpy.typing as npt

from sweeprig.simbench.waveform import Place

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench, Machine

VOLTAGE_PLACES = ("across_motor", "switch_node", "supply_terminals", "none")
CURRENT_PLACES = ("motor_lead", "supply_lead", "switch_shunt")
SIGNAL_VOLTS = 5.0
"""High level of the drive signal: the board's logic supply."""
PIECES = 32


def volt_seconds(bench: Bench, place: str) -> float:
    """The running integral, V·s, of the voltage at `place` up to now; 0 for "none".

    The plant integrates the mean of each PWM period; what the unfinished period adds comes from the waveform.
    """
    if place == "none":
        return 0.0
    plant = bench.plant_now()
    if place == "supply_terminals":
        return plant.supply_volt_seconds
    total = plant.motor_volt_seconds if place == "across_motor" else plant.node_volt_seconds
    return total + _unfinished(plant, cast(Place, place))


def amp_seconds(bench: Bench, place: str) -> float:
    """The running integral, A·s, of the current at `place` up to now, the unfinished PWM period in it."""
    plant = bench.plant_now()
    if place == "motor_lead":
        total = plant.motor_amp_seconds
    else:
        total = plant.supply_amp_seconds if place == "supply_lead" else plant.switch_amp_seconds
    return total + _unfinished(plant, cast(Place, place))


def _unfinished(plant: Machine, place: Place) -> float:
    """What the PWM period under way adds to the integral of whole periods, V·s or A·s."""
    wave = plant.wave()
    if wave is None:
        return 0.0
    phase = plant.pwm_phase_s()
    return wave.integral(place, 0.0, phase) - wave.mean(place) * phase


def period_s(bench: Bench) -> float:
    """The present PWM period, s; a millisecond while nothing is modulated."""
    return 1.0 / bench.signal.pwm_hz if bench.signal.pwm_hz > 0.0 else 1e-3


@dataclass(frozen=True, slots=True)
class Running:
    """The integral of a voltage that repeats, as a table over one period: phases (s) from 0 to the period, and V·s.

    now   the phase at which time 0 lies, s
    """

    phases: npt.NDArray[np.float64]
    totals: npt.NDArray[np.float64]
    now: float = 0.0

    def __call__(self, to: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        """∫ voltage dt (V·s) from phase 0 to times (s from now, also earlier), any shape."""
        period = self.phases[-1]
        at = self.now + to
        periods = np.floor(at / period)
        found: npt.NDArray[np.float64] = periods * self.totals[-1] + np.interp(
            at - periods * period, self.phases, self.totals
        )
        return found


def running_volts(bench: Bench, place: str) -> Running:
    """The voltage at `place` as if the present PWM period went on, for instruments that resolve it.

    Within each stretch of the period 32 straight pieces stand for the exponential. The drive signal is the gate's own
    rectangle.
    """
    signal, plant = bench.signal, bench.plant_now()
    phase, period = plant.pwm_phase_s(), period_s(bench)
    if place == "drive_signal":
        on = period * signal.duty_percent / 100.0 if signal.on else 0.0
        return Running(np.array([0.0, on, period]), SIGNAL_VOLTS * np.array([0.0, on, on]), phase)
    wave = plant.wave()
    if place == "none" or wave is None:
        return Running(np.array([0.0, period]), np.zeros(2))
    if place == "supply_terminals":
        volts = wave.mean("across_motor") + wave.mean("switch_node")
        return Running(np.array([0.0, wave.period_s]), np.array([0.0, volts * wave.period_s]))
    phases, totals = [0.0], [0.0]
    for part in wave.segments():
        if part.seconds <= 0.0:
            continue
        before = totals[-1]
        for n in range(1, PIECES + 1):
            inside = part.seconds * n / PIECES
            phases.append(part.begin_s + inside)
            totals.append(before + part.integral(cast(Place, place), inside))
    return Running(np.array(phases), np.array(totals), phase)
