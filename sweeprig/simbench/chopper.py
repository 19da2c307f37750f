"""One PWM period of a winding with back-EMF on a low-side switch with a freewheel diode (slow decay), exactly.

Pure functions of plain floats, continuous and current-free (discontinuous) operation; the plain stage, in closed form.
Stages with resistance, dead time or a bridge are `bridge`'s. No mechanics, no time series.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

from sweeprig.simbench.waveform import Place, Segment, Waveform

DIODE_DROP_V = 0.5
"""Forward drop of the freewheel diode (common practice, no source: a Schottky at some 100 mA)."""


class Chopper(NamedTuple):
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

    @property
    def supply_volts(self) -> float:
        """At the supply's terminals, V: this plain stage has no resistance in its leads."""
        return self.on_volts

    @property
    def supply_ohms(self) -> float:
        return 0.0

    def mean_current(self, emf_v: float) -> tuple[float, float]:
        """(mean motor current in A, its derivative by the back-EMF in A/V): `wave` cut down to what the rotor needs."""
        return mean_current(self, emf_v)

    def mean_supply_current(self, emf_v: float) -> float:
        """Mean supply current, A: linear in the back-EMF on either side of the boundary of conduction."""
        return mean_supply_current(self, emf_v)

    def wave(self, emf_v: float) -> Wave:
        return wave(self, emf_v)

    def at_volts(self, volts: float) -> Chopper:
        """The same setting on another on-voltage, V."""
        c = self
        boundary = (volts + c.diode_drop_v) * c.carry - c.diode_drop_v
        return Chopper(
            volts, c.resistance_ohm, c.tau_s, c.period_s, c.on_s, c.diode_drop_v, c.rise, c.carry, c.crest, boundary
        )

    def limited(self, emf_v: float, limit_amps: float) -> Chopper:
        """The same setting on the lower voltage that a supply leaves when its mean current is held at the limit, A."""
        return self.at_volts(on_volts_at_limit(self, emf_v, limit_amps))


@dataclass(frozen=True, slots=True)
class Wave(Waveform):
    """The waveform of a chopper, in closed form.

    conduction_s       from phase 0 until the current is zero; the whole period in continuous operation
    """

    chopper: Chopper
    conduction_s: float

    @property
    def period_s(self) -> float:
        return self.chopper.period_s

    @property
    def discontinuous(self) -> bool:
        """The current is zero for a part of the period."""
        return self.conduction_s < self.chopper.period_s

    def segments(self) -> tuple[Segment, ...]:
        """On-time, freewheeling, current-free gap; the motor hangs between supply plus and the node."""
        c, emf, gap = self.chopper, self.emf_v, self.conduction_s
        on, tau, volts, drop = min(c.on_s, gap), c.tau_s, c.on_volts, c.diode_drop_v
        up, down = (volts - emf) / c.resistance_ohm, -(emf + drop) / c.resistance_ohm
        return (
            Segment(0.0, on, up, self.valley_amps - up, tau, volts, 0.0, 0.0, 0.0, 1.0, volts, 0.0),
            Segment(on, gap - on, down, self.peak_amps - down, tau, -drop, 0.0, volts + drop, 0.0, 0.0, volts, 0.0),
            Segment(gap, c.period_s - gap, 0.0, 0.0, tau, emf, 0.0, volts - emf, 0.0, 0.0, volts, 0.0),
        )

    def integral(self, place: Place, phase_from_s: float, phase_to_s: float) -> float:
        if place == "across_motor":
            return motor_voltage_integral(self, phase_from_s, phase_to_s)
        return Waveform.integral(self, place, phase_from_s, phase_to_s)


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
    """The waveform at a back-EMF (V). With the back-EMF at or above the supply no current flows; turned backwards
    beyond the diode drop, the motor feeds its freewheel diode even without any on-time.

    The mean current follows from the mean voltage, Ī = (V̄ − E) / R: the inductance takes no mean voltage.
    """
    c, period = setting, setting.period_s
    if emf_v >= c.on_volts or (c.on_s == 0.0 and emf_v >= -c.diode_drop_v):
        return Wave(emf_v, 0.0, 0.0, emf_v, 0.0, 0.0, 0.0, c, 0.0)
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
    return Wave(emf_v, valley, peak, volts, (volts - emf_v) / r, supply, square / period, c, conduction)


def _square(level: float, start: float, seconds: float, tau: float) -> float:
    """∫ (level + start·e^(−t/τ))² dt over `seconds`."""
    x = -seconds / tau
    return level * level * seconds - start * tau * (2.0 * level * math.expm1(x) + 0.5 * start * math.expm1(2.0 * x))


Numbers = tuple[float, float, float, float, float, float, float, float, float, float]
"""A `Chopper`, or its fields in the same order: what the functions below take, so that they may be compiled."""


def mean_current(setting: Numbers, emf_v: float) -> tuple[float, float]:
    """(mean motor current in A, its derivative by the back-EMF in A/V)."""
    on_volts, ohm, tau, period, on, drop, rise, _, _, boundary_emf = setting
    if emf_v < boundary_emf:
        volts = (on_volts + drop) * on / period - drop
        return (volts - emf_v) / ohm, -1.0 / ohm
    if on == 0.0 or emf_v >= on_volts:
        return 0.0, 0.0
    below = emf_v + drop
    swing = (on_volts - emf_v) * rise / below
    conduction = on + tau * math.log1p(swing)
    slope = -tau * rise * (on_volts + drop) / (below * below * (1.0 + swing))
    scale = ohm * period
    return ((on_volts + drop) * on - below * conduction) / scale, -(conduction + below * slope) / scale


def mean_supply_current(setting: Numbers, emf_v: float) -> float:
    """Mean supply current, A."""
    on_volts, ohm, tau, period, on, drop, rise, carry, _, boundary_emf = setting
    if on == 0.0 or emf_v >= on_volts:
        return 0.0
    rising = (on_volts - emf_v) / ohm
    valley = 0.0
    if emf_v < boundary_emf:
        valley = ((on_volts + drop) * carry - emf_v - drop) / ohm
    return (rising * on + (valley - rising) * tau * rise) / period


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
