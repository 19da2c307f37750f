"""The closer mechanics, cell by cell: cogging, slow PWM and sticking resolved where they matter, either way round.

Averaged, as in `plant`, wherever the rotor is well clear of its detents. The electric side is `plant`'s, heat and wear
are `aging_plant`'s, torques are `loaded`'s, the single step is `resolved`'s, many cells in one go are `cells`'.
"""

from __future__ import annotations

import math
import random

import numpy as np

from sweeprig.simbench.cells import COSINES, DEEPEST, FLAT, SHALLOW
from sweeprig.simbench.cogging import means
from sweeprig.simbench.loaded import LoadedPlant
from sweeprig.simbench.motor_truth import DetailedTruth
from sweeprig.simbench.plant import CELL_S, HEAT_CELLS, _Sums
from sweeprig.simbench.resolved import Moment, run
from sweeprig.simbench.rotor import Motion, after, time_to_stop, time_to_turn
from sweeprig.simbench.stage import Stage
from sweeprig.simbench.winding import place_in

RESOLVED_FROM, AVERAGED_BELOW = 0.25, 0.20
"""Cogging depth (half its energy over the rotor's) from which it is resolved, and below which averaging takes over."""
BLURRED_BELOW, SHARP_FROM = 0.01, 0.012
"""At slow PWM a cogging less deep than this is left out of the steps: it changes a mean speed by depth² / 16 …"""
UNLOCKED = 2.5
"""… unless the rotor passes no more detents than this in a PWM period: it locks to the pulses, one or two each."""


