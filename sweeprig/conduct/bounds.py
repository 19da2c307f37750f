"""Every wait and bound of conduct in one table: name → (default, why). The manual's page `bounds` shows it, tested."""

from __future__ import annotations

from collections.abc import Mapping

TABLE: Mapping[str, tuple[float, str]] = {
    "open_s": (5.0, "opening one link: a network instrument that is there answers in well under a second"),
    "wake_s": (6.0, "asking for the identity again: boards that reset on opening are silent for up to two seconds"),
    "exchange_s": (5.0, "a few exchanges with one instrument"),
    "configure_s": (15.0, "configuring everyone: a range change with a relay takes a second"),
    "cycle_s": (3.0, "on top of the averaging window, for one reading of all instruments"),
    "cycle_window_s": (0.5, "averaging window while settling: short against the slowest decision, several gates long"),
    "trial_window_s": (1.0, "averaging window in stall trials: a stop is still seen within two seconds"),
    "off_s": (2.0, "switching off, each link on its own"),
    "coast_s": (60.0, "the rotor must be at rest so long after the drive went off, else off is not proved"),
    "off_volts": (0.5, "motor voltage below this counts as off (design: a spinning motor is still a generator)"),
    "off_amps": (0.02, "current below this counts as off"),
    "least_gap_s": (0.5, "a gap in the tachometer edges shorter than this is never a stop"),
    "gap_intervals": (3.0, "… nor one shorter than so many expected intervals"),
    "start_revolutions": (10.0, "whole revolutions that a start must show; a twitch is no start"),
    "debounce_readings": (2.0, "readings in a row above a limit before it trips"),
    "slept_s": (2.0, "UTC against monotonic time: more than this apart, the machine slept or its clock was stepped"),
    "heal_attempts": (5.0, "times an instrument's link is brought back before the run gives up"),
    "heal_forgets_after": (5.0, "… counted anew once so many holds in a row were done: a night may have many glitches"),
    "heal_pause_s": (1.0, "pause before a link is opened again; doubled each time, so 15 s in all"),
    "discards_in_a_row": (
        6.0,
        "discarded holds in a row that park the run: something is wrong that no repeat will mend",
    ),
}

BOUNDS: Mapping[str, float] = {name: default for name, (default, _) in TABLE.items()}
