"""The simulated motor on its switch and supply, in time: what really happens, for the instruments to look at.

Looking never changes anything: states are committed at the grid's cell edges and at changed settings only, and what is
read in between is computed from there. No instrument, no noise of a reading, no analysis lives here.
"""

from __future__ import annotations

import copy
import math
import random
from collections.abc import Callable
from typing import Self

import numpy as np

from sweeprig.errors import SweeprigError
from sweeprig.simbench import stride
from sweeprig.simbench.friction import WanderingFriction, normal_source
from sweeprig.simbench.motor_truth import MotorTruth
from sweeprig.simbench.rotor import Motion, after, caught, linearised, mechanics_of, starts, time_to_stop, time_to_turn
from sweeprig.simbench.stage import PlainLowSide, Setting, Stage
from sweeprig.simbench.waveform import Waveform

CELL_S = stride.CELL_S
"""Grid of the random friction and of the look whether the rotor is caught or starts."""
HEAT_CELLS = stride.HEAT_CELLS
"""The winding's heat and resistance are renewed every so many cells, and at every start, stop and changed setting."""
AMBIENT_DEGC = 20.0
COPPER_PER_K = 1.0 / 254.5
"""Copper's temperature coefficient of resistance at 20 degC: 1 / (234.5 + 20) (checks 13.1, verified)."""

_Sums = stride.Sums


