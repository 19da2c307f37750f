"""The fan with its own commutation on a chopped supply: waking, hold-up, soft start, lock protection, draught, tach."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import pytest

from sweeprig.simbench.kinds.feed import bus, gated, through_bus

if TYPE_CHECKING:
    from sweeprig.simbench.kinds.electronic import ElectronicFan, ElectronicTruth
    from tests.simbench.kinds.conftest import Kinds


@pytest.mark.parametrize(("pwm_hz", "duty"), [(100.0, 20.0), (1000.0, 50.0), (25e3, 80.0)])
def test_bus_against_its_two_equations(pwm_hz: float, duty: float) -> None:
    """Mean and lowest capacitor voltage under a steady current, to 0.1 % of the supply's.

    Independent method: C·dv/dt = (V − v)/R − I in the on-time and −I in the off-time, stepped 4,000 times a period
    until it repeats.
    """
    volts, ohms, farad, amps = 12.0, 0.5, 220e-6, 0.05
    feed = bus(volts, ohms, farad, pwm_hz, duty)
    h, steps = 1.0 / pwm_hz / 4000.0, 4000
    v, mean, lowest, before = volts, 0.0, 0.0, 0.0
    for _ in range(400):
        total = 0.0
        for step in range(steps):
            into = (volts - v) / ohms if step < steps * duty / 100.0 else 0.0
            half = v + 0.5 * h * (into - amps) / farad
            into = (volts - half) / ohms if step < steps * duty / 100.0 else 0.0
            new = v + h * (into - amps) / farad
            total, v = total + 0.5 * h * (v + new), new
        mean, lowest = total * pwm_hz, v
        if abs(v - before) < 1e-7:
            break
        before = v
    assert feed.volts - feed.mean_ohms * amps == pytest.approx(mean, abs=0.012)
    assert feed.volts - feed.low_ohms * amps == pytest.approx(lowest, abs=0.012)


def test_bus_on_steady_supply_is_a_resistance() -> None:
    """At full duty the capacitor does nothing: mean and lowest are supply less R·I."""
    feed = bus(12.0, 0.5, 220e-6, 1000.0, 100.0)
    assert (feed.mean_ohms, feed.low_ohms) == (0.5, 0.5)


def test_power_balance_on_the_bus() -> None:
    """Supply power = winding's voltage times current + the electronics' own + the loss in the charging resistance."""
    feed = bus(12.0, 0.5, 220e-6, 1000.0, 100.0)
    for level in (0.3, 1.0):
        d = through_bus(feed, 14.0, 0.012, level, 1.5, 3.0)
        mean = 12.0 - 0.5 * d.supply_amps
        spent = d.winding_amps * (14.0 * d.winding_amps + 1.5) + 0.012 * mean + 0.5 * d.supply_amps**2
        assert 12.0 * d.supply_amps == pytest.approx(spent, rel=1e-12)


def test_limited_supply_gives_just_its_limit() -> None:
    """Where the limit acts the winding's equation holds at the lower voltage, and the current is the limit."""
    d = through_bus(bus(12.0, 0.5, 220e-6, 1000.0, 100.0), 14.0, 0.012, 0.8, 1.0, 0.2)
    assert d.limited
    assert d.supply_amps == 0.2
    assert 0.8 * (d.volts - 0.5 * 0.2) == pytest.approx(14.0 * d.winding_amps + 1.0, rel=1e-12)
    g = gated(12.0, 0.0, 5e-4, 1e-3, 1e-4, 0.0, 14.0, 0.01, 1.0, 0.1)
    assert g.limited
    assert 0.4 * (g.volts - 1.0) / 14.0 == pytest.approx(0.1 - 0.005, rel=1e-12)


def settled_rpm(kinds: type[Kinds], truth: ElectronicTruth, pwm_hz: float, duty: float) -> float:
    """Mean speed over 5 s, 10 s after a falling step from full duty."""
    fan = kinds.electronic(truth)
    fan.set_drive(pwm_hz, 100.0, True)
    fan.advance(5.0)
    fan.set_drive(pwm_hz, duty, True)
    fan.advance(15.0)
    return kinds.mean_rpm(fan, 5.0)


def test_each_on_time_must_exceed_the_wake_up_time(kinds: type[Kinds]) -> None:
    """Without hold-up it turns only where duty / frequency is longer than 0.4 ms, at every frequency tried."""
    truth = kinds.electronic_truth
    for pwm_hz in (100.0, 300.0, 1000.0):
        edge = 100.0 * truth.wake_s * pwm_hz
        assert settled_rpm(kinds, truth, pwm_hz, edge) == 0.0
        assert settled_rpm(kinds, truth, pwm_hz, edge + 12.0) > 500.0
    assert settled_rpm(kinds, truth, 3000.0, 99.0) == 0.0


