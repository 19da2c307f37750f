"""Stepping through PWM period and cogging: adaptive integrator, energy, step size, sticking; and cogging's means."""

import itertools
import math

import numpy as np
import pytest
from scipy import integrate, special

from sweeprig.simbench import resolved
from sweeprig.simbench.chopper import chopper
from sweeprig.simbench.cogging import Cogging, means
from sweeprig.simbench.load import Load
from sweeprig.simbench.resolved import Moment, Shaft, longest_steps, run, step
from sweeprig.simbench.winding import Numbers, Winding, averaged, chopped, numbers, place_in

R, L, K, J = 11.2, 10.5e-3, 0.0283, 7.6e-6
RUNNING, VISCOUS, QUADRATIC = 1.5e-3, 1.2e-5, 4e-8
COGGING = Cogging(2e-3, 12)
Array = np.ndarray[tuple[int], np.dtype[np.float64]]


def against(speed: float) -> tuple[float, float]:
    return Load().against(speed, VISCOUS, QUADRATIC)


class Track:
    """A stretch, stepped from its begin whenever it is looked at, as the plant does."""

    def __init__(self, winding: tuple[Winding, Numbers], shaft: Shaft, begin: Moment) -> None:
        self.winding, self.shaft, self.begin, self.curve = winding, shaft, begin, numbers(())

    def at(self, seconds: float) -> Moment:
        return run(*self.winding, self.shaft, self.curve, self.begin, seconds, math.inf, 1.0)[0]

    def marked(self, seconds: float, first: float, each: float) -> float:
        return run(*self.winding, self.shaft, self.curve, self.begin, seconds, first, each)[1]

    def moments(self, seconds: float) -> list[Moment]:
        found = [self.begin]
        while found[-1].seconds < seconds:
            found.append(step(*self.winding, self.shaft, self.curve, found[-1], seconds - found[-1].seconds))
        return found


def shaft_of(running: float, breakaway: float, play: float, mechanical_s: float) -> Shaft:
    steps = longest_steps(J, COGGING.amplitude_nm, 12.0, mechanical_s)
    return Shaft(J, K, running, breakaway, COGGING.amplitude_nm, 12.0, VISCOUS, QUADRATIC, 0.0, 0.0, play, *steps)


def track(pwm_hz: float, duty: float, speed: float, smooth: bool = False, breakaway: float = 2.5e-3) -> Track:
    setting = chopper(12.0, R, L, pwm_hz, duty)
    winding = averaged(setting, 0.0, 0.0, 12.0) if smooth else chopped(setting, R, L)
    phase, left = place_in(*winding, 0.0)
    begin = Moment(0.0, 0.0, 0.0, 0.0, speed, 0.0, phase, float(left), 0.0, 0.0)
    return Track(winding, shaft_of(RUNNING, breakaway, 0.0, J * R / K**2), begin)


def mechanics(state: Array, amps: float) -> list[float]:
    angle, speed = float(state[0]), float(state[1])
    held = RUNNING + VISCOUS * speed + QUADRATIC * speed * speed + 2e-3 * math.sin(12.0 * angle)
    return [speed, (K * amps - held) / J]


def by_adaptive_steps(pwm_hz: float, duty: float, speed: float, until: float) -> Array:
    """(angle, speed, current) at `until` by scipy's LSODA at 1e-10, restarted wherever switch or diode act."""
    period, on = 1.0 / pwm_hz, duty / 100.0 / pwm_hz
    state, time = np.array([0.0, speed, 0.0]), 0.0
    while time < until - 1e-12:
        phase = round((time / period) % 1.0, 9) * period % period
        end = min(until, time + (on - phase if phase < on - 1e-12 else period - phase))
        volts = 12.0 if phase < on - 1e-12 else -0.5
        conducting = volts > 0.0 or state[2] > 0.0

        def slope(_: float, x: Array, volts: float = volts, conducting: bool = conducting) -> list[float]:
            rate = (volts - R * float(x[2]) - K * float(x[1])) / L if conducting else 0.0
            return [*mechanics(x, float(x[2])), rate]

        def empty(_: float, x: Array) -> float:
            return float(x[2])

        setattr(empty, "terminal", True)  # noqa: B010
        setattr(empty, "direction", -1.0)  # noqa: B010
        events = [empty] if conducting and volts < 0.0 else None
        found = integrate.solve_ivp(slope, (time, end), state, method="LSODA", rtol=1e-10, atol=1e-12, events=events)
        state, reached = found.y[:, -1], float(found.t[-1])
        if reached < end - 1e-12:
            state[2] = 0.0
        time = reached
    return state


