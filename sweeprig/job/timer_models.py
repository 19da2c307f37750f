"""The rig's timer with digital potentiometer, where that makes the PWM: its parts, and what they must bear.

Only values, what they give by their nominal values, and the check that they fit each other; the true timer is the
simulated bench's, which shares no formula with this.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Annotated, Literal

from sweeprig.errors import ConfigError
from sweeprig.job.amounts import Amount, Number, Strict, shown
from sweeprig.job.problems import Sources, misfit


class PwmTimer(Strict):
    """An astable timer whose charge and discharge resistors are the two parts of a potentiometer that the board steps.

    supply                           of the timer; the charge path goes up to it
    capacitor_farad                  with the potentiometer it sets the frequency
    end_resistor                     each of the two at the potentiometer's ends
    potentiometer_highest_voltage    that any of its terminals bears (most digital ones: 5.5 V)
    diode_drop                       of each of the two steering diodes
    """

    kind: Literal["bipolar", "cmos"] = "bipolar"
    supply: Annotated[float, Amount("V", 2.0, 18.0, "What timers of this kind bear")]
    capacitor_farad: Annotated[float, Number(1e-11, 1e-4, "Farad; outside of it stray capacitance or leakage rules")]
    potentiometer: Annotated[float, Amount("ohm", 1e3, 1e6, "Digital potentiometers are made from 1 kohm to 1 Mohm")]
    end_resistor: Annotated[float, Amount("ohm", 100.0, 1e6, "Without it the timer is shorted at an end")]
    potentiometer_highest_voltage: Annotated[
        float, Amount("V", 1.0, 40.0, "A part that sees more conducts through its protection, or dies")
    ]
    diode_drop: Annotated[float, Amount("V", 0.0, 1.2, "A steering diode at some 100 uA")] = 0.5


HIGHEST_TAP = 255
"""The board writes eight bits to its potentiometer (drivers/firmware/README.md)."""


def timer_ends(timer: PwmTimer) -> tuple[float, float]:
    """Duty at the lowest and at the highest tap by the parts' nominal values, %: charging part over the whole."""
    low = 100.0 * timer.end_resistor / (2.0 * timer.end_resistor + timer.potentiometer)
    return low, 100.0 - low


def timer_step(timer: PwmTimer) -> float:
    """One tap by the parts, % duty."""
    low, high = timer_ends(timer)
    return (high - low) / HIGHEST_TAP


def timer_hz(timer: PwmTimer) -> float:
    """The frequency by the parts, Hz, to five digits: 1 / (t_on + t_off), each time R·C·ln of what the capacitor is
    charged by between the timer's thresholds at a third and two thirds of its supply, less the diode's drop."""
    volts, drop = timer.supply, timer.diode_drop
    period = (2.0 * timer.end_resistor + timer.potentiometer) * timer.capacitor_farad
    period *= math.log((volts - volts / 3.0 - drop) / (volts - 2.0 * volts / 3.0 - drop))
    return float(f"{1.0 / period:.5g}")


def timer_checks(timer: PwmTimer | None, drive_adapter: str | None, sources: Sources) -> Iterator[ConfigError]:
    """The potentiometer bears the charge path; the diodes leave the capacitor something; somebody steps the tap."""
    if timer is None:
        return
    if timer.supply > timer.potentiometer_highest_voltage:
        yield misfit(
            sources, ("rig", "pwm_timer", "potentiometer_highest_voltage"),
            f"the potentiometer sits in the charge path, which goes up to {shown(timer.supply, 'V')}",
            f"{shown(timer.supply, 'V')} or more",
            "Use a part for this voltage, or run the timer from a lower supply", topic="rig",
        )  # fmt: skip
    if timer.supply <= 4.0 * timer.diode_drop:
        yield misfit(
            sources, ("rig", "pwm_timer", "supply"),
            "the capacitor cannot reach the timer's upper threshold through a diode at this supply",
            f"above {shown(4.0 * timer.diode_drop, 'V')}", "Raise the supply, or use diodes with a smaller drop",
            topic="rig",
        )  # fmt: skip
    if drive_adapter != "board":
        yield misfit(
            sources, ("rig", "pwm_timer"), "only the board steps the potentiometer, and the drive is another",
            'drive = the instrument with adapter = "board"', "Give the board the role drive, or remove the table",
            topic="rig",
        )  # fmt: skip
