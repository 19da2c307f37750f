"""The periodic steady state of a winding with back-EMF that a stage connects to one circuit after another, exactly.

Every circuit is a voltage and a resistance for either sign of the current, so the current is piecewise exponential.
Which circuits a stage has is `bridge`'s; no mechanics, no time series.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple, Protocol, TypeVar

from sweeprig.errors import SweeprigError
from sweeprig.simbench.waveform import Segment, Waveform

_ROUNDS = 80
"""Newton's steps for the periodic current; halving takes over where they do not close in, so that many suffice."""
_CLOSED = 1e-12


class Branch(NamedTuple):
    """A circuit for one sign of the current: motor voltage = volts − ohms·current; node and supply as in `Segment`."""

    volts: float
    ohms: float
    node_volts: float
    node_ohms: float
    supply: float


class Phase(NamedTuple):
    """A part of the period: what conducts a positive current (`forward`), what a negative one.

    Where forward.volts < back-EMF < reverse.volts no current can begin: a current that reaches zero stays there.
    """

    seconds: float
    forward: Branch
    reverse: Branch


class Wiring(Protocol):
    """The stage behind a setting, as far as a setting needs it."""

    @property
    def node(self) -> tuple[float, float, float]: ...
    @property
    def supply_ohms(self) -> float: ...


class _Piece(NamedTuple):
    """current(t) = level + start·e^(−t/tau); no branch: zero. crossing: it ends because its current reached zero."""

    seconds: float
    level: float
    start: float
    tau: float
    branch: Branch | None
    crossing: bool


class _Linear(NamedTuple):
    """Means that are linear in the back-EMF, valid where the current keeps its sign: valid below (or above) `until`."""

    until: float
    amps: float
    amps_slope: float
    supply: float
    supply_slope: float


@dataclass(frozen=True, slots=True)
class SwitchedWave(Waveform):
    """The waveform of a switched stage, in segments."""

    period: float
    parts: tuple[Segment, ...]

    @property
    def period_s(self) -> float:
        return self.period

    def segments(self) -> tuple[Segment, ...]:
        return self.parts


