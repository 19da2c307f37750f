"""The plant with closer mechanics, quickly: many cells in one go wherever nothing but the friction changes.

The mechanics are `closer`'s, the cells are `cells`'; here the plant's state is put in numbers and taken back.
"""

from __future__ import annotations

import random

import numpy as np

from sweeprig.simbench import closer
from sweeprig.simbench.cells import Course, Law, Wander, averaged_cells, resolved_cells, standing_cells
from sweeprig.simbench.closer import CloserPlant
from sweeprig.simbench.fed_plant import FedPlant
from sweeprig.simbench.friction import Normals
from sweeprig.simbench.load import FIRST_REST_S
from sweeprig.simbench.motor_truth import DetailedTruth
from sweeprig.simbench.plant import CELL_S, HEAT_CELLS, _Sums
from sweeprig.simbench.source import Source
from sweeprig.simbench.stage import Stage
from sweeprig.simbench.winding import TABLE, numbers

_STILL = Wander(1.0, 0.0, 0.0, 0.0)


class DetailedPlant(CloserPlant):
    """Constructed like `Plant`, with a `DetailedTruth`. `omega` is signed, `angle` is the way turned either way.

    resolved   steps are taken within the present cell, as of the last cell edge
    """

    _stale = _plain = False

    def advance(self, to: float) -> None:
        while not self._idle and (edge := self._origin + (self._cell + 1) * CELL_S) <= to:
            if not self._many(to):
                self._freshen()
                super().advance(edge)
        self._freshen()
        super().advance(to)

    def _freshen(self) -> None:
        """The course from the last commit on, if it was left to the cells."""
        if self._stale:
            self._stale = False
            if self.resolved:
                self._track_due = True
            elif self.turning:
                self._motion = self._averaged(self._omega_committed)

    def _many(self, to: float) -> bool:
        """As many cells in one go as there are until `to`, the next renewal of the heat, or something to decide."""
        if self._may_limit or self._at != self._origin + self._cell * CELL_S:
            return False
        until_heat, asked = HEAT_CELLS - self._cell % HEAT_CELLS, self._cell_of(to) - self._cell
        cells, open_end = min(until_heat, asked), until_heat <= asked
        source, each = self._running.normals, 2 if self._gusts is None else 3
        assert isinstance(source, Normals)
        course, done = self._course_after(source.ahead(each * cells), cells, open_end)
        if done == 0:
            return False
        open_end = open_end and done == cells
        source.pass_over(each * (done - open_end))
        self._adopt(course, done, open_end)
        return True

    def _course_after(self, normals: list[float], cells: int, open_end: bool) -> tuple[Course, int]:
        law, course, draws, plain = self._law(), self._course(), numbers(normals), self._plain
        shaft, where = self._shaft_now(), (self._cell, cells, open_end)
        if not self.turning:
            return standing_cells(law, shaft, self._curve, draws, course, *where, plain)
        winding, data = self._numbers_of(self._electric, self.resolved and self._chops)
        if winding.kind == TABLE:
            return course, 0
        if self.resolved:
            return resolved_cells(law, winding, data, shaft, self._curve, draws, course, *where, plain)
        return averaged_cells(law, winding, data, shaft, self._curve, draws, course, *where)

    def _renew_electric(self, omega: float) -> None:
        self._law_kept: Law | None = None
        super()._renew_electric(omega)

    def _law(self) -> Law:
        """What stays as it is until the next renewal."""
        if self._law_kept is None:
            self._plain = self._chops or not self.ripple
            self._law_kept = self._law_now()
        return self._law_kept

    def _law_now(self) -> Law:
        electric, still, t, load = self._electric, self._standing, self.truth, self._load
        k = t.torque_constant_nm_per_a
        peak, valley = (k * still.peak_amps, k * still.valley_amps) if self.ripple else (self._mean_nm, self._mean_nm)
        return Law(
            self._origin, CELL_S, self._pwm_since, 1.0 / self.pwm_hz, self._resistance, t.inductance_henry,
            float(electric.supply_volts), float(electric.supply_ohms), self._mean_nm, float(peak), float(valley),
            float(still.mean_motor_volts), float(still.mean_motor_amps), float(still.mean_supply_amps),
            float(self._standing_volts), float(self._bound_nm), float(t.barrier_angle_rad), self._edges_per_rad,
            closer.RESOLVED_FROM, closer.AVERAGED_BELOW, closer.BLURRED_BELOW, closer.SHARP_FROM,
            self._unlocked_from(),
            0.0 if self._cogging is None else self._cogging.half_depth_joule,
            load.stiction_percent_per_decade / 100.0, float(load.stiction_from_s), self.stopped_at, FIRST_REST_S,
            self._resolvable, self._slow, self._gusts is not None, Wander(*self._running.law),
            Wander(*self._breakaway.law), _STILL if self._gusts is None else Wander(*self._gusts.law),
        )  # fmt: skip

    def _course(self) -> Course:
        s = self._sums
        return Course(
            self._position, self._pointer, self._amps, self._omega_committed, self._way, s.angle, s.motor_vs,
            s.motor_as, s.supply_as, s.supply_vs, self._edges, self._last_edge, self._running.x, self._breakaway.x,
            0.0 if self._gusts is None else self._gusts.x, self._running.torque, self._breakaway.torque, self._draught,
        )  # fmt: skip

    def _adopt(self, c: Course, cells: int, open_end: bool) -> None:
        """Commit what `_course_after` found."""
        self._cell += cells
        self.now = self._at = self._origin + self._cell * CELL_S
        self._peek = None
        self._position, self._pointer, self._amps, self._omega_committed = c.position, c.pointer, c.amps, c.speed
        self._sums = _Sums(c.angle, c.motor_vs, c.motor_as, c.supply_as, c.supply_vs)
        self._edges, self._last_edge, self._draught = c.edges, c.edge_at, c.draught
        self._running.go_to(c.running_x, c.running_nm)
        self._breakaway.go_to(c.breakaway_x, c.breakaway_nm)
        if self._gusts is not None:
            self._gusts.go_to(c.gust_x, c.draught)
        self._stale = not open_end
        if open_end:
            self._cell -= 1
            self._enter_next_cell()
        self._friction_cell = self._cell


class DetailedFedPlant(FedPlant, CloserPlant):
    """The same on a supply that is not ideal, cell by cell: that one's voltage moves within them."""

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
