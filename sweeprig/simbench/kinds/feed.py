"""What a chopped supply is to a fan's electronics: pure functions of plain floats. No mechanics.

Two ways: with a capacitor that carries them through the off-time (a bus), or awakened anew in every on-time (gated).
"""

from __future__ import annotations

import math
from typing import NamedTuple

from sweeprig.simbench.kinds.period import Signal


class Bus(NamedTuple):
    """The capacitor's voltage in the periodic steady state, linear in the mean current drawn from it (A).

    mean = volts − mean_ohms·amps; lowest (end of the off-time) = volts − low_ohms·amps
    charge_ohm   between supply and capacitor: (volts − lowest) / charge_ohm is the spike at switching on, A
    """

    volts: float
    mean_ohms: float
    low_ohms: float
    charge_ohm: float


class Drawn(NamedTuple):
    """What flows at one speed, with slopes by the back-EMF (V): winding A, supply A, volts across the fan.

    standing_amps   what the winding takes in the driven time at standstill; driven: that part of the time
    volts           of the supply, less than set where its limit acts
    """

    volts: float
    winding_amps: float
    winding_slope: float
    supply_amps: float
    supply_slope: float
    fan_volts: float
    fan_volts_slope: float
    standing_amps: float
    driven: float
    limited: bool


def bus(volts: float, charge_ohm: float, holdup_farad: float, pwm_hz: float, duty_percent: float) -> Bus:
    """Capacitor C charged through R in the on-time, drained by a steady current I all the time.

    With τ = R·C, e = exp(−ton/τ) and A = V − I·R: end of on-time v1 = A − (v0's lack)·e, end of off-time
    v0 = v1 − I·toff/C, so v1 = V − I·β1 with β1 = R + toff/C · e/(1 − e), and v0 = V − I·β0 with β0 = β1 + toff/C.
    Mean over the period: exponential part in the on-time, straight line in the off-time. Derived here (D), checked
    against stepping the two equations.
    """
    period = 1.0 / pwm_hz
    on = period * duty_percent / 100.0
    off = period - on
    if off <= 0.0:
        return Bus(volts, charge_ohm, charge_ohm, charge_ohm)
    tau = charge_ohm * holdup_farad
    rise = -math.expm1(-on / tau)
    fall = off / holdup_farad
    high = charge_ohm + fall * (1.0 - rise) / rise
    low = high + fall
    mean = (on * charge_ohm + (low - charge_ohm) * rise * tau + off * 0.5 * (low + high)) / period
    return Bus(volts, mean, low, charge_ohm)


def through_bus(feed: Bus, resistance_ohm: float, own_amps: float, level: float, emf_v: float, limit: float) -> Drawn:
    """Electronics that put `level` (0 to 1) of the bus voltage on the winding: Iw = (s·v − E)/R, bus current Ie + s·Iw.

    Current never flows back. Above `limit` (A) the supply's voltage gives way until it just is the limit.
    """
    slope = -1.0 / (resistance_ohm + level * level * feed.mean_ohms)

    def winding(volts: float, emf: float) -> float:
        return max(0.0, -slope * (level * (volts - feed.mean_ohms * own_amps) - emf))

    volts, amps, limited = feed.volts, winding(feed.volts, emf_v) if level > 0.0 else 0.0, False
    supply = own_amps + level * amps
    if supply > limit:
        limited, supply = True, limit
        amps = max(0.0, limit - own_amps) / level if level > 0.0 else 0.0
        # the supply gives way until just this flows; with nothing but the electronics left, it falls to nothing
        volts = (emf_v - amps / slope) / level + feed.mean_ohms * own_amps if amps > 0.0 else 0.0
    steep = slope if amps > 0.0 and not limited else 0.0
    standing = winding(volts, 0.0) if level > 0.0 else 0.0
    return Drawn(
        volts, amps, steep, supply, level * steep, volts - feed.mean_ohms * supply, -feed.mean_ohms * level * steep,
        standing, 1.0, limited,
    )  # fmt: skip