class Plant:
    """One motor with switch, freewheel diode and supply.

    truth, pulses_per_revolution   the motor, and its tachometer
    rng      draws the frictions; give the plant a generator of its own, for it draws ahead in blocks
    now      run clock at the beginning, s
    ripple   False: the peak torque is the mean torque, as if the current were smooth (for tests of the trend)
    stage    the power stage and its supply; without it the plain low-side switch on an ideal supply

    Attributes to read: `now`, `pwm_hz`, `duty_percent`, `drive_on` (the gate signal, as commanded), `supply_volts`,
    `supply_current_limit_amps`, `supply_on`; and, as of the last cell edge, `turning`, `stops` and `stopped_at` (how
    often, and when last, the rotor came to rest; −inf before). All else are properties, valid at `now`.
    """

    _limits_at_once = True
    """The supply lowers its voltage without delay when its current limit acts."""

    def __init__(
        self,
        truth: MotorTruth,
        pulses_per_revolution: float,
        rng: np.random.Generator | random.Random,
        now: float = 0.0,
        ripple: bool = True,
        stage: Stage | None = None,
    ) -> None:
        self.truth = truth
        self._stage: Stage = PlainLowSide() if stage is None else stage
        self.now = now
        self.ripple = ripple
        self.pwm_hz, self.duty_percent, self.drive_on = 1000.0, 0.0, False
        self.supply_volts, self.supply_current_limit_amps, self.supply_on = 0.0, 0.0, False
        self.turning = False
        self.stops, self.stopped_at = 0, -math.inf
        draw, correlation = normal_source(rng), truth.friction_correlation_s
        self._running = WanderingFriction(
            truth.running_friction_nm, truth.running_friction_spread_percent, correlation, CELL_S, draw
        )
        self._breakaway = WanderingFriction(
            truth.breakaway_friction_nm, truth.breakaway_friction_spread_percent, correlation, CELL_S, draw
        )
        self._origin = self._at = self._heated_at = self._pwm_since = now
        self._cell = self._friction_cell = 0
        self._sums = _Sums()
        self._bound_nm = 0.0
        self._edges_per_rad = pulses_per_revolution / (2.0 * math.pi)
        self._edges = 0
        self._edge_step: tuple[float, float, float, Motion] | None = None
        self._strides = type(self) is Plant
        self._fixed: stride.Still | None = None  # of the setting, once a stride has asked for it
        self._winding_degc, self._heat_watts = AMBIENT_DEGC, 0.0
        self._peek: tuple[_Sums, float] | None = None
        self._renew_electric(0.0)

    # ---- what the bench sets -------------------------------------------------------------------------------------

    def set_drive(self, pwm_hz: float, duty_percent: float, on: bool) -> None:
        """The gate signal from `now` on. A changed frequency, or switching on, begins a new PWM period."""
        if (pwm_hz, duty_percent, on) == (self.pwm_hz, self.duty_percent, self.drive_on):
            return
        if not (pwm_hz > 0.0 and 0.0 <= duty_percent <= 100.0):
            what, value = "the simulated drive cannot do this", f"{pwm_hz:g} Hz, {duty_percent:g} %"
            raise SweeprigError(what, value=value, allowed="more than 0 Hz, 0 to 100 %")
        self._commit()
        if pwm_hz != self.pwm_hz or (on and not self.drive_on):
            self._pwm_since = self.now
        self.pwm_hz, self.duty_percent, self.drive_on = pwm_hz, duty_percent, on
        self._settings_changed()

    def set_supply(self, volts: float, current_limit_amps: float, on: bool) -> None:
        """The supply from `now` on; its limit acts on the mean current, by lowering the voltage."""
        if (volts, current_limit_amps, on) == (self.supply_volts, self.supply_current_limit_amps, self.supply_on):
            return
        if not (volts >= 0.0 and current_limit_amps >= 0.0):
            what, value = "the simulated supply cannot do this", f"{volts:g} V, {current_limit_amps:g} A"
            raise SweeprigError(what, value=value, allowed="zero or more")
        self._commit()
        self.supply_volts, self.supply_current_limit_amps, self.supply_on = volts, current_limit_amps, on
        self._settings_changed()

    def bind(self, extra_nm: float) -> None:
        """A torque on top of both frictions from `now` on, Nm; infinite: the rotor is seized. For faults of the rig."""
        self._commit()
        self._bound_nm = extra_nm
        if self.turning and extra_nm == math.inf:
            self._stop()
        self._settings_changed()

    def use_stage(self, stage: Stage) -> Stage:
        """Another power stage from `now` on; returns the one before. For faults of the rig."""
        self._commit()
        before, self._stage = self._stage, stage
        self._settings_changed()
        return before

    def advance(self, to: float) -> None:
        """Let the physics run until `to` (run clock, s)."""
        if to < self.now:
            raise SweeprigError("time cannot run backwards", value=f"{to!r} s", allowed=f"from {self.now!r} s")
        self.now = to
        self._peek = None
        # while idle nothing can happen: the next changed setting makes one exact jump of it all
        while not self._idle:
            edge = self._origin + (self._cell + 1) * CELL_S
            if edge > to:
                return
            if self._strides and self.turning and edge + CELL_S <= to and stride.passed(self, to):
                continue
            self._flow_to(edge)
            self._enter_next_cell()

    def fork(self, draw: Callable[[], float]) -> Self:
        """A plant in the same state that goes on by itself, with the normals of `draw`."""
        twin = copy.copy(self)
        twin._running, twin._breakaway = self._running.fork(draw), self._breakaway.fork(draw)
        return twin

    # ---- what the bench sees -------------------------------------------------------------------------------------

    @property
    def omega(self) -> float:
        """Speed, rad/s."""
        return self._look()[1]

    @property
    def edges(self) -> int:
        """Tachometer edges so far."""
        return int(self._look()[0].angle * self._edges_per_rad)

    @property
    def last_edge_at(self) -> float:
        """When the last edge came (run clock, s), solved within the step; −inf before the first."""
        edges = self.edges
        step = self._edge_step
        if edges > self._edges:
            step = (self._at, self.now - self._at, self._sums.angle, self._motion)
        if step is None:
            return -math.inf
        began, seconds, angle, how = step
        return began + time_to_turn(how, edges / self._edges_per_rad - angle, min(seconds, time_to_stop(how)))

    @property
    def angle(self) -> float:
        """Angle turned so far, rad: the integral of the speed."""
        return self._look()[0].angle

    @property
    def motor_volt_seconds(self) -> float:
        """∫ mean motor voltage dt; the ripple within a PWM period is `wave`'s."""
        return self._look()[0].motor_vs

    @property
    def motor_amp_seconds(self) -> float:
        """∫ mean motor current dt."""
        return self._look()[0].motor_as

    @property
    def supply_amp_seconds(self) -> float:
        """∫ mean supply current dt."""
        return self._look()[0].supply_as

    @property
    def supply_volt_seconds(self) -> float:
        """∫ supply voltage dt, at its terminals: zero while off, less than set while the limit acts."""
        return self._look()[0].supply_vs

    @property
    def switch_amp_seconds(self) -> float:
        """∫ mean current in the switch's shunt dt: what the stage takes, with nothing smoothing it."""
        return self._look()[0].supply_as

    @property
    def node_volt_seconds(self) -> float:
        """∫ mean voltage of the switch node to supply minus dt."""
        sums, (of_supply, of_motor, ohms) = self._look()[0], self._stage.node
        return of_supply * sums.supply_vs + of_motor * sums.motor_vs + ohms * sums.motor_as

    @property
    def supply_limited(self) -> bool:
        """The supply does not hold its voltage now: the current limit acts."""
        emf = self.truth.torque_constant_nm_per_a * self.omega
        return self._may_limit and self._electric.mean_supply_current(emf) > self.supply_current_limit_amps

    @property
    def winding_degc(self) -> float:
        """Winding temperature, degC."""
        return self._winding_at(self.now)

    def wave(self) -> Waveform:
        """The present waveform of motor voltage and current, for instruments that resolve the PWM period."""
        emf = self.truth.torque_constant_nm_per_a * self.omega
        return self._electric_at(emf).wave(emf)

    def pwm_phase_s(self) -> float:
        """Seconds since the gate signal last went on, 0 up to one period."""
        return (self.now - self._pwm_since) % (1.0 / self.pwm_hz)

    # ---- electric side -------------------------------------------------------------------------------------------

    @property
    def _driven(self) -> bool:
        return self._stage.conducts(self._rail_volts, self.duty_percent, self.drive_on)

    @property
    def _rail_volts(self) -> float:
        """What the stage is fed with, V; an ideal supply's own voltage."""
        return self.supply_volts if self.supply_on else 0.0

    def _setting_now(self) -> Setting:
        volts, henry = self._rail_volts, self.truth.inductance_henry
        return self._stage.setting(volts, self._resistance, henry, self.pwm_hz, self.duty_percent, self._driven)

    def _settings_changed(self) -> None:
        self._renew_electric(self._omega_committed)
        if self._idle:
            return
        if not self.turning:
            self._try_start()
        self._relinearise()

    def _renew_electric(self, omega: float) -> None:
        """Coefficients, heat and standstill torques after anything they depend on has changed."""
        t = self.truth
        self._omega_committed, self._fixed = omega, None
        self._resistance = t.resistance_ohm * (1.0 + COPPER_PER_K * (self._winding_degc - AMBIENT_DEGC))
        self._electric = c = self._setting_now()
        self._feed = c.supply_volts, c.supply_ohms
        at_rest = c.mean_supply_current(0.0)
        self._may_limit = self._limits_at_once and at_rest > self.supply_current_limit_amps
        still = self._electric_at(0.0)
        standing = still.wave(0.0)
        self._standing_volts = still.supply_volts - still.supply_ohms * standing.mean_supply_amps
        self._mean_nm = t.torque_constant_nm_per_a * standing.mean_motor_amps
        self._peak_nm = t.torque_constant_nm_per_a * standing.peak_amps if self.ripple else self._mean_nm
        self._standing = standing
        emf = t.torque_constant_nm_per_a * omega
        present = standing if emf == 0.0 else self._electric_at(emf).wave(emf)
        self._heat_watts = self._resistance * present.mean_square_amps
        self._idle = not self.turning and not self._driven
        self._relinearise()

    def _electric_at(self, emf: float) -> Setting:
        """The coefficients at this back-EMF: with a lower voltage where the supply's current limit acts."""
        c, limit = self._electric, self.supply_current_limit_amps
        return c.limited(emf, limit) if self._may_limit and c.mean_supply_current(emf) > limit else c

    def _relinearise(self) -> None:
        omega, mechanics = self._omega_committed, mechanics_of(self.truth)
        k = mechanics[0]
        electric = self._electric_at(k * omega) if self._may_limit else self._electric
        amps, per_volt = electric.mean_current(k * omega)
        friction = self._running.torque + self._bound_nm
        self._motion = how = Motion._make(linearised(mechanics, amps, per_volt, omega, friction))
        if electric is self._electric:
            return
        # the supply's voltage rises with the back-EMF while its limit acts: the slope is that of both together
        aside = k * omega + 1e-3
        slope = (self._electric_at(aside).mean_current(aside)[0] - how.amps) / 1e-3 * k
        rate = how.rate + k * (slope - how.amps_slope) / self.truth.inertia_kg_m2
        self._motion = how._replace(rate=rate, amps_slope=slope)

    # ---- time ----------------------------------------------------------------------------------------------------

    def _flow_to(self, until: float) -> None:
        """Commit the state at `until`, within the present cell."""
        seconds = until - self._at
        sums, omega = self._flow(seconds)
        edges = int(sums.angle * self._edges_per_rad)
        if edges > self._edges:
            self._edges = edges
            self._edge_step = (self._at, seconds, self._sums.angle, self._motion)
        self._sums = sums
        self._omega_committed = omega
        self._at = until

    def _flow(self, seconds: float) -> tuple[_Sums, float]:
        """(integrals, speed) `seconds` after the committed state, with the friction of its cell; changes nothing."""
        s = self._sums
        if not self.turning:
            return self._rest(s, seconds), 0.0
        how = self._motion
        omega, turned = after(how, seconds)
        moving = seconds
        if omega <= 0.0:
            moving = min(seconds, time_to_stop(how))
            omega, turned = 0.0, after(how, moving)[1]
        k = self.truth.torque_constant_nm_per_a
        charge = how.amps * moving + how.amps_slope * (turned - how.speed * moving)
        emf = k * turned / moving if moving > 0.0 else 0.0
        electric, (volts, ohms) = self._electric, self._feed
        if self._may_limit and (limited := self._electric_at(emf)) is not electric:
            electric, volts, ohms = limited, limited.supply_volts, limited.supply_ohms
        drawn = electric.mean_supply_current(emf) * moving
        flowed = _Sums(
            s.angle + turned, s.motor_vs + self._resistance * charge + k * turned, s.motor_as + charge,
            s.supply_as + drawn, s.supply_vs + volts * moving - ohms * drawn,
        )  # fmt: skip
        return (flowed if moving == seconds else self._rest(flowed, seconds - moving)), omega

    def _rest(self, s: _Sums, seconds: float) -> _Sums:
        """Integrals over `seconds` at standstill."""
        w = self._standing
        return _Sums(
            s.angle, s.motor_vs + w.mean_motor_volts * seconds, s.motor_as + w.mean_motor_amps * seconds,
            s.supply_as + w.mean_supply_amps * seconds, s.supply_vs + self._standing_volts * seconds,
        )  # fmt: skip

    def _enter_next_cell(self) -> None:
        self._cell += 1
        if self._cell % HEAT_CELLS == 0:
            self._heat()
            self._renew_electric(self._omega_committed)
        self._friction_cell = self._cell
        self._running.next_cell()
        rough = self._breakaway.next_cell() + self._bound_nm
        if not self.turning:
            self._try_start()
        elif self._omega_committed <= 0.0 or caught(self.truth, self._omega_committed, rough, self._peak_nm):
            self._stop()
        if self.turning:
            self._relinearise()

    def _try_start(self) -> None:
        more = self._bound_nm
        if starts(self._breakaway.torque + more, self._peak_nm, self._mean_nm, self._running.torque + more):
            self.turning = True
            self._heat()
            self._renew_electric(0.0)

    def _stop(self) -> None:
        self.turning = False
        self.stops += 1
        self.stopped_at = self._at
        self._heat()
        self._renew_electric(0.0)

    def _winding_at(self, when: float) -> float:
        """First order towards ambient + R_th·P, exactly, with the heat of the last renewal."""
        final = AMBIENT_DEGC + self.truth.thermal_resistance_k_per_w * self._heat_watts
        fade = math.exp((self._heated_at - when) / self.truth.thermal_time_constant_s)
        return final + (self._winding_degc - final) * fade

    def _heat(self) -> None:
        self._winding_degc = self._winding_at(self._at)
        self._heated_at = self._at

    def _commit(self) -> None:
        """Bring the committed state to `now`: the rest of a step, or one jump over an idle gap of any length."""
        self._peek = None
        self._flow_to(self.now)
        if self._idle:
            self._cell = self._cell_of(self.now)
            self._running.skip(self._cell - self._friction_cell)
            self._breakaway.skip(self._cell - self._friction_cell)
            self._friction_cell = self._cell
        self._heat()

    def _cell_of(self, when: float) -> int:
        """The cell that holds `when`, by the same comparison that `advance` steps with."""
        return stride.cell_at(when, self._origin)

    def _look(self) -> tuple[_Sums, float]:
        if self._peek is None:
            self._peek = self._flow(self.now - self._at)
        return self._peek
