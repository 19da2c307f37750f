"""A load capacitor across the motor: any switched stage, with a capacitor and its resistance between stage and winding.

The periodic steady state, exactly: between two events the circuit is linear with two states (`second_order`). Which
circuits a stage has is `bridge`'s; no mechanics, no time series.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

from sweeprig.errors import ConfigError, SweeprigError
from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.second_order import Course, Pair, system
from sweeprig.simbench.switched import Branch, Phase, at_limit
from sweeprig.simbench.waveform import Part, Place, Segment, Waveform

_ROUNDS = 60
_CLOSED = 1e-11
"""What is left of the gap of a period, as a part of what the states are."""
_SLACK = 1e-12
"""Part of the supply's voltage (plus 1 V) by which a diode may be driven without conducting: rounding."""
_MOST_PIECES = 200
_KEPT = 8


@dataclass(frozen=True, slots=True)
class CapacitorStage:
    """Keeps the `Stage` protocol: a stage of real parts with a capacitor across its output, at the motor's terminals.

    farad   its capacity; ohms: its series resistance, which with the switch's limits the charging current
    The motor's lead is between capacitor and winding: its current is the winding's. Supply lead and switch shunt see
    the charging current.
    """

    stage: SwitchedStage
    farad: float
    ohms: float

    def __post_init__(self) -> None:
        """ConfigError for values that no capacitor has."""
        if not (self.farad > 0.0 and self.ohms > 0.0):
            what, remedy = "the load capacitor cannot be like this", "Correct [simulated_stage] of the rig file"
            value = f"{self.farad:g} F, {self.ohms:g} ohm"
            raise ConfigError(what, value=value, allowed="both above zero", remedy=remedy, topic="simbench")

    @property
    def node(self) -> tuple[float, float, float]:
        """As without: the capacitor's mean current is zero, so that the means still fulfil it."""
        return self.stage.node

    def conducts(self, supply_v: float, duty_percent: float, drive_on: bool) -> bool:
        return self.stage.conducts(supply_v, duty_percent, drive_on)

    def setting(
        self, supply_v: float, resistance_ohm: float, inductance_henry: float, pwm_hz: float, duty_percent: float,
        conducts: bool,
    ) -> CapacitorSetting:  # fmt: skip
        bare = self.stage.setting(supply_v, resistance_ohm, inductance_henry, pwm_hz, duty_percent, conducts)
        open_circuit = not conducts and not self.stage.holds_bus

        def again(volts: float) -> CapacitorSetting:
            return self.setting(volts, resistance_ohm, inductance_henry, pwm_hz, duty_percent, conducts)

        return CapacitorSetting(self, supply_v, resistance_ohm, inductance_henry, bare.phases, open_circuit, again)


class _Way(NamedTuple):
    """One circuit at one back-EMF: its system, where it comes to rest, and the stage's current by the states.

    branch    None: neither switch nor diode conducts
    by_emf    d(rest)/d(back-EMF)
    stage     (constant, by winding current, by capacitor voltage) of the current that the stage gives, A
    """

    branch: Branch | None
    system: Course
    by_emf: Pair
    stage: tuple[float, float, float]


_Ways = tuple[_Way, _Way, _Way]


class _Piece(NamedTuple):
    """A stretch in which one circuit conducts; the states are (winding current A, capacitor voltage V)."""

    seconds: float
    course: Course
    way: _Way


class _Found(NamedTuple):
    """A periodic state: its begin, its derivative by the back-EMF, the pieces."""

    begin: Pair
    by_emf: Pair
    pieces: list[_Piece]


class CapacitorPart(NamedTuple):
    """A piece of the waveform, by place: value = constant + by_amps·winding current + by_volts·capacitor voltage."""

    begin_s: float
    seconds: float
    course: Course
    places: dict[Place, tuple[float, float, float]]

    def value(self, place: Place, seconds: float) -> float:
        """Volts or amperes at a place, `seconds` after its begin."""
        constant, by_amps, by_volts = self.places[place]
        amps, volts = self.course.at(seconds)
        return constant + by_amps * amps + by_volts * volts

    def integral(self, place: Place, seconds: float) -> float:
        """Its integral, V·s or A·s, over its first `seconds`."""
        constant, by_amps, by_volts = self.places[place]
        charge, flux = self.course.integral(seconds)
        return constant * seconds + by_amps * charge + by_volts * flux

    def most(self, place: Place) -> float:
        """The greatest value at a place."""
        row = self.places[place][1:]
        times = (0.0, self.seconds, *self.course.extremes(row, self.seconds))
        return max(self.value(place, at) for at in times)

    def least(self, place: Place) -> float:
        row = self.places[place][1:]
        times = (0.0, self.seconds, *self.course.extremes(row, self.seconds))
        return min(self.value(place, at) for at in times)