class SwitchedSetting:
    """One setting of a switched stage, keeping the `Setting` protocol; the back-EMF may have either sign.

    Where the current keeps its sign for the whole period the means are linear in the back-EMF and computed once.
    Elsewhere the periodic current is found by Newton's method: the map of one period is a rising contraction.

    phases   what one period consists of; open_circuit: no current can flow, whatever they are
    again    the same setting on another supply voltage
    """

    __slots__ = (
        "_above", "_again", "_below", "_found", "_open", "_stage", "inductance_henry", "period_s", "phases",
        "resistance_ohm", "supply_volts",
    )  # fmt: skip

    def __init__(
        self, stage: Wiring, supply_v: float, resistance_ohm: float, inductance_henry: float,
        phases: tuple[Phase, ...], open_circuit: bool, again: Callable[[float], SwitchedSetting],
    ) -> None:  # fmt: skip
        self._stage, self._open, self._again = stage, open_circuit, again
        self.supply_volts, self.resistance_ohm, self.inductance_henry = supply_v, resistance_ohm, inductance_henry
        self.period_s, self.phases = sum(phase.seconds for phase in phases), phases
        self._found: tuple[float, float, list[_Piece]] | None = None
        self._below = self._linear([phase.forward for phase in phases], min)
        symmetric = all(phase.forward == phase.reverse for phase in phases)
        self._above = self._below if symmetric else self._linear([phase.reverse for phase in phases], max)
        if symmetric:
            self._below = self._below._replace(until=math.inf)

    @property
    def supply_ohms(self) -> float:
        return self._stage.supply_ohms

    def mean_current(self, emf_v: float) -> tuple[float, float]:
        if self._open:
            return 0.0, 0.0
        linear = self._linear_at(emf_v)
        if linear is not None:
            return linear.amps + linear.amps_slope * emf_v, linear.amps_slope
        return self._nonlinear(emf_v)

    def mean_supply_current(self, emf_v: float) -> float:
        if self._open:
            return 0.0
        linear = self._linear_at(emf_v)
        if linear is not None:
            return linear.supply + linear.supply_slope * emf_v
        total = 0.0
        for piece in self._periodic(emf_v)[1]:
            if piece.branch is not None and piece.branch.supply:
                total += piece.branch.supply * _charge(piece)
        return total / self.period_s

    def wave(self, emf_v: float) -> SwitchedWave:
        pieces = [_Piece(self.period_s, 0.0, 0.0, 1.0, None, False)] if self._open else self._periodic(emf_v)[1]
        parts = self._segments(pieces, emf_v)
        charge = sum(part.charge(part.seconds) for part in parts)
        square = sum(part.square(part.seconds) for part in parts)
        supply = sum(part.supply * part.charge(part.seconds) for part in parts)
        ends = [amps for part in parts for amps in (part.amps(0.0), part.amps(part.seconds))]
        mean = charge / self.period_s
        volts = self.resistance_ohm * mean + emf_v
        means = (volts, mean, supply / self.period_s, square / self.period_s)
        return SwitchedWave(emf_v, min(ends), max(ends), *means, self.period_s, tuple(parts))

    def at_volts(self, volts: float) -> SwitchedSetting:
        return self._again(volts)

    def limited(self, emf_v: float, limit_amps: float) -> SwitchedSetting:
        return at_limit(self, emf_v, limit_amps)

    # ---- where the current keeps its sign ------------------------------------------------------------------------

    def _linear_at(self, emf: float) -> _Linear | None:
        if emf < self._below.until:
            return self._below
        return self._above if emf > self._above.until else None

    def _linear(self, branches: list[Branch], nearest: Callable[..., float]) -> _Linear:
        """The means as if these branches conducted whatever the sign, and the back-EMF at which a current is zero."""
        none, one = self._one_sided(branches, 0.0), self._one_sided(branches, 1.0)
        amps, supply = none[0], none[1]
        zeros = [at_none / (at_none - at_one) for at_none, at_one in zip(none[2], one[2], strict=True)]
        return _Linear(nearest(zeros), amps, one[0] - amps, supply, one[1] - supply)

    def _one_sided(self, branches: list[Branch], emf: float) -> tuple[float, float, list[float]]:
        """(mean motor A, mean supply A, the current at the begin of each phase) of the linear periodic state."""
        pieces, exponent, gained = [], 0.0, 0.0
        for phase, branch in zip(self.phases, branches, strict=True):
            ohms = self.resistance_ohm + branch.ohms
            level, tau = (branch.volts - emf) / ohms, self.inductance_henry / ohms
            x = phase.seconds / tau
            gained = gained * math.exp(-x) - level * math.expm1(-x)
            exponent -= x
            pieces.append((phase.seconds, level, tau, branch.supply))
        amps = gained / -math.expm1(exponent)
        charge = supply = 0.0
        begins = []
        for seconds, level, tau, share in pieces:
            begins.append(amps)
            fallen = math.expm1(-seconds / tau)
            part = level * seconds - (amps - level) * tau * fallen
            charge, supply = charge + part, supply + share * part
            amps += (amps - level) * fallen
        return charge / self.period_s, supply / self.period_s, begins

    # ---- where it changes its sign or rests ----------------------------------------------------------------------

    def _nonlinear(self, emf: float) -> tuple[float, float]:
        """Mean current and its derivative. The tangent ∂i/∂E decays like the current and jumps where that is zero."""
        pieces = self._periodic(emf)[1]
        # the tangent is one of a fixed begin plus a share of one that only passes on what the period began with
        driven, passed, driven_sum, passed_sum, charge = 0.0, 1.0, 0.0, 0.0, 0.0
        for here, there in zip(pieces, [*pieces[1:], pieces[0]], strict=True):
            if here.branch is None:
                driven = passed = 0.0
                continue
            level, fallen = -here.tau / self.inductance_henry, math.expm1(-here.seconds / here.tau)
            charge += _charge(here)
            driven_sum += level * here.seconds - (driven - level) * here.tau * fallen
            passed_sum -= passed * here.tau * fallen
            driven, passed = driven + (driven - level) * fallen, passed + passed * fallen
            if here.crossing:
                jump = 0.0 if there.branch is None else (there.level / there.tau) / (here.level / here.tau)
                driven, passed = driven * jump, passed * jump
        begin = driven / (1.0 - passed)
        return charge / self.period_s, (driven_sum + begin * passed_sum) / self.period_s

    def _periodic(self, emf: float) -> tuple[float, list[_Piece]]:
        """The current at phase 0 that comes back after one period, and the pieces it runs through; the last is kept."""
        if self._found is not None and self._found[0] == emf:
            return self._found[1], self._found[2]
        amps, low, high = 0.0, -math.inf, math.inf
        for _ in range(_ROUNDS):
            end, passed, pieces = self._march(amps, emf)
            gap = end - amps
            if abs(gap) <= _CLOSED * (abs(end) + 1e-9):
                self._found = emf, amps, pieces
                return amps, pieces
            # the map rises by less than one for one: what comes back greater lies below the solution
            low, high = (amps, high) if gap > 0.0 else (low, amps)
            amps += gap / (1.0 - passed)
            if not low < amps < high:
                amps = 0.5 * (low + high) if math.isfinite(low) and math.isfinite(high) else end
        raise SweeprigError("the simulated stage found no periodic current", value=f"back-EMF {emf:g} V")

    def _march(self, amps: float, emf: float) -> tuple[float, float, list[_Piece]]:
        """One period from a current: (current at its end, ∂end/∂begin, pieces)."""
        pieces: list[_Piece] = []
        passed = 1.0
        for seconds, forward, reverse in self.phases:
            left = seconds
            while left > 0.0:
                branch = forward if amps > 0.0 or (amps == 0.0 and emf < forward.volts) else reverse
                if amps == 0.0 and forward.volts <= emf <= reverse.volts:
                    pieces.append(_Piece(left, 0.0, 0.0, 1.0, None, False))
                    passed = 0.0
                    break
                ohms = self.resistance_ohm + branch.ohms
                tau, level = self.inductance_henry / ohms, (branch.volts - emf) / ohms
                to_zero = tau * math.log1p(-amps / level) if amps * level < 0.0 else math.inf
                if to_zero < left:
                    pieces.append(_Piece(to_zero, level, amps - level, tau, branch, True))
                    passed *= _passed_at_zero(to_zero, tau, level, forward, reverse, emf, self)
                    amps, left = 0.0, left - to_zero
                    continue
                pieces.append(_Piece(left, level, amps - level, tau, branch, False))
                x = -left / tau
                amps, passed = amps + (amps - level) * math.expm1(x), passed * math.exp(x)
                break
        return amps, passed, pieces

    def _segments(self, pieces: list[_Piece], emf: float) -> list[Segment]:
        of_supply, of_motor, _ = self._stage.node
        volts, ohms, begin, parts = self.supply_volts, self._stage.supply_ohms, 0.0, []
        for piece in pieces:
            if piece.branch is None:
                node = of_supply * volts + of_motor * emf
                branch = Branch(emf, 0.0, node, 0.0, 0.0)
            else:
                branch = piece.branch
            parts.append(Segment(begin, piece.seconds, piece.level, piece.start, piece.tau, *branch, volts, ohms))
            begin += piece.seconds
        return parts


