"""Starts by a pulse: which kick duty and which pulse time to try next. A source of holds.

The search of `search` on the logarithm of the pulse time, each kick duty on its own, the kick duties in turn.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from sweeprig.exposures import kick_of
from sweeprig.holds import Approach, EndsWhen, Hold, Purpose, Verdict
from sweeprig.laws import STALL_LAWS, START_LAWS
from sweeprig.plan import KickPlan, Plan, StallPlan
from sweeprig.schedule.budget import LEAST_KICKS
from sweeprig.schedule.keys import key_of
from sweeprig.schedule.posterior import Prior
from sweeprig.schedule.proposal import TRIAL_SENSORS, Here, Proposal, offered
from sweeprig.schedule.quick_fit import quick_fit
from sweeprig.schedule.search import BINARY, Question, best
from sweeprig.schedule.tally import STRIKES, Sums, Tally

LONGER = 1.05
"""Pulse times are tried in steps of this ratio."""
SPREAD, SPREAD_LOG_SD = 0.3, 1.0
"""Before the trials: spread of the natural logarithm of the pulse that one start needs (common practice, no source)."""
BEYOND = 3.0
"""The half may lie so far outside the allowed pulses, in their logarithm."""
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
    if run is None or _given_up(here.tally, run):
        return None
    open_still = []
    for duty in kick.duties_percent:
        trials = tried(here.tally, duty, run)
        pulse_s, reached = next_pulse(kick, trials)
        if not reached and not _finished(kick, trials):
            answered = len(trials) >= LEAST_KICKS and any(started for _, started in trials)
            open_still.append((len(trials), -duty, pulse_s, answered))
    if not open_still:
        return None
    count, minus_duty, pulse_s, answered = min(open_still)
    hold = kick_hold(plan, kick, here, -minus_duty, pulse_s, run)
    return Proposal(hold, (count / kick.trials,), spare=answered)


def _given_up(tally: Tally, run_percent: float) -> bool:
    """Three strikes at the run duty, whatever the pulse; each kick that was done takes one strike back."""
    setting = Purpose.KICK, Approach.FROM_REST, round(run_percent, 6)
    return tally.strikes.get(setting, 0) >= STRIKES + len(tally.kept.get(Purpose.KICK, ()))


def _finished(kick: KickPlan, trials: Sequence[Tried]) -> bool:
    """All trials done; or the longest pulse has failed AT_THE_EDGE times in a row: no pulse allowed starts it; or every
    trial started, LEAST_KICKS of them with the shortest: a bound is all there is to find.
    """
    last = trials[-AT_THE_EDGE:]
    longest = 0.9 * kick.longest_s
    hopeless = len(last) == AT_THE_EDGE and all(started is False and pulse >= longest for pulse, started in last)
    shortest = sum(pulse <= 1.1 * kick.shortest_s for pulse, _ in trials)
    needless = shortest >= LEAST_KICKS and all(started is not False for _, started in trials)
    return len(trials) >= kick.trials or hopeless or needless


def run_duty(plan: Plan, kick: KickPlan, tally: Tally) -> float | None:
    """Lowest reliable duty plus the sweep's margin, on a grid of 0.1 %: that of the earlier kicks where there were any,
    so that all of them ask the same. Without any stop it is the lowest duty that turned; None: nothing is known."""
    earlier = tally.kept.get(Purpose.KICK)
    if earlier:
        return min(earlier, key=lambda outcome: outcome.number).hold.duty_percent
    sums = tally.stall.sums
    if plan.stall is not None and sums.successes and sums.failures:
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


def next_pulse(kick: KickPlan, trials: Sequence[Tried]) -> tuple[float, bool]:
    """(pulse time of the next trial, s; whether `kick_99_s` is known as asked already): the search's own rule, on the
    natural logarithm of the time. Within the shortest and the longest allowed, rounded to 0.1 ms."""
    sums = Sums()
    for pulse, started in trials:
        if started is not None:
            sums.add(round(math.log(pulse), 4), float(started), None if started else 1.0)
    low, high = math.log(kick.shortest_s), math.log(kick.longest_s)
    question = Question(
        law=START_LAWS[0], prior=Prior(low - BEYOND, high + BEYOND, SPREAD, SPREAD_LOG_SD), low=low, high=high,
        step=math.log(LONGER), parts=(1.0,), whole_s=kick.hold_time_s, before_s=kick.rest_time_s, after_failure_s=0.0,
        coming_down_s=0.0, wanted=((RELIABLE, kick.standard_error),), likelihood=BINARY,
    )  # fmt: skip
    choice = best(question, key_of(sums))
    pulse_s = math.exp(min(max(choice.duty_percent, low), high))
    return round(min(max(pulse_s, kick.shortest_s), kick.longest_s), 4), choice.reached


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
