"""The plant with closer mechanics: cogging, slow PWM and sticking resolved where they matter, outer loads, either way.

Averaged, as in `plant`, wherever the rotor is well clear of its detents. The electric side is `plant`'s, heat and wear
are `aging_plant`'s, the single step is `resolved`'s; each law of load or cogging is its own file's.
"""

from __future__ import annotations

import math
import random

import numpy as np

from sweeprig.simbench.aging_plant import AgingPlant
from sweeprig.simbench.cogging import means
from sweeprig.simbench.fed_plant import FedPlant
from sweeprig.simbench.friction import WanderingFriction, normal_source
from sweeprig.simbench.load import RPM, Load
from sweeprig.simbench.motor_truth import DetailedTruth
from sweeprig.simbench.plant import CELL_S, HEAT_CELLS, _Sums
from sweeprig.simbench.resolved import Chopped, Moment, Shaft, Smooth, Track
from sweeprig.simbench.rotor import Motion, after, time_to_stop, time_to_turn
from sweeprig.simbench.source import Source
from sweeprig.simbench.stage import Stage

RESOLVED_FROM, AVERAGED_BELOW = 0.25, 0.20
"""Cogging depth (half its energy over the rotor's) from which it is resolved, and below which averaging takes over."""
SLOW_PWM = 0.1
"""A PWM period longer than this part of the mechanical time constant J·R/K² is resolved at any speed."""
RIPPLE = 0.1
"""While resolving, the current is averaged if its ripple is below this part of what holds the rotor."""
FLAT, SHALLOW, DEEPEST = 0.001, 0.01, 0.9
"""Cogging depth below which it is nothing; the current at the mean speed will do; and above which none is averaged."""
_COSINES = tuple(math.cos((place + 0.5) * math.pi / 8.0) for place in range(8))


