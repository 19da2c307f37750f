"""What each finding is called for people: name, unit, which way is worse, and one sentence of meaning.

The keys are those of findings.json. A key that is not listed here is still shown, under its own name.
"""

from __future__ import annotations

from dataclasses import dataclass

_UNITS = {
    "percent": "%", "rpm": "rpm", "volts": "V", "amps": "A", "s": "s", "hz": "Hz", "ohm": "ohm", "step": "rpm/step",
}  # fmt: skip
CONDITION_FIELDS = ("pwm_hz", "supply_v", "direction", "load", "thermal", "freewheel")
TIMES = ("hold_time_s", "start_time_s", "rest_time_s")


@dataclass(frozen=True, slots=True)
class Meaning:
    """worse: 'high' where the largest value over conditions is the worst, 'low', or '' where neither is.

    says: the definition; {hold_time}, {start_time}, {rest_time} and {saturation} are filled in by the page.
    """

    name: str
    unit: str
    worse: str
    says: str


MEANINGS: dict[str, Meaning] = {
    "usable_range.low_duty_percent": Meaning(
        "Lowest reliable duty", "%", "high",
        "One-sided 95 % upper bound of the duty that 99 % of holds of {hold_time} survive. With a kick-start pulse "
        "the usable range begins here.",
    ),
    "usable_range.low_duty_from_rest_percent": Meaning(
        "Lowest reliable duty from rest", "%", "high",
        "One-sided 95 % upper bound of the duty at which 99 % of starts succeed within {start_time}. Without a kick "
        "the usable range begins here.",
    ),
    "usable_range.high_duty_percent": Meaning(
        "Upper end of the usable range", "%", "low",
        "The lowest duty whose fitted speed is within {saturation} of the highest fitted speed.",
    ),
    "usable_range.low_speed_rpm": Meaning(
        "Lowest usable speed", "rpm", "high", "The fitted speed at the lowest reliable duty.",
    ),
    "usable_range.high_speed_rpm": Meaning(
        "Highest usable speed", "rpm", "low", "The fitted speed at the upper end of the usable range.",
    ),
    "usable_range.turndown": Meaning(
        "Turndown", "1", "low", "Highest over lowest usable speed.",
    ),
    "lowest_reliable_speed_rpm": Meaning(
        "Lowest reliable speed", "rpm", "high", "The fitted speed at the lowest reliable duty; a bound.",
    ),
    "stall_duty_percent": Meaning(
        "Stall duty", "%", "high",
        "The duty at which half of all holds of {hold_time}, reached from above, are survived.",
    ),
    "sustain_99_duty_percent": Meaning(
        "Sustaining duty, 99 %", "%", "high", "The duty at which 99 % of such holds are survived.",
    ),
    "start_duty_percent": Meaning(
        "Start duty", "%", "high",
        "The duty at which half of all starts from rest (no edge for {rest_time}) succeed: at least ten revolutions "
        "within {start_time} and still turning at its end.",
    ),
    "start_99_duty_percent": Meaning(
        "Start duty, 99 %", "%", "high", "The duty at which 99 % of such starts succeed.",
    ),
    "cold_start_duty_percent": Meaning(
        "Cold start duty", "%", "high", "The start duty of the first starts of the night; never pooled with warm ones.",
    ),
    "long_run_duty_percent": Meaning(
        "Long-run duty", "%", "high",
        "One-sided 95 % upper bound of the duty for the service time; rests on the assumptions named beside it.",
    ),
    "long_run_extrapolation_factor": Meaning(
        "Long run: extrapolation in time", "1", "",
        "Service time over the time turned near the long-run duty (near the nearest duty tried, where none is near).",
    ),
    "long_run_model_free_percent": Meaning(
        "Long run: chance without a law", "%", "",
        "What the time turned at or above the long-run duty and the stops in it show without any law of duty: the "
        "chance of the service is at least this (one-sided 95 %).",
    ),
    "long_run_binary_duty_percent": Meaning(
        "Long run by a plain binary model", "%", "",
        "The same bound from a logistic model of whole holds, survived or not; for comparison only.",
    ),
    "start_stall_hysteresis_percent": Meaning(
        "Start duty over stall duty", "%", "high", "Start duty less stall duty.",
    ),
    "kick_99_s": Meaning(
        "Kick-start pulse, 99 %", "s", "high",
        "The pulse at the highest kick duty after which 99 % of starts succeed and last; upper bound.",
    ),
    "kick_99_second_s": Meaning(
        "Kick-start pulse, 99 %, second kick duty", "s", "", "The same at the second highest kick duty.",
    ),
    "kick_99_third_s": Meaning(
        "Kick-start pulse, 99 %, third kick duty", "s", "", "The same at the third highest kick duty.",
    ),
    "kick_charge_amp_seconds": Meaning(
        "Charge of the kick", "A·s", "", "Mean current in the pulse times the pulse of the highest kick duty.",
    ),
    "kick_charge_second_amp_seconds": Meaning(
        "Charge of the kick, second kick duty", "A·s", "", "The same at the second highest kick duty.",
    ),
    "kick_charge_third_amp_seconds": Meaning(
        "Charge of the kick, third kick duty", "A·s", "", "The same at the third highest kick duty.",
    ),
    "stall_speed_rpm": Meaning(
        "Stall speed", "rpm", "high", "The settled speed on the falling branch at the stall duty.",
    ),
    "stall_voltage_volts": Meaning(
        "Mean motor voltage at the stall duty", "V", "high", "The mean motor voltage there, over whole PWM periods.",
    ),
    "top_speed_rpm": Meaning("Top speed", "rpm", "low", "The highest fitted speed in the allowed range of duty."),
    "linearity_percent": Meaning(
        "Departure from a straight line", "%", "high",
        "Largest departure of the fitted speed from the best straight line in the usable range, of the top speed.",
    ),
    "curve_hysteresis_rpm": Meaning(
        "Rising less falling branch", "rpm", "high", "Largest difference of the two branches at one duty.",
    ),
    "resolution_rpm_per_step": Meaning(
        "Speed step", "rpm/step", "high", "Largest change of the fitted speed for one step of the drive.",
    ),
    "repeatability_rpm": Meaning(
        "Repeatability", "rpm", "high",
        "Pooled standard deviation of the settled speed over repeated holds at one setting, worst of three segments.",
    ),
    "drift_percent_per_hour": Meaning(
        "Drift of the reference speed", "%/h", "",
        "Mean change of the speed in the reference holds, from the first to the last, percent of it an hour.",
    ),
    "lapse": Meaning("Lapse", "1", "high", "Chance of a stop in a hold of {hold_time} that duty does not cure."),
    "coast_time_s": Meaning("Coast-down time", "s", "high", "From drive off to the last edge."),
}  # fmt: skip