def gated(
    volts: float, floor_volts: float, on_s: float, period_s: float, wake_s: float, soft_start_s: float,
    resistance_ohm: float, own_amps: float, emf_v: float, limit: float,
) -> Drawn:  # fmt: skip
    """Electronics that wake in every on-time: nothing for `wake_s`, then a soft start from nothing, until it ends.

    Mean level of the ramp: (ton − wake)/(2·soft start), one without a ramp. `floor_volts`: what a capacitor, if there
    is one, leaves across the fan in the off-time. The winding's inductance is left out (own simplification).
    """
    active = max(0.0, on_s - wake_s)
    share, duty = active / period_s, on_s / period_s
    level = 1.0 if soft_start_s <= 0.0 else min(1.0, active / (2.0 * soft_start_s))
    own = own_amps * duty
    amps = share * max(0.0, level * volts - emf_v) / resistance_ohm
    supply, limited = own + level * amps, False
    if supply > limit:
        limited, supply = True, limit
        amps = max(0.0, limit - own) / level if level > 0.0 else 0.0
        volts = (amps * resistance_ohm / share + emf_v) / level if amps > 0.0 else 0.0
    steep = -share / resistance_ohm if amps > 0.0 and not limited else 0.0
    fan_volts = duty * volts + (1.0 - duty) * min(floor_volts, volts)
    return Drawn(
        volts, amps, steep, supply, level * steep, fan_volts, 0.0, level * volts / resistance_ohm, share, limited
    )


Shape = list[tuple[float, Signal, float, Signal]]
"""(seconds, voltage across the fan V, winding current A, supply current A) of each part of a period."""


def shape_through_bus(feed: Bus, drawn: Drawn, holdup_farad: float, period_s: float, on_s: float) -> Shape:
    """The period behind `through_bus`: the capacitor charges through its resistance, a spike, and falls straight.

    In the on-time v = A + (v0 − A)·e^(−t/τ) and the supply gives (V − v)/R, with the symbols of `bus`; in the off-time
    v = v1 − I·t/C. The voltage is the capacitor's; the winding's current is steady.
    """
    mean, amps = drawn.supply_amps, drawn.winding_amps
    if feed.low_ohms == feed.mean_ohms:
        return [(period_s, Signal(drawn.fan_volts), amps, Signal(mean))]
    ohms, tau = feed.charge_ohm, feed.charge_ohm * holdup_farad
    full, low = drawn.volts - mean * ohms, drawn.volts - mean * feed.low_ohms
    off = period_s - on_s
    high = low + mean * off / holdup_farad
    return [
        (on_s, Signal(full, low - full, tau), amps, Signal(mean, (full - low) / ohms, tau)),
        (off, Signal(high, slope=-mean / holdup_farad), amps, Signal(0.0)),
    ]


def shape_gated(
    drawn: Drawn, floor_volts: float, own_amps: float, period_s: float, on_s: float, wake_s: float
) -> Shape:
    """The period behind `gated`: the electronics' own current from the on-time's begin, then a block of the winding's.

    A soft start's ramp shows as its mean level; a capacitor that reset shows its level of the off-time, no spike.
    """
    own = min(own_amps, drawn.supply_amps * period_s / on_s) if on_s > 0.0 else 0.0
    asleep = min(wake_s, on_s)
    active = on_s - asleep
    amps = drawn.winding_amps * period_s / active if active > 0.0 else 0.0
    more = (drawn.supply_amps * period_s - own * on_s) / active if active > 0.0 else 0.0
    across = Signal(drawn.volts)
    return [
        (asleep, across, 0.0, Signal(own)),
        (active, across, amps, Signal(own + more)),
        (period_s - on_s, Signal(min(floor_volts, drawn.volts)), 0.0, Signal(0.0)),
    ]
