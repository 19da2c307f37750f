"""Makes `data/version-1`, one small run of logbook format 1. Run once, when the format was released; never again:

    python tests/logbook/make_version_1.py tests/logbook/data/version-1

The files then stand for every run that users keep. `expected.json` is what the release that wrote it read back. The
numbers are invented.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

from sweeprig import job
from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.logbook import Logbook, Reader, values
from sweeprig.quantities import Reading
from sweeprig.roles import Identity

UTC = 1_772_470_800.0
CONDITION = Condition(1000.0, 12.0)
ROLES = ("speed", "motor_voltage", "duty")


def run_in() -> tuple[Hold, Outcome, list[Reading]]:
    hold = Hold(
        1, Purpose.RUN_IN, Approach.RISING, CONDITION, 60.0, 240.0, 240.0, EndsWhen.TIME, ROLES, "warms the motor"
    )
    means = {"board.speed": Reading(3310.25, 0.5, "rpm", 244.0, "board.speed")}
    readings = [
        Reading(3310.0, 0.33, "rpm", 100.0, "board.speed", (), "3310.0"),
        Reading(7.1875, 0.002, "V", 100.5, "meter.volts", (), "+7.187500E+00"),
        Reading(None, 0.0, "V", 101.0, "meter.volts", ("no_data:overload",), "+9.90000000E+37"),
    ]
    outcome = Outcome(
        1, hold, 1, Status.DONE, Verdict.TURNING, 4.0, 244.0, UTC + 4.0, UTC + 244.0, 240.0, (240.0, None), 0, means
    )
    return hold, outcome, readings


def stall() -> tuple[Hold, Outcome, list[Reading]]:
    hold = Hold(
        2, Purpose.STALL, Approach.FALLING, CONDITION, 14.5, 1.0, 20.0, EndsWhen.STOPPED, ROLES,
        "is the stall duty above 14.5 %?", ((26.5, 4.0),),
    )  # fmt: skip
    readings = [Reading(611.5, 0.06, "rpm", 250.0, "board.speed", (), "611.5")]
    outcome = Outcome(
        2, hold, 1, Status.DONE, Verdict.STOPPED, 245.0, 259.0, UTC + 245.0, UTC + 259.0, 9.25, (9.0, 9.25), 1, {},
        ("self_restart",),
    )  # fmt: skip
    return hold, outcome, readings


def start_trial() -> Hold:
    return Hold(
        3, Purpose.START, Approach.FROM_REST, CONDITION, 22.0, 3.0, 3.0, EndsWhen.TIME, ROLES, "does it start?",
        ((0.0, 5.0),), 4,
    )  # fmt: skip


def write(folder: Path) -> None:
    text = job.document(job.load(job.shipped("demo")))
    (folder / "job.toml").write_text(text, "utf-8", newline="\n")
    path = folder / "logbook.sqlite"
    with Logbook.create(path, text, job.job_hash(text), "sweeprig 0.1.0") as book:
        book.begin_session(0.0, UTC, {"attended": False})
        book.instrument(1, "meter", Identity("SIMULATED", "multimeter", "0", "1"), {"aperture": "0.2"}, 0.5)
        for hold, outcome, readings in (run_in(), stall()):
            book.event("hold_began", outcome.began, outcome.began_utc, {"number": hold.number})
            book.intend(hold, 1, outcome.began, outcome.began_utc)
            book.conclude(outcome, readings)
        book.intend(start_trial(), 1, 260.0, UTC + 260.0)
    path.with_name("logbook.lock").unlink()
    expected = json.dumps(read_back(path), indent=1, ensure_ascii=False)
    (folder / "expected.json").write_text(expected + "\n", "utf-8", newline="\n")


def read_back(path: Path) -> dict[str, object]:
    """All that the logbook tells, as plain JSON values."""
    reader = Reader(path)
    told = {
        "head": reader.head(),
        "sessions": reader.sessions(),
        "outcomes": [values.outcome_to_json(outcome) for outcome in reader.outcomes()],
        "unfinished": [[values.hold_to_json(hold), *times] for hold, *times in reader.unfinished()],
        "readings": {str(n): [values.reading_to_json(one) for one in reader.readings(n)] for n in (1, 2, 3)},
        "events": reader.events(),
        "instruments": reader.instruments(),
        "last_times": reader.last_times(),
    }
    plain: dict[str, object] = values.load(values.dump(told))
    return plain


if __name__ == "__main__":
    target = Path(sys.argv[1])
    target.mkdir(parents=True)
    write(target)