@dataclass(frozen=True, slots=True)
class CapacitorWave(Waveform):
    """The waveform of a stage with a load capacitor. peak_supply_amps: the charging spike, where there is one."""

    period: float
    parts: tuple[Part, ...]
    peak_supply_amps: float

    @property
    def period_s(self) -> float:
        return self.period

    def segments(self) -> tuple[Part, ...]:
        return self.parts


class CapacitorSetting:
    """One setting, keeping the `Setting` protocol; the back-EMF may have either sign.

    A switch or diode conducts where the voltage that the capacitor would have without it (its own less resistance times
    winding current) lies beyond what the circuit puts there; so the current of the stage is continuous at these events,
    and the map of a period has a continuous derivative. It is passive, so it contracts: Newton's method closes in.
    """

    __slots__ = (
        "_again", "_found", "_last", "_open", "_stage", "inductance_henry", "period_s", "phases", "resistance_ohm",
        "supply_volts",
    )  # fmt: skip

    def __init__(
        self, stage: CapacitorStage, supply_v: float, resistance_ohm: float, inductance_henry: float,
        phases: tuple[Phase, ...], open_circuit: bool, again: Callable[[float], CapacitorSetting],
    ) -> None:  # fmt: skip
        self._stage, self._open, self._again = stage, open_circuit, again
        self.supply_volts, self.resistance_ohm, self.inductance_henry = supply_v, resistance_ohm, inductance_henry
        self.period_s, self.phases = sum(phase.seconds for phase in phases), phases
        self._found: dict[float, _Found] = {}
        self._last: float | None = None

    @property
    def supply_ohms(self) -> float:
        return self._stage.stage.supply_ohms

    def mean_current(self, emf_v: float) -> tuple[float, float]:
        if self._open:
            return 0.0, 0.0
        found = self._periodic(emf_v)
        charge = slope = 0.0
        by_emf = found.by_emf
        for seconds, course, way in found.pieces:
            charge += course.integral(seconds)[0]
            start = by_emf[0] - way.by_emf[0], by_emf[1] - way.by_emf[1]
            faded = course.system.fade(start, seconds)
            slope += way.by_emf[0] * seconds + course.system.integral(start, faded)[0]
            by_emf = way.by_emf[0] + faded[0], way.by_emf[1] + faded[1]
        return charge / self.period_s, slope / self.period_s

    def mean_supply_current(self, emf_v: float) -> float:
        if self._open:
            return 0.0
        total = 0.0
        for seconds, course, way in self._periodic(emf_v).pieces:
            if way.branch is not None and way.branch.supply:
                charge, flux = course.integral(seconds)
                constant, by_amps, by_volts = way.stage
                total += way.branch.supply * (constant * seconds + by_amps * charge + by_volts * flux)
        return total / self.period_s

    def wave(self, emf_v: float) -> CapacitorWave:
        if self._open:
            of_supply, of_motor, _ = self._stage.node
            node = of_supply * self.supply_volts + of_motor * emf_v
            still = (emf_v, 0.0, node, 0.0, 0.0, self.supply_volts, self.supply_ohms)
            parts = (Segment(0.0, self.period_s, 0.0, 0.0, 1.0, *still),)
            return CapacitorWave(emf_v, 0.0, 0.0, emf_v, 0.0, 0.0, 0.0, self.period_s, parts, 0.0)
        pieces = self._periodic(emf_v).pieces
        drawn, begin = [], 0.0
        for seconds, course, way in pieces:
            drawn.append(CapacitorPart(begin, seconds, course, self._places(way)))
            begin += seconds
        mean = sum(part.integral("motor_lead", part.seconds) for part in drawn) / self.period_s
        square = sum(piece.course.square(piece.seconds) for piece in pieces) / self.period_s
        supply = sum(part.integral("supply_lead", part.seconds) for part in drawn) / self.period_s
        ends = min(part.least("motor_lead") for part in drawn), max(part.most("motor_lead") for part in drawn)
        means = (self.resistance_ohm * mean + emf_v, mean, supply, square)
        spike = max(part.most("supply_lead") for part in drawn)
        return CapacitorWave(emf_v, *ends, *means, self.period_s, tuple(drawn), spike)

    def at_volts(self, volts: float) -> CapacitorSetting:
        return self._again(volts)

    def limited(self, emf_v: float, limit_amps: float) -> CapacitorSetting:
        """On the voltage at which the mean supply current is the limit: the spike within a period passes."""
        return at_limit(self, emf_v, limit_amps)

    # ---- the circuits --------------------------------------------------------------------------------------------

    def _way(self, branch: Branch | None, emf: float) -> _Way:
        """With V, r of the branch, rc of the capacitor and g = 1/(r + rc): stage current = g·(V − v + rc·i).

        L·di/dt = v + rc·(stage current − i) − R·i − E and C·dv/dt = stage current − i.
        """
        henry, farad, inner = self.inductance_henry, self._stage.farad, self._stage.ohms
        if branch is None:
            rest, by_emf = (0.0, emf), (0.0, 1.0)
            stage = (0.0, 0.0, 0.0)
        else:
            ohms = self.resistance_ohm + branch.ohms
            amps = (branch.volts - emf) / ohms
            rest, by_emf = (amps, branch.volts - branch.ohms * amps), (-1.0 / ohms, branch.ohms / ohms)
            g = 1.0 / (branch.ohms + inner)
            stage = (g * branch.volts, g * inner, -g)
        _, of_amps, of_volts = stage
        circuit = system(
            -(self.resistance_ohm + inner * (1.0 - of_amps)) / henry, (1.0 + inner * of_volts) / henry,
            (of_amps - 1.0) / farad, of_volts / farad,
        )  # fmt: skip
        return _Way(branch, Course(circuit, rest, (0.0, 0.0)), by_emf, stage)

    def _places(self, way: _Way) -> dict[Place, tuple[float, float, float]]:
        constant, by_amps, by_volts = way.stage
        inner, volts, ohms = self._stage.ohms, self.supply_volts, self.supply_ohms
        across = (inner * constant, inner * (by_amps - 1.0), 1.0 + inner * by_volts)
        if way.branch is None:
            of_supply, of_motor, _ = self._stage.node
            node = (of_supply * volts + of_motor * across[0], of_motor * across[1], of_motor * across[2])
            taken = (0.0, 0.0, 0.0)
        else:
            b = way.branch
            node = (b.node_volts - b.node_ohms * constant, -b.node_ohms * by_amps, -b.node_ohms * by_volts)
            taken = (b.supply * constant, b.supply * by_amps, b.supply * by_volts)
        return {
            "across_motor": across, "switch_node": node, "motor_lead": (0.0, 1.0, 0.0), "supply_lead": taken,
            "switch_shunt": taken, "supply_terminals": (volts - ohms * taken[0], -ohms * taken[1], -ohms * taken[2]),
        }  # fmt: skip

    # ---- the period ----------------------------------------------------------------------------------------------

    def _periodic(self, emf: float) -> _Found:
        """The states at phase 0 that come back after one period; the last few are kept."""
        found = self._found.get(emf)
        if found is not None:
            return found
        begin = (0.0, emf)
        if self._last is not None:
            near = self._found[self._last]
            aside = emf - self._last
            begin = near.begin[0] + near.by_emf[0] * aside, near.begin[1] + near.by_emf[1] * aside
        if len(self._found) >= _KEPT:
            self._found.clear()
        self._found[emf] = found = self._closed(begin, emf)
        self._last = emf
        return found

    def _closed(self, begin: Pair, emf: float) -> _Found:
        """Newton's method for the period's map. A step that does not bring the gap down is halved."""
        ways = [self._ways(phase, emf) for phase in self.phases]
        end, passed, by_emf, pieces = self._march(begin, ways)
        gap = end[0] - begin[0], end[1] - begin[1]
        for _ in range(_ROUNDS):
            if self._size(gap) <= _CLOSED * (self._size(end) + self._size((0.0, 1e-3 * (1.0 + self.supply_volts)))):
                return _Found(begin, _solved(passed, by_emf), pieces)
            step, part = _solved(passed, gap), 1.0
            while True:
                tried = begin[0] + part * step[0], begin[1] + part * step[1]
                end, passed, by_emf, pieces = self._march(tried, ways)
                left = end[0] - tried[0], end[1] - tried[1]
                if self._size(left) < self._size(gap) or part < 1e-3:
                    break
                part *= 0.5
            begin, gap = tried, left
        raise SweeprigError("the simulated stage found no periodic current", value=f"back-EMF {emf:g} V")

    def _size(self, states: Pair) -> float:
        """The square root of twice the energy in winding and capacitor: no period lets a difference grow by it."""
        return math.sqrt(self.inductance_henry * states[0] ** 2 + self._stage.farad * states[1] ** 2)

    def _march(self, states: Pair, ways_of: list[_Ways]) -> tuple[Pair, tuple[Pair, Pair], Pair, list[_Piece]]:
        """One period: (states at its end, ∂end/∂begin by columns, ∂end/∂back-EMF, pieces)."""
        pieces: list[_Piece] = []
        first, second, by_emf = (1.0, 0.0), (0.0, 1.0), (0.0, 0.0)
        for phase, ways in zip(self.phases, ways_of, strict=True):
            left = phase.seconds
            which = self._conducting(phase, states)
            while left > 0.0:
                way = ways[which]
                course = way.system._replace(start=(states[0] - way.system.end[0], states[1] - way.system.end[1]))
                seconds, following = self._until(course, phase, which, left)
                pieces.append(_Piece(seconds, course, way))
                if len(pieces) > _MOST_PIECES:
                    what, value = "the simulated stage switches without end", f"{states[0]:g} A, {states[1]:g} V"
                    raise SweeprigError(what, value=value)
                fade = course.system.fade
                states, first, second = course.at(seconds), fade(first, seconds), fade(second, seconds)
                moved = fade((by_emf[0] - way.by_emf[0], by_emf[1] - way.by_emf[1]), seconds)
                by_emf = way.by_emf[0] + moved[0], way.by_emf[1] + moved[1]
                left, which = left - seconds if seconds < left else 0.0, following
        return states, (first, second), by_emf, pieces

    def _ways(self, phase: Phase, emf: float) -> _Ways:
        """The circuits of a phase: open, and for a forward (+1) or backward (−1) current of the stage."""
        forward = self._way(phase.forward, emf)
        if phase.forward == phase.reverse:
            return forward, forward, forward
        return self._way(None, emf), forward, self._way(phase.reverse, emf)

    def _conducting(self, phase: Phase, states: Pair) -> int:
        """+1: the forward circuit conducts, −1 the reverse one, 0 none, at the begin of a phase."""
        if phase.forward == phase.reverse:
            return 1
        alone = states[1] - self._stage.ohms * states[0]
        return 1 if alone < phase.forward.volts else -1 if alone > phase.reverse.volts else 0

    def _until(self, course: Course, phase: Phase, which: int, left: float) -> tuple[float, int]:
        """(seconds this circuit goes on, what conducts then)."""
        if phase.forward == phase.reverse:
            return left, which
        row, slack = (-self._stage.ohms, 1.0), _SLACK * (1.0 + self.supply_volts)
        back = (-row[0], -row[1])
        forward, reverse = phase.forward.volts, phase.reverse.volts
        if which > 0:
            at = course.falls_below(back, -forward, left, slack)
            return (at, 0) if at < left else (left, which)
        if which < 0:
            at = course.falls_below(row, reverse, left, slack)
            return (at, 0) if at < left else (left, which)
        down = course.falls_below(row, forward, left, slack)
        up = course.falls_below(back, -reverse, left, slack)
        if min(down, up) >= left:
            return left, which
        return (down, 1) if down < up else (up, -1)


def _solved(passed: tuple[Pair, Pair], gap: Pair) -> Pair:
    """(1 − passed)⁻¹·gap, the matrix given by its columns."""
    a, b, c, d = 1.0 - passed[0][0], -passed[1][0], -passed[0][1], 1.0 - passed[1][1]
    determinant = a * d - b * c
    return (d * gap[0] - b * gap[1]) / determinant, (a * gap[1] - c * gap[0]) / determinant
