"""What one outcome says as an exposure to stalling: how long the rotor turned for certain, and when it stopped.

One definition for `schedule`, which searches by it, and `characterise`, which judges by it. No choice of holds here.
"""

from __future__ import annotations

from sweeprig.holds import Outcome, Status, Verdict

LEAST_TIME_CONSTANTS = 5.0
"""The rotor is still coming down from its approach for so many of the motor's time constants."""
SHORTEST_GAP_S = 1e-3


def exposure(outcome: Outcome, time_constant_s: float) -> tuple[float, float | None]:
    """(seconds survived for certain, width in seconds of the interval in which it stopped; None: it had not).

    A stop within the first five time constants counts as "by then": the rotor is still coming down from its approach,
    so the moment tells how long that took, and not how large the hazard is.
    """
    begin, end = outcome.event_between_s
    if outcome.verdict is not Verdict.STOPPED and not outcome.restarts:
        return (begin if begin > 0.0 else outcome.exposed_s), None
    end = max(outcome.exposed_s, begin) if end is None else end
    coming_down = LEAST_TIME_CONSTANTS * time_constant_s
    if begin < coming_down:
        return 0.0, max(end, coming_down)
    return begin, max(end - begin, SHORTEST_GAP_S)


def turned_before(outcome: Outcome, previous: Outcome | None) -> bool:
    """Whether the rotor is known to have turned when the hold began: its own lead drove it, or the hold just before it,
    in the same session, ended with it turning."""
    lead = outcome.hold.lead
    if lead and lead[-1][0] > outcome.hold.duty_percent:
        return True
    return (
        previous is not None
        and (previous.session, previous.number) == (outcome.session, outcome.number - 1)
        and previous.status is Status.DONE
        and previous.verdict in (Verdict.TURNING, Verdict.STARTED)
    )


KICK_PULSE, KICK_AMPS = "kick.pulse", "kick.current"
"""Channels of a kick hold's outcome: the pulse as it was (s), and the mean current in it (A) where it was read."""


def kick_of(outcome: Outcome) -> tuple[float, float, float] | None:
    """(kick duty %, pulse s, its u s) of a kick hold: as it was timed, else as asked for; None without a kick."""
    pulses = [(duty, seconds) for duty, seconds in outcome.hold.lead if duty > 0.0]
    if not pulses:
        return None
    duty, seconds = pulses[-1]
    timed = outcome.means.get(KICK_PULSE)
    if timed is not None and timed.value is not None and timed.value > 0.0:
        return duty, timed.value, timed.u
    return (duty, seconds, 0.0) if seconds > 0.0 else None