def test_speed_of_the_woken_part(kinds: type[Kinds]) -> None:
    """The settled speed solves K·Ī = friction + load with Ī = a·(V − K·ω)/R, a = (ton − wake)/T, to 1 %.

    Independent method: the root by bisection; friction without spread.
    """
    t = replace(kinds.electronic_truth, running_friction_spread_percent=0.0)
    share = 0.4 - t.wake_s * 300.0
    low, high = 0.0, 400.0
    for _ in range(60):
        w = 0.5 * (low + high)
        torque = t.torque_constant_nm_per_a * share * (12.0 - t.torque_constant_nm_per_a * w) / t.resistance_ohm
        load = t.running_friction_nm + t.viscous_friction_nm_s * w + t.quadratic_load_nm_s2 * w * w
        low, high = (w, high) if torque > load else (low, w)
    assert settled_rpm(kinds, t, 300.0, 40.0) == pytest.approx(low * 30.0 / math.pi, rel=0.01)


def test_holdup_resets_below_a_frequency(kinds: type[Kinds]) -> None:
    """With 22 uF it runs on at 40 % and 3 kHz, and resets again and again at 100 Hz, where it hardly turns."""
    fast, slow = kinds.electronic(kinds.held_up_truth), kinds.electronic(kinds.held_up_truth)
    for fan, pwm_hz in ((fast, 3000.0), (slow, 100.0)):
        fan.set_drive(pwm_hz, 40.0, True)
        fan.advance(20.0)
    assert (fast.resets, slow.resets > 20) == (0, True)
    assert kinds.mean_rpm(fast, 5.0) > 2500.0
    assert kinds.mean_rpm(slow, 5.0) < 800.0


def test_holdup_hides_the_duty_and_spikes_instead(kinds: type[Kinds]) -> None:
    """At 25 kHz duty hardly sets the speed any more, and each on-time begins with a spike far above the mean.

    The spike is what the capacitor lacks over the charging resistance; over a period it makes up the charge drawn.
    """
    full, half = (settled_rpm(kinds, kinds.held_up_truth, 25e3, duty) for duty in (100.0, 40.0))
    assert half > 0.95 * full
    fan = kinds.electronic(kinds.held_up_truth)
    fan.set_drive(1000.0, 40.0, True)
    fan.advance(10.0)
    charge = fan.supply_amp_seconds
    spike = fan.peak_supply_amps
    fan.advance(11.0)
    mean = fan.supply_amp_seconds - charge
    assert spike > 10.0 * mean
    tau = fan.truth.charge_ohm * fan.truth.holdup_farad
    assert spike == pytest.approx(mean * 0.6e-3 / tau, rel=0.05)  # 0.6 ms off at 1 kHz; on-time is 36 τ


def test_soft_start_takes_its_time(kinds: type[Kinds]) -> None:
    """On steady supply the first second draws less the earlier it is, and a fan without a ramp is faster at once."""
    soft = kinds.electronic(replace(kinds.electronic_truth, soft_start_s=1.0))
    hard = kinds.electronic()
    drawn = []
    for fan in (soft, hard):
        fan.set_drive(1000.0, 100.0, True)
        fan.advance(0.1)
        drawn.append(fan.supply_amp_seconds)
        fan.advance(0.5)
    assert drawn[0] < 0.2 * drawn[1]
    assert soft.omega < 0.7 * hard.omega
    for fan in (soft, hard):
        fan.advance(8.0)
    assert soft.omega == pytest.approx(hard.omega, rel=0.03)


def locked(kinds: type[Kinds]) -> ElectronicFan:
    return kinds.electronic(replace(kinds.electronic_truth, breakaway_friction_nm=1.0))


def test_lock_protection_pushes_and_rests(kinds: type[Kinds]) -> None:
    """A held rotor is pushed for 0.5 s every 3.5 s (each a cell of 20 ms late at most), else only the electronics draw.

    The charge of ten rounds: 0.5 s at V/R beside the electronics' own.
    """
    fan = locked(kinds)
    fan.set_drive(1000.0, 100.0, True)
    fan.advance(35.0)
    assert fan.lockouts == 10
    pushed = 12.0 / fan.truth.resistance_ohm * 0.5 * 10
    assert fan.supply_amp_seconds == pytest.approx(pushed + 0.012 * 35.0, rel=0.05)
    assert fan.edges == 0