class CloserPlant(LoadedPlant):
    """Constructed like `Plant`, with a `DetailedTruth`. `omega` is signed, `angle` is the way turned either way.

    resolved   steps are taken within the present cell, as of the last cell edge
    """

    def __init__(
        self,
        truth: DetailedTruth,
        pulses_per_revolution: float,
        rng: np.random.Generator | random.Random,
        now: float = 0.0,
        ripple: bool = True,
        stage: Stage | None = None,
    ) -> None:
        self._pointer, self._amps = 0.0, 0.0
        self._last_look: tuple[float, Moment] | None = None
        self._track_due = self._renewing = False
        self._over_angle = self._over_time = 1.0
        self._last_edge = -math.inf
        super().__init__(truth, pulses_per_revolution, rng, now, ripple, stage)
        self._renew_electric(0.0)
        self._try_start()

    # ---- what the bench sees -------------------------------------------------------------------------------------

    @property
    def omega(self) -> float:
        """Speed, rad/s, below zero backwards; over whole steps of the cogging where that is averaged."""
        speed = super().omega
        return speed if self.resolved else speed * self._over_time

    @property
    def position(self) -> float:
        """Signed shaft angle, rad."""
        if not self.turning:
            return self._position
        seconds = self.now - self._at
        return self._stepped(seconds).position if self.resolved else self._flow_averaged(seconds)[2]

    @property
    def last_edge_at(self) -> float:
        edges = self.edges
        if edges == self._edges:
            return self._last_edge
        return self._at + self._when(edges, self.now - self._at)

    # ---- averaged or resolved ------------------------------------------------------------------------------------

    def _take_over(self) -> None:
        """From stepping to averaging, keeping the rotor's energy, where it is and stays clear of its detents."""
        cogging, level = self._cogging, self._level()
        self._blur(level)
        if self._slow or level == 0.0 or self._depth(level) >= AVERAGED_BELOW:
            return
        way = math.copysign(1.0, self._omega_committed)
        ahead = after(self._averaged(way * level), CELL_S)[0]
        if cogging is None or (ahead > 0.0 and self._depth(ahead) < AVERAGED_BELOW):
            self.resolved, self._blurred, self._way, self._omega_committed = False, False, way, way * level

    def _level(self) -> float:
        """The speed (magnitude) that the stepped rotor's whole energy would be without cogging."""
        speed, cogging = abs(self._omega_committed), self._cogging
        if cogging is None or self._blurred:
            return speed
        return cogging.level(self._position, speed, self.truth.inertia_kg_m2)

    def _unlocked_from(self) -> float:
        """The speed above which the PWM passes unfelt by the detents, rad/s."""
        pitch = 0.0 if self._cogging is None else 2.0 * math.pi / self._cogging.steps_per_revolution
        return UNLOCKED * pitch * self.pwm_hz

    def _blur(self, level: float) -> None:
        """At slow PWM leave a cogging out that the rotor hardly feels, and take it in again, keeping the energy."""
        below = SHARP_FROM if self._blurred else BLURRED_BELOW
        blurred = self._slow and self._depth(level) < below and level > self._unlocked_from()
        if self._cogging is None or blurred is self._blurred:
            return
        if not blurred:
            level = self._cogging.speed_at(self._position, level, self.truth.inertia_kg_m2)
        self._blurred, self._omega_committed = blurred, math.copysign(level, self._omega_committed)

    def _hand_over(self, ahead: float) -> bool:
        """From averaging to stepping, likewise, if the level at the cell's end would be `ahead`; True if done."""
        cogging, level = self._cogging, abs(self._omega_committed)
        if cogging is not None:
            least = min(level, ahead)
            if not self._slow and least > 0.0 and self._depth(least) <= RESOLVED_FROM:
                return False
            level = cogging.speed_at(self._position, level, self.truth.inertia_kg_m2)
        self.resolved, self._blurred, self._omega_committed = True, False, self._way * level
        self._amps = self._periodic_amps(self._omega_committed)
        return True

    def _depth(self, level: float) -> float:
        return 0.0 if self._cogging is None else self._cogging.depth(level, self.truth.inertia_kg_m2)

    def _periodic_amps(self, speed: float) -> float:
        """The motor's current now, as the periodic steady state at a speed has it."""
        emf = self.truth.torque_constant_nm_per_a * speed
        return self._electric_at(emf).wave(emf).value("motor_lead", (self._at - self._pwm_since) % (1.0 / self.pwm_hz))

    def _begin_track(self) -> None:
        """The stretch of steps from the last commit on."""
        self._track_due = False
        self._track_setting = setting = self._electric_at(self.truth.torque_constant_nm_per_a * self._omega_committed)
        self._track_chops = self._chops
        self._winding = self._numbers_of(setting, self._track_chops)
        phase, left = place_in(*self._winding, (self._at - self._pwm_since) % (1.0 / self.pwm_hz))
        self._shaft = self._shaft_now()
        self._begin = Moment(
            0.0, self._position, self._pointer, 0.0, self._omega_committed, self._amps, phase, float(left), 0.0, 0.0
        )
        self._last_look = None

    def _relinearise(self) -> None:
        """The course from the last commit on: the averaged motion, or a new track of steps."""
        if not self.turning or self._renewing:  # within a renewal at the edge of a cell this follows later
            return
        if self.resolved:
            self._take_over()
        if not self.resolved:
            self._motion = how = self._averaged(self._omega_committed)
            if not self._resolvable or not self._hand_over(after(how, CELL_S)[0]):
                return
        self._track_due = True

    def _averaged(self, speed: float) -> Motion:
        """J·du/dt = T(a·u)·b of the speed's level u (magnitude), with the cogging's means a and b; linearised."""
        t, k = self.truth, self.truth.torque_constant_nm_per_a
        way = self._way if speed == 0.0 else math.copysign(1.0, speed)
        depth = self._depth(abs(speed))
        self._over_angle, self._over_time = means(depth) if FLAT < depth < DEEPEST else (1.0, 1.0)
        a, b = self._over_angle, self._over_time
        amps, per_volt = self._mean_current(k * speed, min(depth, DEEPEST))
        load, rise = self._against(a * speed)
        torque = (k * amps - load) * way - self._running.torque - self._bound_nm
        rate = (k * k * per_volt - rise * a) * b / t.inertia_kg_m2
        return Motion(abs(speed), torque * b / t.inertia_kg_m2, rate, amps, k * per_volt * way)

    def _mean_current(self, emf: float, depth: float) -> tuple[float, float]:
        """(mean current, its derivative by `emf`) over the angle, `emf` the back-EMF of the speed's level.

        Quadrature after Gauss and Chebyshev over the cogging's phase: the current is not linear in the back-EMF where
        it becomes discontinuous.
        """
        if depth < SHALLOW:
            return self._current_and_slope(emf)
        amps = slope = 0.0
        for cosine in COSINES:
            part = math.sqrt(1.0 + depth * cosine)
            here, per_volt = self._current_and_slope(emf * part)
            amps, slope = amps + here, slope + per_volt * part
        return amps / len(COSINES), slope / len(COSINES)

    def _current_and_slope(self, emf: float) -> tuple[float, float]:
        electric = self._electric_at(emf)
        amps, per_volt = electric.mean_current(emf)
        if electric is not self._electric:
            # the supply's voltage rises with the back-EMF while its limit acts: the slope is that of both together
            per_volt = (self._electric_at(emf + 1e-3).mean_current(emf + 1e-3)[0] - amps) / 1e-3
        return amps, per_volt

    # ---- time ----------------------------------------------------------------------------------------------------

    def _flow(self, seconds: float) -> tuple[_Sums, float]:
        if not self.turning:
            return self._rest(self._sums, seconds), 0.0
        if self.resolved:
            return self._flow_resolved(seconds)
        return self._flow_averaged(seconds)[:2]

    def _flow_resolved(self, seconds: float) -> tuple[_Sums, float]:
        s, m = self._sums, self._stepped(seconds)
        k, setting = self.truth.torque_constant_nm_per_a, self._track_setting
        across = self._resistance * m.motor_as + k * (m.position - self._position)
        if self._track_chops:
            across += self.truth.inductance_henry * (m.amps - self._amps)
        supply = setting.supply_volts * seconds - setting.supply_ohms * m.supply_as
        return _Sums(
            s.angle + m.travel, s.motor_vs + across, s.motor_as + m.motor_as, s.supply_as + m.supply_as,
            s.supply_vs + supply,
        ), m.speed  # fmt: skip

    def _flow_averaged(self, seconds: float) -> tuple[_Sums, float, float, float]:
        """(integrals, signed level, position, pointer) after `seconds`."""
        s, how, k = self._sums, self._motion, self.truth.torque_constant_nm_per_a
        level, turned = after(how, seconds)
        moving = seconds
        if level <= 0.0:
            moving = min(seconds, time_to_stop(how))
            level, turned = 0.0, after(how, moving)[1]
        charge = how.amps * moving + how.amps_slope * (turned - how.speed * moving)
        gone = turned * self._over_time * self._way
        position = self._position + gone
        pointer = max(position - self._play, min(position + self._play, self._pointer))
        emf = k * gone / moving if moving > 0.0 else 0.0
        electric = self._electric_at(emf)
        drawn = electric.mean_supply_current(emf) * moving
        flowed = _Sums(
            s.angle + abs(pointer - self._pointer),
            s.motor_vs + self._resistance * charge + k * gone,
            s.motor_as + charge,
            s.supply_as + drawn,
            s.supply_vs + electric.supply_volts * moving - electric.supply_ohms * drawn,
        )
        sums = flowed if moving == seconds else self._rest(flowed, seconds - moving)
        return sums, level * self._way, position, pointer

    def _stepped(self, seconds: float) -> Moment:
        """How things stand `seconds` after the commit."""
        if self._track_due:
            self._begin_track()
        if self._last_look is None or self._last_look[0] != seconds:
            here = run(*self._winding, self._shaft, self._curve, self._begin, seconds, math.inf, 1.0)[0]
            self._last_look = seconds, here
        return self._last_look[1]

    def _when(self, edge: int, seconds: float) -> float:
        """When within `seconds` after the commit the tachometer's edge of this number came, s."""
        travel = edge / self._edges_per_rad - self._sums.angle
        if self.resolved:
            self._stepped(seconds)
            each = 1.0 / self._edges_per_rad
            passed = run(*self._winding, self._shaft, self._curve, self._begin, seconds, travel, each)[1]
            return seconds if passed < 0.0 else passed
        until = min(seconds, time_to_stop(self._motion))
        lag = self._play - self._way * (self._position - self._pointer)
        return time_to_turn(self._motion, (travel + lag) / self._over_time, until)

    def _flow_to(self, until: float) -> None:
        seconds = until - self._at
        position, pointer, amps = self._position, self._pointer, self._amps
        if self.turning and not self.resolved:
            sums, omega, position, pointer = self._flow_averaged(seconds)
        else:
            sums, omega = self._flow(seconds)
            if self.turning:
                m = self._stepped(seconds)
                position, pointer, amps = m.position, m.pointer, m.amps
        edges = int(sums.angle * self._edges_per_rad)
        if edges > self._edges:
            self._last_edge = self._at + self._when(edges, seconds)
            self._edges = edges
        self._position, self._pointer, self._amps = position, pointer, amps
        self._sums, self._omega_committed, self._at = sums, omega, until

    def _enter_next_cell(self) -> None:
        self._cell += 1
        if self._cell % HEAT_CELLS == 0:
            self._heat()
            self._renewing = True
            self._renew_electric(self._omega_committed)
            self._renewing = False
        self._friction_cell = self._cell
        self._running.next_cell()
        self._breakaway.next_cell()
        if self._gusts is not None:
            self._draught = self._gusts.next_cell()
        if not self.turning:
            self._try_start()
        elif self._stands_now():
            self._stop()
        else:
            self._relinearise()

    def _stands_now(self) -> bool:
        if self._omega_committed == 0.0:
            return not (self._resolvable or self.resolved) or self._leaves() == 0.0
        return not (self._resolvable or self.resolved) and self._caught()

    def _settings_changed(self) -> None:
        self._renew_electric(self._omega_committed)
        if not self.turning:
            self._try_start()

    def _renew_electric(self, omega: float) -> None:
        self._slow = self._is_slow()
        self._resolvable = self._slow or self._cogging is not None
        super()._renew_electric(omega)
        if self._idle and (self._load.pushes_at_rest or self._leaves() != 0.0):
            self._idle = False

    def _try_start(self) -> None:
        way = self._leaves()
        if way == 0.0:
            return
        self._heat()
        self.turning, self._way, self.resolved, self._blurred = True, way, self._resolvable, False
        if self.resolved:
            self._amps = self._periodic_amps(0.0)
        self._renew_electric(0.0)

    def _stop(self) -> None:
        self._heat()
        self.turning = self.resolved = False
        self.stops += 1
        self.stopped_at = self._at
        self._renew_electric(0.0)
