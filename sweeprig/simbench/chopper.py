"""One PWM period of a winding with back-EMF on a low-side switch with a freewheel diode (slow decay), exactly.

Pure functions of plain floats, continuous and current-free (discontinuous) operation. No mechanics, no time series.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

DIODE_DROP_V = 0.5
"""Forward drop of the freewheel diode (common practice, no source: a Schottky at some 100 mA)."""


@dataclass(frozen=True, slots=True)
class Chopper:
    """What one electrical setting (supply, winding, PWM) makes of any back-EMF: the coefficients computed once.

    on_volts      supply less switch drop; drive  on_volts + diode_drop: what switching changes across the winding
    rise          1 − e^(−ton/τ); carry = the part of `drive` left as valley current in continuous operation
    crest         the part of `drive` reached as peak current in continuous operation
    boundary_emf  back-EMF (V) above which the current falls to zero within each period
    """

    on_volts: float
    resistance_ohm: float
    tau_s: float
    period_s: float
    on_s: float
    diode_drop_v: float
    rise: float
    carry: float
    crest: float
    boundary_emf: float


@dataclass(frozen=True, slots=True)
class Wave:
    """The periodic steady state at one back-EMF. Phase 0 is the moment the switch closes; SI units.

    conduction_s       from phase 0 until the current is zero; the whole period in continuous operation
    mean_motor_volts   mean over the period across the motor, with freewheel drop and the back-EMF in the gap
    mean_supply_amps   mean over the period of what the supply gives (it flows in the on-time only)
    mean_square_amps   mean of the squared motor current, A²: what heats the winding
    """

    chopper: Chopper
    emf_v: float
    conduction_s: float
    valley_amps: float
    peak_amps: float
    mean_motor_volts: float
    mean_motor_amps: float
    mean_supply_amps: float
    mean_square_amps: float

    @property
    def discontinuous(self) -> bool:
        """The current is zero for a part of the period."""
        return self.conduction_s < self.chopper.period_s


def chopper(
    supply_v: float,
    resistance_ohm: float,
    inductance_henry: float,
    pwm_hz: float,
    duty_percent: float,
    diode_drop_v: float = DIODE_DROP_V,
    switch_drop_v: float = 0.0,
) -> Chopper:
    """The coefficients of one setting. Textbook first-order solutions (Rashid ch. 5, Bimbhra ch. 7), plus the drops.

    Written with expm1 and falling exponentials only, so that neither 25 kHz nor 1 Hz loses digits or overflows.
    """
    tau = inductance_henry / resistance_ohm
    period = 1.0 / pwm_hz
    on = period * duty_percent / 100.0
    whole = -math.expm1(-period / tau)
    rise = -math.expm1(-on / tau)
    carry = math.exp((on - period) / tau) * rise / whole
    on_volts = supply_v - switch_drop_v
    boundary = (on_volts + diode_drop_v) * carry - diode_drop_v
    return Chopper(on_volts, resistance_ohm, tau, period, on, diode_drop_v, rise, carry, rise / whole, boundary)


def wave(setting: Chopper, emf_v: float) -> Wave:
    """The waveform at a back-EMF (V, zero or more). With the back-EMF at or above the supply no current flows.

    The mean current follows from the mean voltage, Ī = (V̄ − E) / R: the inductance takes no mean voltage.
    """
    c, period = setting, setting.period_s
    if c.on_s == 0.0 or emf_v >= c.on_volts:
        return Wave(c, emf_v, 0.0, 0.0, 0.0, emf_v, 0.0, 0.0, 0.0)
    r, tau = c.resistance_ohm, c.tau_s
    if emf_v < c.boundary_emf:
        valley = ((c.on_volts + c.diode_drop_v) * c.carry - emf_v - c.diode_drop_v) / r
        peak = ((c.on_volts + c.diode_drop_v) * c.crest - emf_v - c.diode_drop_v) / r
        conduction = period
    else:
        valley, peak = 0.0, (c.on_volts - emf_v) / r * c.rise
        conduction = min(period, c.on_s + tau * math.log1p(peak * r / (emf_v + c.diode_drop_v)))
    freewheel = conduction - c.on_s
    volts = (c.on_volts * c.on_s - c.diode_drop_v * freewheel + emf_v * (period - conduction)) / period
    rising = (c.on_volts - emf_v) / r
    falling = -(emf_v + c.diode_drop_v) / r
    supply = (rising * c.on_s + (valley - rising) * tau * c.rise) / period
    square = _square(rising, valley - rising, c.on_s, tau) + _square(falling, peak - falling, freewheel, tau)
    return Wave(c, emf_v, conduction, valley, peak, volts, (volts - emf_v) / r, supply, square / period)


def _square(level: float, start: float, seconds: float, tau: float) -> float:
    """∫ (level + start·e^(−t/τ))² dt over `seconds`."""
    x = -seconds / tau
    return level * level * seconds - start * tau * (2.0 * level * math.expm1(x) + 0.5 * start * math.expm1(2.0 * x))


def mean_current(setting: Chopper, emf_v: float) -> tuple[float, float]:
    """(mean motor current in A, its derivative by the back-EMF in A/V): `wave` cut down to what the rotor needs."""
    c = setting
    if emf_v < c.boundary_emf:
        volts = (c.on_volts + c.diode_drop_v) * c.on_s / c.period_s - c.diode_drop_v
        return (volts - emf_v) / c.resistance_ohm, -1.0 / c.resistance_ohm
    if c.on_s == 0.0 or emf_v >= c.on_volts:
        return 0.0, 0.0
    below = emf_v + c.diode_drop_v
    swing = (c.on_volts - emf_v) * c.rise / below
    conduction = c.on_s + c.tau_s * math.log1p(swing)
    slope = -c.tau_s * c.rise * (c.on_volts + c.diode_drop_v) / (below * below * (1.0 + swing))
    scale = c.resistance_ohm * c.period_s
    current = ((c.on_volts + c.diode_drop_v) * c.on_s - below * conduction) / scale
    return current, -(conduction + below * slope) / scale


def mean_supply_current(setting: Chopper, emf_v: float) -> float:
    """Mean supply current, A: linear in the back-EMF on either side of the boundary of conduction."""
    c = setting
    if c.on_s == 0.0 or emf_v >= c.on_volts:
        return 0.0
    rising = (c.on_volts - emf_v) / c.resistance_ohm
    valley = 0.0
    if emf_v < c.boundary_emf:
        valley = ((c.on_volts + c.diode_drop_v) * c.carry - emf_v - c.diode_drop_v) / c.resistance_ohm
    return (rising * c.on_s + (valley - rising) * c.tau_s * c.rise) / c.period_s


def on_volts_at_limit(setting: Chopper, emf_v: float, limit_amps: float) -> float:
    """The on-voltage (V) at which the mean supply current just is `limit_amps` (A): what a limiting supply leaves."""
    c = setting
    flat = (c.on_s - c.tau_s * c.rise) / c.period_s / c.resistance_ohm
    current_free = emf_v + limit_amps / flat
    ripple = c.tau_s * c.rise / c.period_s / c.resistance_ohm
    through = flat + ripple * c.carry
    constant = -flat * emf_v + ripple * (c.diode_drop_v * c.carry - emf_v - c.diode_drop_v)
    continuous = (limit_amps - constant) / through
    # each solution holds on its own side of the boundary; the valley current tells which side this is
    valley = (continuous + c.diode_drop_v) * c.carry - emf_v - c.diode_drop_v
    return continuous if valley > 0.0 else current_free


def motor_voltage(shape: Wave, phase_s: float) -> float:
    """Voltage across the motor (V) at a phase (s, any; taken modulo the period)."""
    phase = phase_s % shape.chopper.period_s
    if phase >= shape.conduction_s:
        return shape.emf_v
    return shape.chopper.on_volts if phase < shape.chopper.on_s else -shape.chopper.diode_drop_v


def motor_current(shape: Wave, phase_s: float) -> float:
    """Motor current (A) at a phase (s, any; taken modulo the period)."""
    c = shape.chopper
    phase = phase_s % c.period_s
    if phase >= shape.conduction_s:
        return 0.0
    if phase < c.on_s:
        level = (c.on_volts - shape.emf_v) / c.resistance_ohm
        return level + (shape.valley_amps - level) * math.exp(-phase / c.tau_s)
    level = -(shape.emf_v + c.diode_drop_v) / c.resistance_ohm
    return level + (shape.peak_amps - level) * math.exp((c.on_s - phase) / c.tau_s)


def motor_voltage_integral(shape: Wave, phase_from_s: float, phase_to_s: float) -> float:
    """∫ motor voltage dt (V·s) from one phase to a later one (s; they may be many periods apart).

    An integrating voltmeter's reading is this over its aperture: the error of an aperture that is no whole number of
    periods comes out of it by itself.
    """
    return _voltage_from_zero(shape, phase_to_s) - _voltage_from_zero(shape, phase_from_s)


def _voltage_from_zero(shape: Wave, phase_s: float) -> float:
    c = shape.chopper
    periods = math.floor(phase_s / c.period_s)
    phase = phase_s - periods * c.period_s
    on = min(phase, c.on_s, shape.conduction_s)
    freewheel = max(0.0, min(phase, shape.conduction_s) - c.on_s)
    gap = phase - on - freewheel
    part = c.on_volts * on - c.diode_drop_v * freewheel + shape.emf_v * gap
    return periods * c.period_s * shape.mean_motor_volts + part
