"""The timer with digital potentiometer: duty from the tap, frequency nearly constant and set by the capacitor.

An astable timer with two steering diodes: the capacitor charges through the one part of the potentiometer and
discharges through the other. Pure; the board moves the tap and switches the timer.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

REFERENCE_DEGC = 25.0
HIGHEST_TAP = 255
DRIFTS = {"bipolar": (150.0, 0.3), "cmos": (75.0, 0.1)}
"""Kind → ppm/K and %/V of the integrated circuit, typical (checks 3.5 and 3.7: data sheets of 2000 and 1994)."""


@dataclass(frozen=True, slots=True)
class PwmTimer:
    """Values of the parts as they are fitted; ohm, farad, volt, degC.

    end_ohm             each of the two fixed resistors at the potentiometer's ends
    wiper_ohm           in both paths
    diode_volts         drop of a steering diode at 25 degC; it falls by `diode_volts_per_k` (common practice, no
                        source: 2 mV/K)
    timer_ppm_per_k, timer_percent_per_volt
                        the integrated circuit's own drift: bipolar, astable, typical 150 ppm/K and 0.3 %/V from 5 V
                        (checks 3.5, data sheet of the bipolar timer)
    capacitor_ppm_per_k the capacitor's
    ends_percent        frequency at the potentiometer's ends above that in its middle, %: a diode drops less at a small
                        current, which no formula of the parts has (own choice: as the square)
    skips_from, skips_taps  a broken ladder: from that tap on the wiper sits so many taps lower than it was told
    """

    potentiometer_ohm: float
    capacitor_farad: float
    supply_volts: float
    end_ohm: float = 1000.0
    wiper_ohm: float = 0.0
    diode_volts: float = 0.5
    diode_volts_per_k: float = -2e-3
    timer_ppm_per_k: float = 150.0
    timer_percent_per_volt: float = 0.3
    capacitor_ppm_per_k: float = 0.0
    ends_percent: float = 0.0
    skips_from: int = HIGHEST_TAP + 1
    skips_taps: int = 0

    def duty_percent(self, tap: int) -> float:
        """On-time in percent of the period: charging part over the whole (checks 3.13), the diodes' drop cancels."""
        charging, discharging = self._paths(tap)
        return 100.0 * charging / (charging + discharging)

    def pwm_hz(self, tap: int, degc: float = REFERENCE_DEGC) -> float:
        """1 / ((RA + RB)·C·ln((2·Vcc − 3·Vd)/(Vcc − 3·Vd))): both times scale by the one logarithm (checks 3.12, 3.13).

        The drifts stretch the times.
        """
        warmer = degc - REFERENCE_DEGC
        drop = self.diode_volts + self.diode_volts_per_k * warmer
        stretch = math.log((2.0 * self.supply_volts - 3.0 * drop) / (self.supply_volts - 3.0 * drop))
        drift = 1.0 + (self.timer_ppm_per_k + self.capacitor_ppm_per_k) * 1e-6 * warmer
        drift *= 1.0 + self.timer_percent_per_volt / 100.0 * (self.supply_volts - 5.0)
        off_middle = 2.0 * tap / HIGHEST_TAP - 1.0
        drift /= 1.0 + self.ends_percent / 100.0 * off_middle**2
        return 1.0 / (sum(self._paths(tap)) * self.capacitor_farad * stretch * drift)

    def _paths(self, tap: int) -> tuple[float, float]:
        wiper = tap - self.skips_taps if tap >= self.skips_from else tap
        part = self.potentiometer_ohm * wiper / HIGHEST_TAP
        end = self.end_ohm + self.wiper_ohm
        return end + part, end + self.potentiometer_ohm - part
