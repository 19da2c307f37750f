"""A drive by taps: the holds that learn which duty each tap gives, and the one place where duties become taps.

The sources of holds ask for duties and know nothing of taps; `at_taps` is applied to the hold that was chosen.
"""

from __future__ import annotations

from dataclasses import replace

from sweeprig.holds import Approach, AtTap, EndsWhen, Hold, Purpose, Status, Verdict
from sweeprig.plan import Plan, TapPlan
from sweeprig.schedule.proposal import SENSORS, Here, Proposal, offered
from sweeprig.schedule.tally import STRIKES, Tallies
from sweeprig.taps import TapMap, by_parts, tap_map

_SEARCHED = (Purpose.STALL, Purpose.START, Purpose.LONG)
"""What may as well be done at the next tap where one was discarded too often; a reference or a curve point may not."""


def map_taps(plan: Plan, here: Here) -> Proposal | None:
    """The next of the taps that are visited before anything else: spread over the duties that are safe, from the top,
    once in a run. The other holds refine the map, each at its own tap."""
    taps = plan.taps
    if taps is None:
        return None
    done = {
        outcome.hold.tap for tally in here.past.conditions.values() for outcome in tally.kept.get(Purpose.TAP_MAP, ())
    }
    parts = by_parts(taps)
    for tap in taps.first:
        if tap not in done and here.past.tap_strikes.get((Purpose.TAP_MAP, tap), 0) < STRIKES:
            return Proposal(_hold(plan, taps, here, tap, float(parts[tap])))
    return None


def _hold(plan: Plan, taps: TapPlan, here: Here, tap: int, by_the_parts: float) -> Hold:
    last = here.past.last
    turning = last is not None and last.session == plan.session and last.status is Status.DONE
    turning = turning and last is not None and last.verdict is Verdict.TURNING
    why = f"Tap map: the duty and the PWM frequency at tap {tap}, about {by_the_parts:.3g} % by the timer's parts."
    return Hold(
        here.number, Purpose.TAP_MAP, Approach.FALLING if turning else Approach.FROM_REST, here.condition,
        by_the_parts, taps.time_s, taps.time_s, EndsWhen.TIME, offered(plan, SENSORS), why, tap=tap,
    )  # fmt: skip


def at_taps(plan: Plan, past: Tallies, hold: Hold) -> Hold:
    """`hold` with each duty above 0 of lead and target at its tap: the nearest, or the one that the hold names."""
    if plan.taps is None:
        return hold
    known = tap_map(plan.taps, past.taps.taps)
    same = {duty: tap for duty, tap in _compared(plan, past, hold).items() if tap not in known.faulty}
    found = {
        duty: _at(plan, known, duty, same.get(duty, known.nearest(duty, *plan.taps.allowed_percent)))
        for duty, _ in hold.lead if duty > 0.0
    }  # fmt: skip
    target = hold.duty_percent
    if target <= 0.0:
        return replace(hold, taps=tuple(found.values()))
    tap = same.get(target) if hold.tap is None else hold.tap
    if tap is None:
        avoid = [
            tap for (purpose, tap), times in past.tap_strikes.items() if purpose is hold.purpose and times >= STRIKES
        ]
        tap = known.nearest(target, *plan.taps.allowed_percent, avoid if hold.purpose in _SEARCHED else ())
    found[target] = at = _at(plan, known, target, tap)
    why = f"{hold.why} (Tap {tap}, {at.duty_percent:.4g} % expected.)"
    return replace(hold, tap=tap, taps=tuple(found.values()), why=why)


def _compared(plan: Plan, past: Tallies, hold: Hold) -> dict[float, int]:
    """Duty → tap of holds that are compared with one another: they stay at the tap of the first, however the map is
    learned meanwhile."""
    if hold.purpose is Purpose.RUN_IN:
        earlier = past.done(plan.session, Purpose.RUN_IN)
    else:
        tally = past.conditions.get(hold.condition)
        earlier = [] if tally is None else tally.kept.get(hold.purpose, [])
    return {} if not earlier else {one.asked_percent: one.tap for one in earlier[0].hold.taps}


def _at(plan: Plan, known: TapMap, duty: float, tap: int) -> AtTap:
    assert plan.taps is not None
    expected, hz = float(known.duty[tap]), float(known.hz[tap])
    return AtTap(duty, tap, expected, float(known.u[tap]), hz, float(known.u_hz[tap]))