class Movable(Protocol):
    """A setting, as far as a current limit needs it."""

    supply_volts: float

    def mean_supply_current(self, emf_v: float) -> float: ...
    def at_volts(self: Moved, volts: float) -> Moved: ...


Moved = TypeVar("Moved", bound=Movable)


def at_limit(setting: Moved, emf_v: float, limit_amps: float) -> Moved:
    """By false position on the voltage (Illinois variant), to 1e-10 of the limit: the current rises with it."""
    low, high = 0.0, setting.supply_volts
    excess_low = setting.at_volts(low).mean_supply_current(emf_v) - limit_amps
    excess_high = setting.mean_supply_current(emf_v) - limit_amps
    if excess_low >= 0.0:
        return setting.at_volts(low)
    for _ in range(_ROUNDS):
        volts = (low * excess_high - high * excess_low) / (excess_high - excess_low)
        tried = setting.at_volts(volts)
        excess = tried.mean_supply_current(emf_v) - limit_amps
        if abs(excess) <= 1e-10 * (1.0 + limit_amps):
            return tried
        if excess > 0.0:
            high, excess_high, excess_low = volts, excess, 0.5 * excess_low
        else:
            low, excess_low, excess_high = volts, excess, 0.5 * excess_high
    raise SweeprigError("the simulated supply found no voltage at its current limit", value=f"{limit_amps:g} A")


def _passed_at_zero(
    seconds: float, tau: float, level: float, forward: Branch, reverse: Branch, emf: float, setting: SwitchedSetting
) -> float:
    """What is left of a small change of current after decaying to zero and going over to the other sign's circuit."""
    onward = reverse if level < 0.0 else forward
    pull = onward.volts - emf
    blocked = pull >= 0.0 if level < 0.0 else pull <= 0.0
    return 0.0 if blocked else math.exp(-seconds / tau) * (pull / setting.inductance_henry) / (level / tau)


def _charge(piece: _Piece) -> float:
    return piece.level * piece.seconds - piece.start * piece.tau * math.expm1(-piece.seconds / piece.tau)
