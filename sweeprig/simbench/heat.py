"""Heat of a motor as two bodies, winding and case, between copper loss and ambient: closed form, no stepping error.

Pure functions of plain floats. Where the loss comes from, and what a warm motor does, is not known here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

COPPER_K = 234.5
"""Copper's resistance would be zero at −234.5 degC: R2/R1 = (234.5 + t2)/(234.5 + t1) (checks 13.1, verified)."""
REFERENCE_DEGC = 20.0
"""What a motor file's resistance and torque constant belong to."""


@dataclass(frozen=True, slots=True)
class TwoBodies:
    """C_w·dTw/dt = P − (Tw − Tc)/R_wc;  C_c·dTc/dt = (Tw − Tc)/R_wc − (Tc − T_ambient)/R_ca.

    Resistances in K/W, capacities in J/K. All loss P (W) goes into the winding; friction's heat is left out.
    """

    winding_case_k_per_w: float
    case_ambient_k_per_w: float
    winding_j_per_k: float
    case_j_per_k: float
    ambient_degc: float = REFERENCE_DEGC
    magnet_percent_per_k: float = -0.2

    def rates(self) -> tuple[float, float]:
        """The two rates (1/s, both below zero; the slow one first): roots of s² + (a + b)·s + c = 0, all real."""
        wc, ca = 1.0 / self.winding_case_k_per_w, 1.0 / self.case_ambient_k_per_w
        inner = wc / self.winding_j_per_k
        outer = (wc + ca) / self.case_j_per_k
        product = inner * ca / self.case_j_per_k
        total = inner + outer
        fast = -0.5 * (total + math.sqrt(total * total - 4.0 * product))
        return product / fast, fast

    def final(self, watts: float) -> tuple[float, float]:
        """(winding, case) in degC after a long time at this loss."""
        case = self.ambient_degc + watts * self.case_ambient_k_per_w
        return case + watts * self.winding_case_k_per_w, case

    def after(self, winding_degc: float, case_degc: float, watts: float, seconds: float) -> tuple[float, float]:
        """(winding, case) in degC after `seconds` of a constant loss: exact for any step.

        x(t) = A·e^(s1·t) + B·e^(s2·t) for each body's distance from its end value, the slope at the begin known.
        """
        slow, fast = self.rates()
        end_w, end_c = self.final(watts)
        x, y = winding_degc - end_w, case_degc - end_c
        across = 1.0 / self.winding_case_k_per_w
        dx = (y - x) * across / self.winding_j_per_k
        dy = ((x - y) * across - y / self.case_ambient_k_per_w) / self.case_j_per_k
        e_slow, e_fast = math.exp(slow * seconds), math.exp(fast * seconds)
        own = (slow * e_fast - fast * e_slow) / (slow - fast)
        of_slope = (e_slow - e_fast) / (slow - fast)
        return end_w + x * own + dx * of_slope, end_c + y * own + dy * of_slope


def copper_factor(degc: float) -> float:
    """Resistance at `degc` over that at 20 degC."""
    return (COPPER_K + degc) / (COPPER_K + REFERENCE_DEGC)


def copper_temperature(warm_ohm: float, cold_ohm: float, cold_degc: float) -> float:
    """Winding temperature, degC, by its resistance: T = (R/r)·(K + t) − K (checks 13.2, verified)."""
    return warm_ohm / cold_ohm * (COPPER_K + cold_degc) - COPPER_K


def magnet_factor(degc: float, percent_per_k: float) -> float:
    """Torque constant at `degc` over that at 20 degC; −0.2 %/K for ferrite (common practice, no source)."""
    return max(0.05, 1.0 + percent_per_k / 100.0 * (degc - REFERENCE_DEGC))