FLAGS: dict[str, str] = {
    "never_stopped": "the motor never stopped in the allowed range: a bound, not a value",
    "never_started": "the motor never started in the allowed range: a bound, not a value",
    "always_started": "the motor started at every duty or pulse tried: a bound, not a value",
    "law_assumed": "depends on the assumed law; the data cannot choose between laws",
    "extrapolated": "read off the curve beyond the last duty that always turned",
    "extrapolated_in_time": "no hold lasted the service time: limits are not decided by it",
    "extrapolated_in_pulse_time": "outside the pulse times tried",
    "no_hold_near": "no hold was made near the long-run duty",
    "beyond_the_duties_allowed": "lies above the highest duty allowed: no duty is shown to do",
    "other_run_duty_left_out": "kicks that ended at another run duty were left out",
    "not_monotone": "the speed falls again at higher duty",
    "free_air": "no load was stated: free air",
    "self_restart": "the rotor stopped and restarted by itself",
    "supply_limited": "the supply's current limit acted",
    "not_settled_to_tolerance": "did not settle to the tolerance",
    "still_drifting": "settled, but the speed goes on drifting slowly",
    "tap_map_not_monotone": "a tap of the digital potentiometer is out of order",
    "duty_of_tap_not_measured": "the duty of a tap was not measured; it is taken from its neighbours",
    "duty_commanded": "the commanded duty was taken; no duty was measured",
    "duty_not_measured": "no duty was measured, and the switch's delay may shift it by 0.1 % or more",
    "no_replicates": "no setting was repeated: scatter between holds is not in u",
    "segments_without_replicates": "not every segment of duty has repeated holds",
    "from_survivors": "speeds near the stall come from holds that were survived",
    "undecided_left_out": "holds without a decided verdict were left out",
    "stepping_left_out": "holds in which the rotor crept in steps were left out",
    "always_stopped": "every hold tried ended in a stop: a bound, not a value",
    "highest_duty_missing": "the highest duty of the sweep gave no speed: more may be possible",
    "tail_not_tried": "no hold was made where failures are rare: the law carries the interval",
    "few_failures": "rests on few failures",
    "still_warming": "the run-in ended after its longest time, before the speed was as steady as asked for",
    "few_successes": "rests on few successes",
    "aperture_not_whole_periods": "the aperture is not a whole number of PWM periods",
    "gates_missed": "gates of the tachometer were missed",
    "short_window": "the averaging window was cut short",
    "twitched": "the rotor moved and stopped again: no start",
    "rotation_contradicted": "the tachometer says that the rotor turned, voltage and current that it stood",
    "below_lowest_speed": "slower than the lowest speed that the rig can measure",
    "lapse_possible": "stops that duty does not cure, in more than 1 % of the holds, cannot be ruled out",
    "lapse_not_tried": "too few holds well above the threshold to rule out a lapse of 1 %",
    "threshold_scatters": "the threshold differs from hold to hold; the duty is that of a hold drawn at random",
    "threshold_drifts": "the threshold moved through the night; the duty is that at the middle of the trials",
    "heartbeat": "the drive's heartbeat lapsed and switched it off",
    "this_motor_this_night": "this motor, this night",
    "simulated": "from simulated instruments",
}


def meaning(key: str) -> Meaning:
    """The meaning of a finding's full name; for an unlisted one the name itself and the unit its ending says."""
    listed = MEANINGS.get(key) or MEANINGS.get(f"usable_range.{key}")
    if listed is not None:
        return listed
    words = key.split(".")[-1].split("_")
    unit = _UNITS.get(words[-1], "")
    shown = words[:-1] if unit and len(words) > 1 else words
    return Meaning(" ".join(shown).capitalize(), unit, "", "")


def flag_text(flag: str) -> str:
    """A flag in plain words; an unlisted one with its underscores as blanks."""
    head, _, rest = flag.partition(":")
    text = FLAGS.get(head, head.replace("_", " "))
    return f"{text} ({rest.strip()})" if rest.strip() else text