def test_chopping_defeats_lock_protection(kinds: type[Kinds]) -> None:
    """Without hold-up the timer begins anew in every period: a held rotor on a chopped supply is pushed for ever."""
    fan = locked(kinds)
    fan.set_drive(300.0, 60.0, True)
    fan.advance(20.0)
    assert fan.lockouts == 0
    assert fan.supply_amp_seconds > 20.0 * 0.4 * 12.0 / fan.truth.resistance_ohm


def test_it_restarts_by_itself_when_let_go(kinds: type[Kinds]) -> None:
    """Held for ten seconds and let go, it turns within the longest pause, without any new setting."""
    fan = locked(kinds)
    fan.set_drive(1000.0, 100.0, True)
    fan.advance(10.0)
    free = kinds.electronic()
    fan._breakaway = free._breakaway
    fan.advance(10.0 + fan.truth.lock_rest_s + 0.5 + 0.1)
    assert fan.turning
    assert fan.edges > 0


@pytest.mark.parametrize("backward_limit", [200.0, 1000.0])
def test_refuses_to_start_while_turning_backwards(kinds: type[Kinds], backward_limit: float) -> None:
    """Turned backwards at some 500 rpm by the draught it refuses where its limit is 200 rpm, and starts at 1000 rpm."""
    truth = replace(
        kinds.electronic_truth, draught_rpm=1200.0, breakaway_friction_nm=0.1e-3, running_friction_nm=0.05e-3,
        quadratic_load_nm_s2=8e-8, backward_limit_rpm=backward_limit,
    )  # fmt: skip
    fan = kinds.electronic(truth)
    fan.advance(60.0)
    assert -700.0 < fan.omega * 30.0 / math.pi < -300.0
    edges = fan.edges
    fan.set_drive(1000.0, 100.0, True)
    fan.advance(75.0)
    assert (fan.omega > 0.0) is (backward_limit == 1000.0)
    assert fan.edges > edges


def test_chopped_tachometer_against_its_line(kinds: type[Kinds]) -> None:
    """The edges counted are the falling edges of the line: low in the first half of each pulse, and only in on-times.

    Independent method: the line sampled every 20 us from a twin's angle, over 1 s at 300 Hz and 60 %. A sample more or
    less at the two ends.
    """
    fan, twin = (kinds.electronic(kinds.chopped_tach_truth) for _ in range(2))
    for one in (fan, twin):
        one.set_drive(300.0, 60.0, True)
        one.advance(4.0)
    before, falls, was_low = fan.edges, 0, False
    fan.advance(5.0)
    for step in range(1, 50_001):
        twin.advance(4.0 + step * 2e-5)
        low = twin.angle / math.pi % 1.0 < 0.5 and twin.pwm_phase_s() < 0.6 / 300.0
        falls, was_low = falls + (low and not was_low), low
    assert abs(fan.edges - before - falls) <= 1
    assert falls > 1.5 * kinds.mean_rpm(twin, 1.0) / 30.0  # two pulses a turn: the true count of a second


def test_chopped_tachometer_of_a_still_rotor(kinds: type[Kinds]) -> None:
    """A rotor that stands where its output should be low shows PWM edges as if it turned at 9000 rpm: a known trap."""
    fan = kinds.electronic(replace(kinds.chopped_tach_truth, breakaway_friction_nm=1.0))
    fan.set_drive(300.0, 50.0, True)
    fan.advance(2.0)
    assert fan.omega == 0.0
    assert fan.edges in (599, 600)
    assert fan.last_edge_at == pytest.approx(2.0, abs=1.0 / 300.0)


def test_soft_start_begins_when_the_refusal_ends(kinds: type[Kinds]) -> None:
    """A fan that refused while turning backwards ramps up from nothing once the draught lets it, however long it was.

    The draught is taken away after 10 s; half a second after the wheel is slow enough the level is about a half.
    """
    truth = replace(
        kinds.electronic_truth, soft_start_s=1.0, draught_rpm=1200.0, breakaway_friction_nm=0.1e-3,
        running_friction_nm=0.05e-3, quadratic_load_nm_s2=8e-8,
    )  # fmt: skip
    fan = kinds.electronic(truth)
    fan.advance(30.0)
    fan.set_drive(1000.0, 100.0, True)
    fan.advance(40.0)
    assert fan.omega < 0.0
    fan._draught = kinds.electronic()._draught
    while fan.omega * 30.0 / math.pi < -truth.backward_limit_rpm:
        fan.advance(fan.now + 0.02)
    fan.advance(fan.now + 0.5)
    assert fan.level == pytest.approx(0.5, abs=0.05)
