"""The night ahead, from the same decision function fed with predicted outcomes. Pure: nothing is opened or moved."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, replace

from sweeprig.holds import Approach, Finished, Hold, NeedsPerson, Outcome, Purpose, Status, Verdict
from sweeprig.plan import Plan
from sweeprig.schedule.history import History
from sweeprig.schedule.next_hold import next_hold

GUESSED_STALL_PERCENT = 12.0
GUESSED_START_PERCENT = 18.0
COAST_S = 3.0
"""Time for the rotor to come to rest before the rest time counts; guessed, the motor tells on the night."""

MOST_HOLDS = 100_000

_NEEDS: dict[str, tuple[str, ...]] = {
    "speed curve, top speed, usable range": ("speed",),
    "stall duty, sustain_99, stall speed": ("speed",),
    "start duty, start_99": ("speed",),
    "mean motor voltage and stall voltage": ("motor_voltage",),
    "current, and protection by current": ("current",),
    "duty as measured": ("duty",),
    "PWM frequency as measured": ("pwm_frequency",),
}


_INSTEAD = {
    "duty as measured": "; the commanded duty is taken, and marked",
    "PWM frequency as measured": "; the commanded frequency is taken",
}


@dataclass(frozen=True, slots=True)
class Preview:
    """holds: predicted number by purpose; seconds: predicted bench time, rest_s of it with the drive off so that the
    winding cools; can / cannot: what this rig gives and lacks,
    in words; persons: what needs a person; guesses: what the prediction assumes."""

    holds: dict[str, int]
    seconds: float
    can: tuple[str, ...]
    cannot: tuple[str, ...]
    persons: tuple[str, ...]
    guesses: tuple[str, ...]
    rest_s: float = 0.0


def preview(
    plan: Plan,
    now: float,
    stall_percent: float = GUESSED_STALL_PERCENT,
    start_percent: float = GUESSED_START_PERCENT,
) -> Preview:
    """Run `next_hold` to its end on a motor that stalls and starts at the guessed duties."""
    outcomes = History()
    persons: list[str] = []
    clock = 0.0
    while len(outcomes) < MOST_HOLDS:
        decision = next_hold(plan, outcomes, now + clock)
        if isinstance(decision, Finished):
            break
        if isinstance(decision, NeedsPerson):
            persons.append(f"{decision.what} ({decision.why})")
            if decision.hands is None:
                break
            plan = replace(plan, hands=decision.hands, session=plan.session + 1)
            continue
        outcome = _predicted(decision, plan, clock, now, stall_percent, start_percent)
        outcomes.append(outcome)
        clock = outcome.ended
    can, cannot = _what_can_be_found(plan)
    guesses = (
        f"stall near {stall_percent:g} % and start near {start_percent:g} %",
        f"{COAST_S:g} s to coast down before each start trial",
        "every curve point settled half-way between its shortest and longest time",
    )
    counts = Counter(str(outcome.hold.purpose) for outcome in outcomes)
    rest_s = sum(outcome.exposed_s for outcome in outcomes if outcome.hold.purpose is Purpose.REST)
    return Preview(dict(counts), clock, can, cannot, tuple(persons), guesses, rest_s)


def _what_can_be_found(plan: Plan) -> tuple[tuple[str, ...], tuple[str, ...]]:
    wanted = dict(_NEEDS)
    missing = []
    if plan.stall is None:
        del wanted["stall duty, sustain_99, stall speed"]
        missing.append("stall duty, sustain_99, stall speed: the sweep has no [stall] table")
    if plan.start is None:
        del wanted["start duty, start_99"]
        missing.append("start duty, start_99: the sweep has no [start] table")
    if plan.curve is None:
        del wanted["speed curve, top speed, usable range"]
        missing.append("speed curve, top speed, usable range: the sweep has no [curve] table")
    can = tuple(what for what, roles in wanted.items() if all(role in plan.roles for role in roles))
    for what, roles in wanted.items():
        lacking = [role for role in roles if role not in plan.roles]
        if lacking:
            shown = ", ".join(role.replace("_", " ") for role in lacking)
            instead = _INSTEAD.get(what, "")
            missing.append(f"{what}: no instrument of the rig has the role {shown}{instead}")
    return can, tuple(missing)


def _predicted(hold: Hold, plan: Plan, clock: float, now: float, stall: float, start: float) -> Outcome:
    begins_at_rest = hold.approach in (Approach.RISING, Approach.FROM_REST)
    turns = hold.duty_percent >= (start if begins_at_rest else stall)
    exposed = hold.most_s
    if hold.purpose is Purpose.CURVE:
        exposed = (hold.least_s + hold.most_s) / 2 if turns else hold.least_s
    elif hold.purpose is Purpose.STALL and not turns:
        exposed = hold.most_s / 3
    lead = sum(seconds + (COAST_S if duty == 0 else 0.0) for duty, seconds in hold.lead)
    ended = clock + lead + exposed
    verdict = _verdict(hold.purpose, turns)
    return Outcome(
        hold.number, hold, plan.session, Status.DONE, verdict, clock, ended, now + clock, now + ended, exposed,
        (exposed, None),
    )  # fmt: skip


def _verdict(purpose: Purpose, turns: bool) -> Verdict:
    if purpose is Purpose.START:
        return Verdict.STARTED if turns else Verdict.DID_NOT_START
    return Verdict.TURNING if turns else Verdict.STOPPED
