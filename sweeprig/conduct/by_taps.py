"""A drive by taps: what it is told for a duty of a hold, and what it was seen to give.

The taps were chosen by `schedule`; they stand in the hold.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from sweeprig.conduct.protection import Commanded
from sweeprig.conduct.settle import mean_and_u
from sweeprig.holds import Condition, Hold, Purpose
from sweeprig.quantities import Reading
from sweeprig.roles import DriveSetting

ROLES = ("duty", "pwm_frequency")
UNKNOWN_PERCENT, UNKNOWN_HZ = 100.0, 1.0
"""u of a duty, and of a frequency as a part of itself, of which nothing is to be believed."""


@dataclass(slots=True)
class Told:
    """The hold at work, and when the drive was told its target (run clock, s; None: not yet)."""

    hold: Hold | None = None
    since: float | None = None

    def begin(self, hold: Hold) -> None:
        self.hold, self.since = hold, None

    def settings(self, condition: Condition, duty_percent: float, now: float) -> tuple[DriveSetting, Commanded]:
        """(what the drive is told, what protection expects of it) for a duty of the hold's lead or target.

        A tap gives what is expected of it, as well as that is known; without one the drive gives what it is told. A
        hold of the map is there to learn what its tap gives: so far nothing is known of it."""
        hold = self.hold
        if hold is not None and duty_percent == hold.duty_percent:
            self.since = now
        at = None if hold is None else hold.at_tap(duty_percent)
        if hold is None or at is None:
            setting = DriveSetting(condition.pwm_hz, duty_percent)
            return setting, Commanded(True, duty_percent, condition.pwm_hz, condition.supply_v, now)
        u, u_hz = at.u_percent, at.u_hz
        if hold.purpose is Purpose.TAP_MAP:
            u, u_hz = UNKNOWN_PERCENT, UNKNOWN_HZ * at.pwm_hz
        expected = Commanded(True, at.duty_percent, at.pwm_hz, condition.supply_v, now, u, u_hz)
        return DriveSetting(condition.pwm_hz, at.duty_percent, at.tap), expected

    def given(
        self, hold: Hold, roles: Mapping[str, str], readings: Sequence[Reading], means: Mapping[str, Reading]
    ) -> dict[str, Reading]:
        """Means of duty and PWM frequency over all readings since the target was told, for what `means` lacks.

        A tap gives its duty at once, whatever the rotor does: so a hold that ended before anything had settled, or was
        spoilt because the duty was another one, still says what its tap gave. Without a tap nothing: the drive's own
        word is enough. u as in the other means."""
        found: dict[str, Reading] = {}
        if hold is not self.hold or hold.tap is None or self.since is None:
            return found
        for channel in (roles[role] for role in ROLES if role in roles and roles[role] not in means):
            read = [one for one in readings if one.channel == channel and one.at > self.since and one.value is not None]
            if read:
                mean, u = mean_and_u([one.value for one in read if one.value is not None])
                accuracy = sum(one.u for one in read) / len(read)
                found[channel] = replace(read[-1], value=mean, u=math.hypot(u, accuracy), flags=(), raw="")
        return found
