"""Starts by a pulse: which kick duty and which pulse time to try next. A source of holds.

Up and down on the logarithm of the pulse time, each kick duty on its own, the kick duties in turn.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from sweeprig.exposures import kick_of
from sweeprig.holds import Approach, EndsWhen, Hold, Purpose, Verdict
from sweeprig.laws import STALL_LAWS
from sweeprig.plan import KickPlan, Plan, StallPlan
from sweeprig.schedule.proposal import TRIAL_SENSORS, Here, Proposal, offered
from sweeprig.schedule.quick_fit import contrast, key_of, quick_fit
from sweeprig.schedule.tally import Tally

STEPS_PER_OCTAVE = 4
"""Pulse times differ by a fourth part of an octave, 19 %: about the scatter of what one start needs."""
FIRST_STEPS = 4
"""Until both results were seen the steps are so many times as long: an octave."""
STEPS_UP = 3
"""After a failure so many steps longer: the trials then support the pulse that nearly always starts, not half of them.
"""
RELIABLE, CONFIDENCE = 0.99, 0.95
AT_THE_EDGE = 3
_BOTH = (Verdict.STARTED, Verdict.DID_NOT_START)
Tried = tuple[float, bool | None]
"""Pulse time as it was, s; did it start (None: not decided)."""


def kicks(plan: Plan, here: Here) -> Proposal | None:
    """The next start by a pulse: of the kick duty with the fewest trials, the highest first; ranked by the part done.

    None before anything is known of the duty that sustains, and where the holds at it were discarded three times."""
    kick = plan.kick
    if kick is None or not kick.duties_percent:
        return None
    run = run_duty(plan, kick, here.tally)
    if run is None or here.tally.passed_over(Purpose.KICK, Approach.FROM_REST, run):
        return None
    open_still = [
        (len(trials), -duty, trials)
        for duty in kick.duties_percent
        if not _finished(kick, trials := tried(here.tally, duty, run))
    ]
    if not open_still:
        return None
    count, minus_duty, trials = min(open_still)
    hold = kick_hold(plan, kick, here, -minus_duty, next_pulse(kick, trials), run)
    answered = any(started for _, started in trials)
    return Proposal(hold, (count / kick.trials,), spare=answered)


def _finished(kick: KickPlan, trials: Sequence[Tried]) -> bool:
    """All trials done, or the longest pulse has failed AT_THE_EDGE times in a row: no pulse allowed starts it."""
    last = trials[-AT_THE_EDGE:]
    longest = 0.9 * kick.longest_s
    hopeless = len(last) == AT_THE_EDGE and all(started is False and pulse >= longest for pulse, started in last)
    return len(trials) >= kick.trials or hopeless


def run_duty(plan: Plan, kick: KickPlan, tally: Tally) -> float | None:
    """Lowest reliable duty plus the sweep's margin, on a grid of 0.1 %: that of the earlier kicks where there were any,
    so that all of them ask the same. Without any stop it is the lowest duty that turned; None: nothing is known."""
    earlier = tally.kept.get(Purpose.KICK)
    if earlier:
        return min(earlier, key=lambda outcome: outcome.number).hold.duty_percent
    sums = tally.stall.sums
    if plan.stall is not None and contrast(sums):
        reliable = _reliable(plan.stall, tally)
    else:
        turned = [duty for duty, seconds in sums.exposure.items() if seconds > 0.0]
        if sums.events or not turned:
            return None
        reliable = min(turned)
    wanted = math.ceil(10.0 * (reliable + kick.margin_percent) - 1e-6) / 10.0
    return min(max(wanted, plan.duty_low_percent), plan.duty_high_percent)


def _reliable(stall: StallPlan, tally: Tally) -> float:
    """One-sided 95 % upper bound of the duty that 99 % of holds survive, the worse of the laws."""
    key = key_of(tally.stall.sums)
    fits = (quick_fit(key, stall.hold_time_s, which) for which in range(len(STALL_LAWS)))
    return max(fitted.below(RELIABLE, CONFIDENCE) for fitted in fits)


def tried(tally: Tally, kick_percent: float, run_percent: float) -> list[Tried]:
    """The done trials of one kick duty at the run duty, in their order."""
    found = []
    for outcome in sorted(tally.kept.get(Purpose.KICK, ()), key=lambda outcome: outcome.number):
        kick = kick_of(outcome)
        if kick is not None and _same(kick[0], kick_percent) and _same(outcome.hold.duty_percent, run_percent):
            started = outcome.verdict is Verdict.STARTED
            found.append((kick[1], started if outcome.verdict in _BOTH else None))
    return found


def _same(one_percent: float, other_percent: float) -> bool:
    return math.isclose(one_percent, other_percent, abs_tol=1e-6)


def next_pulse(kick: KickPlan, trials: Sequence[Tried]) -> float:
    """Pulse time of the next trial, s: one step shorter after a start, STEPS_UP longer after a failure; from the
    geometric middle, and by octaves until both results were seen. Within the shortest and the longest allowed."""
    shortest, longest = math.log2(kick.shortest_s), math.log2(kick.longest_s)
    decided = [(pulse, started) for pulse, started in trials if started is not None]
    if not decided:
        return _held(0.5 * (shortest + longest), shortest, longest)
    pulse, started = decided[-1]
    step = 1.0 / STEPS_PER_OCTAVE
    if all(one == started for _, one in decided):
        step *= FIRST_STEPS
        target = math.log2(pulse) + (-step if started else step)
    else:
        target = math.log2(pulse) + (-step if started else STEPS_UP * step)
    return _held(target, shortest, longest)


def _held(log2_s: float, shortest: float, longest: float) -> float:
    """On the grid of the steps, within the range; rounded to 0.1 ms."""
    grid = round(log2_s * STEPS_PER_OCTAVE) / STEPS_PER_OCTAVE
    return round(math.exp2(min(max(grid, shortest), longest)), 4)


def kick_hold(plan: Plan, kick: KickPlan, here: Here, kick_percent: float, pulse_s: float, run_percent: float) -> Hold:
    """At rest for the rest time, the pulse, then the run duty, watched for the hold time."""
    time_s = kick.hold_time_s
    why = (
        f"Kick trial: does {pulse_s:.3g} s at {kick_percent:.4g} % start it, so that it still turns after {time_s:g} s "
        f"at {run_percent:.4g} %?"
    )
    return Hold(
        here.number, Purpose.KICK, Approach.FROM_REST, here.condition, run_percent, time_s, time_s, EndsWhen.STOPPED,
        offered(plan, TRIAL_SENSORS), why, ((0.0, kick.rest_time_s), (kick_percent, pulse_s)),
    )  # fmt: skip
