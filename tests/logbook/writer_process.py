"""A process that writes a logbook until it is killed. Not a test: `test_kill.py` starts it.

    loop PATH            conclude what was left, then hold after hold; every third hold a clean end and a new start
    at PATH COUNT        fork COUNT children one after another; the n-th kills itself before its n-th SQL statement
    hold PATH            open the logbook, say "held", wait for end of input

Each line that `loop` prints was committed before it was printed.
"""

from __future__ import annotations

import os
import shutil
import signal
import sys
from pathlib import Path

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.logbook import Logbook
from sweeprig.quantities import Reading

READINGS_A_HOLD = 40


def say(text: str) -> None:
    sys.stdout.write(text + "\n")
    sys.stdout.flush()


def make(number: int) -> Hold:
    condition = Condition(1000.0, 12.0)
    return Hold(number, Purpose.STALL, Approach.FALLING, condition, 14.5, 1.0, 20.0, EndsWhen.STOPPED, ("speed",), "")


def perform(book: Logbook, session: int, number: int, readings: int) -> None:
    hold, at = make(number), 30.0 * number
    book.event("hold_began", at, at, {"number": number})
    book.intend(hold, session, at, at)
    say(f"intended {number}")
    done = Outcome(number, hold, session, Status.DONE, Verdict.TURNING, at, at + 20.0, at, at + 20.0)
    book.conclude(done, [Reading(float(index), 0.0, "rpm", at, "board.speed") for index in range(readings)])
    say(f"concluded {number}")


def start(path: Path) -> tuple[Logbook, int, int]:
    book = Logbook.open(path) if path.exists() else Logbook.create(path, "job", "hash", "software")
    at = book.last_times() or (0.0, 0.0)
    session = book.begin_session(at[0], at[1], {})
    for hold, begun, began, began_utc in book.unfinished():
        left = (Status.ABANDONED, Verdict.UNDECIDED, began, at[0], began_utc, at[1])
        book.conclude(Outcome(hold.number, hold, begun, *left), [])
    return book, session, len(book.intents()) + 1


def loop(path: Path) -> None:
    while True:
        book, session, number = start(path)
        for next_number in range(number, number + 3):
            perform(book, session, next_number, READINGS_A_HOLD)
        book.close(clean=True)


def kill_at(path: Path, count: int) -> None:
    for statement in range(1, count + 1):
        copy = path.with_name(str(statement)) / path.name
        copy.parent.mkdir()
        shutil.copy(path, copy)
        child = os.fork()
        if child == 0:
            perform_until(copy, statement)
        say(f"{statement} {os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])}")


def perform_until(path: Path, statement: int) -> None:
    """Two holds; SIGKILL just before the n-th SQL statement. Does not return."""
    left = statement

    def count_down(_: str) -> None:
        nonlocal left
        left -= 1
        if left == 0:
            os.kill(os.getpid(), signal.SIGKILL)

    null = os.open(os.devnull, os.O_WRONLY)
    os.dup2(null, 1)
    book, session, number = start(path)
    book._connection.set_trace_callback(count_down)
    perform(book, session, number, 3)
    perform(book, session, number + 1, 3)
    book.close(clean=True)
    os._exit(0)


def hold_open(path: Path) -> None:
    with Logbook.open(path):
        say("held")
        sys.stdin.read()


if __name__ == "__main__":
    if sys.argv[1] == "loop":
        loop(Path(sys.argv[2]))
    elif sys.argv[1] == "at":
        kill_at(Path(sys.argv[2]), int(sys.argv[3]))
    else:
        hold_open(Path(sys.argv[2]))