@pytest.mark.parametrize(
    ("pwm_hz", "duty", "speed"), [(1000.0, 25.0, 60.0), (300.0, 15.0, 40.0), (50.0, 20.0, 90.0), (100.0, 8.0, 25.0)]
)
def test_steps_against_an_adaptive_integrator(pwm_hz: float, duty: float, speed: float) -> None:
    """After 0.1 s angle and speed are within 0.05 % of scipy's, with continuous and discontinuous current.

    Independent method: LSODA at 1e-10 on current, speed and angle, restarted at each switching and each empty winding.
    """
    here = track(pwm_hz, duty, speed).at(0.1)
    angle, found, _ = by_adaptive_steps(pwm_hz, duty, speed, 0.1)
    assert here.position == pytest.approx(angle, rel=5e-4)
    assert here.speed == pytest.approx(found, rel=1e-3)
    assert here.travel == here.position


def test_smooth_current_against_an_adaptive_integrator() -> None:
    """With the mean current the steps follow scipy's DOP853 at 1e-10 over 0.2 s to 0.02 % in angle."""
    setting = chopper(12.0, R, L, 25e3, 20.0)

    def slope(_: float, x: Array) -> list[float]:
        return mechanics(x, setting.mean_current(K * float(x[1]))[0])

    exact = integrate.solve_ivp(slope, (0.0, 0.2), [0.0, 60.0], method="DOP853", rtol=1e-10, atol=1e-12).y[:, -1]
    here = track(25e3, 20.0, 60.0, smooth=True).at(0.2)
    assert (here.position, here.speed) == pytest.approx((exact[0], exact[1]), rel=2e-4)


def test_halved_steps_quarter_the_error() -> None:
    """The steps are of second order: halving all of them changes the angle three times less than the halving before."""
    angles = []
    for scale in (1.0, 0.5, 0.25):
        steps = track(25e3, 20.0, 60.0, smooth=True)
        # far from the barrier the clear rotor's step is the one that is taken
        steps.shaft = steps.shaft._replace(longest_s=steps.shaft.longest_s * scale, clear_s=steps.shaft.clear_s * scale)
        angles.append(steps.at(0.1).position)
    assert abs(angles[2] - angles[1]) < abs(angles[1] - angles[0]) / 3.0
    assert angles[0] != angles[1]


@pytest.mark.parametrize("speed", [14.0, 9.5])
def test_over_the_crest_against_an_adaptive_integrator(speed: float) -> None:
    """A rotor that only just passes its first crests has done the way of scipy's DOP853 at 1e-11 to 0.2 % by 0.15 s."""
    setting = chopper(12.0, R, L, 25e3, 12.0)

    def slope(_: float, x: Array) -> list[float]:
        return mechanics(x, setting.mean_current(K * float(x[1]))[0])

    exact = integrate.solve_ivp(slope, (0.0, 0.15), [0.0, speed], method="DOP853", rtol=1e-11, atol=1e-12)
    assert np.min(exact.y[1]) > 0.0
    assert np.min(exact.y[1]) < 0.9 * speed
    here = track(25e3, 12.0, speed, smooth=True).at(0.15)
    assert here.position == pytest.approx(exact.y[0, -1], rel=2e-3)


@pytest.mark.parametrize(("pwm_hz", "duty", "speed"), [(300.0, 15.0, 40.0), (50.0, 6.0, 0.0), (1000.0, 40.0, 0.0)])
def test_energy_balance(pwm_hz: float, duty: float, speed: float) -> None:
    """Supply gives what copper, diode, friction, load, coil, detent and rotor take, to 0.2 % of it, sticking included.

    The losses are summed from the moments of the track (independent of its own sums): midpoints.
    """
    moments = track(pwm_hz, duty, speed).moments(0.4)
    lost = 0.0
    for a, b in itertools.pairwise(moments):
        h, w = b.seconds - a.seconds, 0.5 * (a.speed + b.speed)
        gone = b.position - a.position
        lost += gone * math.copysign(RUNNING, w) + (VISCOUS * w + QUADRATIC * w * abs(w)) * w * h
    end, begin = moments[-1], moments[0]
    # of the electric side only what crosses into the shaft: K·∫ω·i = ∫(torque of the current)·ω
    work = sum(
        K * (b.motor_as - a.motor_as) * (b.position - a.position) / (b.seconds - a.seconds)
        for a, b in itertools.pairwise(moments)
    )
    stored = 0.5 * J * (end.speed**2 - begin.speed**2) + COGGING.energy(end.position) - COGGING.energy(begin.position)
    assert work == pytest.approx(lost + stored, abs=2e-3 * (lost + abs(stored)))
    assert work > 1e-5