class DetailedPlant(AgingPlant):
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
        self._load = truth.load or Load()
        self._cogging = truth.cogging
        self.resolved, self._position, self._way = False, 0.0, 1.0
        pitch = math.inf if self._cogging is None else math.pi / self._cogging.steps_per_revolution
        self._play = 0.0 if self._cogging is None else min(pitch, 0.5 * math.pi / pulses_per_revolution)
        self._pointer, self._amps = 0.0, 0.0
        self._track: Track | None = None
        self._over_angle = self._over_time = 1.0
        self._slow, self._resolvable = False, truth.cogging is not None
        self._mechanical_s = truth.inertia_kg_m2 * truth.resistance_ohm / truth.torque_constant_nm_per_a**2
        self._last_edge = -math.inf
        self._draught = 0.0
        super().__init__(truth, pulses_per_revolution, rng, now, ripple, stage)
        self._gusts: WanderingFriction | None = None
        if self._load.draught_rpm > 0.0:
            mean, spread = self._load.draught_rpm / RPM, self._load.draught_spread_percent
            draw = normal_source(rng)
            self._gusts = WanderingFriction(mean, spread, self._load.draught_correlation_s, CELL_S, draw)
            self._draught = self._gusts.torque
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
        return self._stepped.at(seconds).position if self.resolved else self._flow_averaged(seconds)[2]

    @property
    def last_edge_at(self) -> float:
        edges = self.edges
        if edges == self._edges:
            return self._last_edge
        return self._at + self._when(edges / self._edges_per_rad - self._sums.angle, self.now - self._at)

    # ---- torques -------------------------------------------------------------------------------------------------

    @property
    def _breakaway_nm(self) -> float:
        """What it takes to move a rotor that has rested since it stopped, Nm."""
        grown = self._load.stiction(self._at - self.stopped_at)
        return self._breakaway.torque * grown + self._bound_nm

    def _against(self, speed: float) -> tuple[float, float]:
        t = self.truth
        return self._load.against(speed, t.viscous_friction_nm_s, t.quadratic_load_nm_s2, self._draught)

    def _pushes(self) -> tuple[float, float, float]:
        """(least, mean, greatest) torque on the standing rotor within a PWM period, less load and cogging; Nm."""
        held = self._against(0.0)[0]
        if self._cogging is not None:
            held += self._cogging.torque(self._position)
        mean = self._mean_nm - held
        if not self.ripple or (self._resolvable and not self._chops):
            return mean, mean, mean
        k = self.truth.torque_constant_nm_per_a
        return k * self._standing.valley_amps - held, mean, k * self._standing.peak_amps - held

    def _leaves(self) -> float:
        """+1 or −1: the way in which the standing rotor sets out now; 0: it stays."""
        least, mean, greatest = self._pushes()
        breakaway = self._breakaway_nm
        if self._resolvable:
            return 1.0 if greatest > breakaway else -1.0 if least < -breakaway else 0.0
        running = self._running.torque + self._bound_nm
        if greatest > breakaway and mean > running:
            return 1.0
        return -1.0 if least < -breakaway and mean < -running else 0.0

    def _caught(self) -> bool:
        """A rough spot holds the averaged rotor, by its kinetic energy and by what pushes it on (as `rotor.caught`)."""
        least, _, greatest = self._pushes()
        ahead = greatest if self._way > 0.0 else -least
        spot = self._breakaway.torque + self._bound_nm - ahead
        energy = 0.5 * self.truth.inertia_kg_m2 * self._omega_committed**2
        return energy < spot * self.truth.barrier_angle_rad

    # ---- averaged or resolved ------------------------------------------------------------------------------------

    def _is_slow(self) -> bool:
        """The PWM period is not short against the mechanics."""
        return self._driven and self.duty_percent < 100.0 and self.pwm_hz * self._mechanical_s * SLOW_PWM < 1.0

    @property
    def _chops(self) -> bool:
        """While resolving, the current's ripple is resolved too."""
        if not (self.ripple and self._driven):
            return False
        ripple = self.truth.torque_constant_nm_per_a * (self._standing.peak_amps - self._standing.valley_amps)
        holds = self._breakaway.torque + (0.0 if self._cogging is None else self._cogging.amplitude_nm)
        return self._slow or ripple > RIPPLE * holds

    def _take_over(self) -> None:
        """From stepping to averaging, keeping the rotor's energy, where it is and stays clear of its detents."""
        cogging, inertia = self._cogging, self.truth.inertia_kg_m2
        level = abs(self._omega_committed)
        if cogging is not None:
            level = cogging.level(self._position, level, inertia)
        if self._slow or level == 0.0 or self._depth(level) >= AVERAGED_BELOW:
            return
        way = math.copysign(1.0, self._omega_committed)
        ahead = after(self._averaged(way * level), CELL_S)[0]
        if cogging is None or (ahead > 0.0 and self._depth(ahead) < AVERAGED_BELOW):
            self.resolved, self._way, self._omega_committed = False, way, way * level

    def _hand_over(self, ahead: float) -> bool:
        """From averaging to stepping, likewise, if the level at the cell's end would be `ahead`; True if done."""
        cogging, level = self._cogging, abs(self._omega_committed)
        if cogging is not None:
            least = min(level, ahead)
            if not self._slow and least > 0.0 and self._depth(least) <= RESOLVED_FROM:
                return False
            level = cogging.speed_at(self._position, level, self.truth.inertia_kg_m2)
        self.resolved, self._omega_committed = True, self._way * level
        self._amps = self._periodic_amps(self._omega_committed)
        return True

    def _depth(self, level: float) -> float:
        return 0.0 if self._cogging is None else self._cogging.depth(level, self.truth.inertia_kg_m2)

    def _periodic_amps(self, speed: float) -> float:
        """The motor's current now, as the periodic steady state at a speed has it."""
        emf = self.truth.torque_constant_nm_per_a * speed
        return self._electric_at(emf).wave(emf).value("motor_lead", (self._at - self._pwm_since) % (1.0 / self.pwm_hz))

    def _begin_track(self) -> None:
        t = self.truth
        setting = self._electric_at(t.torque_constant_nm_per_a * self._omega_committed)
        chops = self._chops
        current = Chopped(setting, self._resistance, t.inductance_henry) if chops else Smooth(setting)
        phase, left = current.at((self._at - self._pwm_since) % (1.0 / self.pwm_hz))
        shaft = Shaft(
            t.inertia_kg_m2, t.torque_constant_nm_per_a, self._running.torque + self._bound_nm, self._breakaway_nm,
            self._cogging, self._against, self._play,
        )  # fmt: skip
        begin = Moment(0.0, self._position, self._pointer, 0.0, self._omega_committed, self._amps, phase, left)
        self._track = Track(shaft, current, begin, self._mechanical_s)
        self._track_setting, self._track_chops = setting, chops

    def _relinearise(self) -> None:
        """The course from the last commit on: the averaged motion, or a new track of steps."""
        if not self.turning:
            return
        if self.resolved:
            self._take_over()
        if not self.resolved:
            self._motion = how = self._averaged(self._omega_committed)
            if not self._resolvable or not self._hand_over(after(how, CELL_S)[0]):
                return
        self._begin_track()

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
        for cosine in _COSINES:
            part = math.sqrt(1.0 + depth * cosine)
            here, per_volt = self._current_and_slope(emf * part)
            amps, slope = amps + here, slope + per_volt * part
        return amps / len(_COSINES), slope / len(_COSINES)

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
        s, m = self._sums, self._stepped.at(seconds)
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

    @property
    def _stepped(self) -> Track:
        assert self._track is not None
        return self._track

    def _when(self, travel: float, seconds: float) -> float:
        """When within `seconds` after the commit the pointer has gone `travel` further, s."""
        if self.resolved:
            return self._stepped.when(travel, seconds)
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
                m = self._stepped.at(seconds)
                position, pointer, amps = m.position, m.pointer, m.amps
        edges = int(sums.angle * self._edges_per_rad)
        if edges > self._edges:
            self._last_edge = self._at + self._when(edges / self._edges_per_rad - self._sums.angle, seconds)
            self._edges = edges
        self._position, self._pointer, self._amps = position, pointer, amps
        self._sums, self._omega_committed, self._at = sums, omega, until

    def _enter_next_cell(self) -> None:
        self._cell += 1
        if self._cell % HEAT_CELLS == 0:
            self._heat()
            self._renew_electric(self._omega_committed)
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
        self.turning, self._way, self.resolved = True, way, self._resolvable
        if self.resolved:
            self._amps = self._periodic_amps(0.0)
        self._renew_electric(0.0)

    def _stop(self) -> None:
        self._heat()
        self.turning = self.resolved = False
        self.stops += 1
        self.stopped_at = self._at
        self._renew_electric(0.0)


class DetailedFedPlant(FedPlant, DetailedPlant):
    """The same on a supply that is not ideal."""

    def __init__(
        self,
        truth: DetailedTruth,
        pulses_per_revolution: float,
        rng: np.random.Generator | random.Random,
        source: Source,
        now: float = 0.0,
        ripple: bool = True,
        stage: Stage | None = None,
    ) -> None:
        super().__init__(truth, pulses_per_revolution, rng, source, now, ripple, stage)
