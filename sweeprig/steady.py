"""What holds at one steady setting say about a speed that still moves: warm or not, and which moment a speed is of.

One definition for `schedule`, which warms the motor up by it, and `characterise`, which says so. No choice of holds.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from sweeprig.holds import Outcome, Verdict
from sweeprig.plan import RunIn

STEADY_SPEED = "steady.speed"
"""Channel of a run-in's and a reference hold's outcome: the mean speed over its last part, rpm. Its u is that of the
mean alone: the instrument's accuracy is left out, since it is the same in every such hold."""
LAST_PART = 0.5
"""… which is so much of the hold."""
SURE = 1.645
"""Normal quantile of 0.95: so many standard uncertainties below the asked rate, a drift is under it (one-sided)."""
_HOUR_S = 3600.0


@dataclass(frozen=True, slots=True)
class Steady:
    """at_s: the middle of the averaging, run clock, s. speed_rpm with the standard uncertainty of its mean."""

    hold: int
    at_s: float
    speed_rpm: float
    u_rpm: float


def steady(outcome: Outcome) -> Steady | None:
    """What a run-in's or a reference hold's outcome says; None where the rotor did not turn to its end or no speed was
    read."""
    read = outcome.means.get(STEADY_SPEED)
    if outcome.verdict is not Verdict.TURNING or read is None or read.value is None or read.value <= 0.0:
        return None
    at_s = outcome.ended - LAST_PART / 2.0 * outcome.exposed_s
    return Steady(outcome.number, at_s, read.value, read.u)


@dataclass(frozen=True, slots=True)
class WarmUp:
    """How far a session's run-in has come.

    seconds            turned in it so far
    percent_per_hour   drift of the speed at its end, and u; None while it cannot be told
    done               long enough, or under the rate that was asked for
    """

    seconds: float
    percent_per_hour: float | None
    u: float
    steady: bool
    done: bool

    def words(self, asked: float) -> str:
        """How it stands, for people."""
        if self.percent_per_hour is None:
            return f"after {self.seconds:.4g} s no drift of the speed could be told"
        shown = f"after {self.seconds:.4g} s the speed drifted by {self.percent_per_hour:.2g} %/h (u {self.u:.2g} %/h)"
        return f"{shown}, {'under' if self.steady else 'not surely under'} the {asked:g} %/h asked for"


PIECE_SLACK = 0.1


def warm_up(run_in: RunIn, pieces: Sequence[Outcome]) -> WarmUp:
    """Judge the done pieces of one session's run-in.

    The drift is the slope of the straight line through the last two, three, … pieces, whichever is known best relative
    to what it must be under: while a motor warms ever more slowly, the longer line only overstates the drift at the
    end. Each look is a one-sided 95 % one.
    """
    seconds = sum(piece.exposed_s for piece in pieces)
    asked = run_in.drift_percent_per_hour
    if asked is None:
        return WarmUp(seconds, None, 0.0, steady=False, done=bool(pieces))
    points = [one for piece in pieces if (one := steady(piece)) is not None]
    points.sort(key=lambda one: one.at_s)
    slopes = [drift_rate(points[-count:]) for count in range(2, len(points) + 1)]
    # a piece ends with its last reading, a moment late: that must not cost the last piece
    no_time = seconds + run_in.time_s > run_in.most_s + PIECE_SLACK * run_in.time_s
    if not slopes:
        return WarmUp(seconds, None, 0.0, steady=False, done=no_time and bool(pieces))
    rate, u = min(slopes, key=lambda one: abs(one[0]) + SURE * one[1])
    calm = abs(rate) + SURE * u <= asked
    return WarmUp(seconds, rate, u, steady=calm, done=calm or no_time)


def drift_rate(points: Sequence[Steady]) -> tuple[float, float]:
    """(slope, its standard uncertainty) of the weighted straight line through two or more points, percent an hour.

    Points that lie off the line by more than their u widen u (Birge 1932, from memory: by the square root of χ² over
    its degrees of freedom), so a speed that goes up and down again does not pass for a steady one.
    """
    weights = [1.0 / max(one.u_rpm, 1e-6 * one.speed_rpm) ** 2 for one in points]
    whole = sum(weights)
    at = sum(w * one.at_s for w, one in zip(weights, points, strict=True)) / whole
    speed = sum(w * one.speed_rpm for w, one in zip(weights, points, strict=True)) / whole
    square = sum(w * (one.at_s - at) ** 2 for w, one in zip(weights, points, strict=True))
    if square <= 0.0:
        return 0.0, math.inf
    slope = sum(w * (one.at_s - at) * (one.speed_rpm - speed) for w, one in zip(weights, points, strict=True)) / square
    u, freedom = 1.0 / math.sqrt(square), len(points) - 2
    if freedom > 0:
        off = sum(
            w * (one.speed_rpm - speed - slope * (one.at_s - at)) ** 2 for w, one in zip(weights, points, strict=True)
        )
        u *= max(1.0, math.sqrt(off / freedom))
    scale = 100.0 * _HOUR_S / speed
    return slope * scale, u * scale