def test_nothing_moves_below_breakaway_and_everything_above() -> None:
    """A rotor at rest stays as long as current and detent together stay below the breakaway friction, else it slips."""
    held = track(25e3, 10.0, 0.0, smooth=True, breakaway=2.5e-3).at(0.5)
    mean = K * chopper(12.0, R, L, 25e3, 10.0).mean_current(0.0)[0]
    assert mean < 2.5e-3
    assert (held.position, held.speed, held.travel) == (0.0, 0.0, 0.0)
    free = track(25e3, 10.0, 0.0, smooth=True, breakaway=mean - 1e-5).at(0.5)
    assert free.position > 0.0


def test_rocking_in_a_detent_is_no_travel() -> None:
    """A rotor that swings and comes to rest in a detent moves the tachometer's pointer by less than a pulse."""
    winding = averaged(chopper(0.0, R, L, 1000.0, 0.0), 0.0, 0.0, 12.0)
    begin = Moment(0.0, 0.1, 0.1, 0.0, 0.0, 0.0, 0, math.inf, 0.0, 0.0)
    moments = Track(winding, shaft_of(1e-5, 2e-5, math.pi / 12.0, 0.1), begin).moments(3.0)
    end, ways = moments[-1], [m.position for m in moments]
    assert min(ways) < -0.05
    assert end.travel == 0.0
    assert end.speed == 0.0
    assert abs(end.position) < 0.02


def test_marks_are_found_when_the_pointer_passes_them() -> None:
    """At the time of the last mark passed the way just is the mark, to 1e-3 rad; before the first there is none."""
    steps = track(300.0, 15.0, 40.0)
    end = steps.at(0.3).travel
    for each in (0.0017, 0.3, 1.7):
        for until in (0.2, 0.25, 0.2517, 0.3):
            passed = math.floor((steps.at(until).travel - 0.2) / each) * each + 0.2
            assert steps.at(steps.marked(until, 0.2, each)).travel == pytest.approx(passed, abs=1e-3)
    assert steps.marked(0.3, end + 0.1, 1.0) == -1.0


def test_a_rotor_that_stays_is_one_step() -> None:
    """Held by its breakaway friction on a mean current, or on pulses too weak to move it, it is not stepped through."""
    assert len(track(25e3, 10.0, 0.0, smooth=True).moments(0.5)) == 2
    weak = track(1000.0, 2.0, 0.0)
    assert len(weak.moments(0.1)) == 1 + 2 * 100


@pytest.mark.parametrize("speed", [-500.0, -60.0, -1.0, 0.0, 3.0, 50.0, 104.0, 200.0, 900.0])
def test_load_in_numbers_is_the_load(speed: float) -> None:
    """The outer load for the steps is `Load.against`: viscous, quadratic, draught, constant, curve and beyond it."""
    load = Load(constant_nm=2e-4, curve_rpm=(0.0, 500.0, 1500.0), curve_nm=(0.0, 1e-4, 5e-4))
    shaft = shaft_of(RUNNING, 2.5e-3, 0.0, 0.1)._replace(draught=7.0, constant_nm=2e-4)
    curve = numbers([x for corner in load.corners() for x in corner])
    assert resolved.against(shaft, curve, speed) == pytest.approx(
        load.against(speed, VISCOUS, QUADRATIC, 7.0), rel=1e-12
    )


@pytest.mark.parametrize("depth", [0.001, 0.01, 0.1, 0.2, 0.25])
def test_means_against_elliptic_integrals(depth: float) -> None:
    """Mean speed over angle and over time are those of scipy's complete elliptic integrals, to 5e-6.

    Independent method: with m = 2d/(1+d), over angle 2/π·√(1+d)·E(m), over time π/2·√(1+d)/K(m).
    """
    m, root = 2.0 * depth / (1.0 + depth), math.sqrt(1.0 + depth)
    over_angle, over_time = means(depth)
    assert over_angle == pytest.approx(2.0 / math.pi * root * float(special.ellipe(m)), abs=5e-6)
    assert over_time == pytest.approx(0.5 * math.pi * root / float(special.ellipk(m)), abs=1e-12)


def test_torque_is_the_slope_of_energy() -> None:
    """Cogging torque is dU/dθ by central differences, and energy level and speed turn into each other."""
    for angle in (0.0, 0.1, 0.31, 2.9):
        slope = (COGGING.energy(angle + 1e-6) - COGGING.energy(angle - 1e-6)) / 2e-6
        assert COGGING.torque(angle) == pytest.approx(slope, abs=1e-9)
        level = COGGING.level(angle, 30.0, J)
        assert COGGING.speed_at(angle, level, J) == pytest.approx(30.0, rel=1e-12)
    assert COGGING.depth(0.0, J) == math.inf
