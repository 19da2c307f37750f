"""The simulated bench for other processes: its instruments on real sockets and a pseudo-terminal, at N times real time.

One loop with select; bench time follows the machine's monotonic clock. No motor, no message is understood here; what
ends serving is serve_ends.py.
"""

from __future__ import annotations

import json
import os
import select
import time
from collections.abc import Callable
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING

from sweeprig.errors import ConfigError
from sweeprig.job.frozen_text import rig_document
from sweeprig.quantities import parse_quantity, show_quantity
from sweeprig.simbench.bench import Bench, Happened
from sweeprig.simbench.board import DEFAULT_HEARTBEAT_S
from sweeprig.simbench.build import build
from sweeprig.simbench.endpoints import Endpoint, endpoint
from sweeprig.simbench.serve_ends import LOOK_S, Ends

if TYPE_CHECKING:
    from typing import TextIO

    from sweeprig.job import Job
    from sweeprig.job.rig_models import Rig

RATES = (1.0, 1000.0)
SHORTEST_HEARTBEAT_S = 0.05
"""Real seconds; below this an ordinary machine's scheduling fakes a lost heartbeat."""
LONGEST_WAIT_S = 3600.0
"""Real seconds; an operating system may refuse to sleep without end."""


class Pace:
    """Bench time bound to the machine's monotonic clock from now on: `rate` bench seconds in one real second."""

    def __init__(self, bench: Bench, rate: float) -> None:
        self._bench, self._rate = bench, rate
        self._began, self._began_real = bench.now, time.monotonic()

    def now(self) -> float:
        """Bench time as the real clock has it, s; the bench itself may not have come so far yet."""
        return self._began + (time.monotonic() - self._began_real) * self._rate

    def catch_up(self) -> None:
        self._bench.advance(self.now())

    def real_s(self, until: float) -> float:
        """Real seconds until that bench time, from 0."""
        return max(0.0, (until - self.now()) / self._rate)


def serve(
    job: Job,
    rate: float,
    write: Path | None = None,
    stop: Callable[[], bool] | None = None,
    ready: Callable[[dict[str, str]], None] | None = None,
    *,
    record: Path | None = None,
    tied: bool = False,
    signals: bool = False,
    session: int = 1,
) -> str:
    """Serve the job's simulated bench until told to stop; the answer is what ended it.

    rate     bench seconds in one real second, 1 to 1000; ConfigError where a heartbeat would last under 50 ms
    write    the rig file with the opened addresses and the rate, put in place whole once all are listening
    stop     looked at every 20 ms; True ends serving
    ready    called once with instrument name → address, when a client may come
    record   JSON lines of what drive and supply really did: `mono` (time.monotonic, s), `at` (bench, s), `what`, `why`
    tied     also end when standard input ends or the parent process is gone
    signals  also end with SIGTERM, SIGHUP and Ctrl-C; in the main thread only
    Closes every socket and terminal on the way out, whatever the reason.
    """
    check_rate(job, rate)
    with ExitStack() as opened:
        ends = opened.enter_context(Ends(stop, tied, signals))
        bench = build(job, session)
        if record is not None:
            bench.on_record = _recorder(opened.enter_context(record.open("w", encoding="utf-8")))
        endpoints: dict[str, Endpoint] = {}
        for name, instrument in bench.instruments.items():
            endpoints[name] = endpoint(instrument.port, serial=instrument.byte_s > 0.0)
            opened.callback(endpoints[name].close)
        addresses = {name: each.address for name, each in endpoints.items()}
        if write is not None:
            write_whole(write, rig_document(served_rig(job.rig, addresses, rate)))
        if ready is not None:
            ready(addresses)
        return _loop(bench, list(endpoints.values()), Pace(bench, rate), ends)


def check_rate(job: Job, rate: float) -> None:
    """ConfigError where a real heartbeat would be too short to keep, or the rate is none that a rig file can state."""
    if not RATES[0] <= rate <= RATES[1]:
        raise ConfigError("no such rate", value=f"{rate:g}", allowed=f"{RATES[0]:g} to {RATES[1]:g}", topic="simbench")
    for name, instrument in job.rig.instruments.items():
        if instrument.adapter != "board":
            continue
        heartbeat_s = parse_quantity(str(instrument.options.get("heartbeat", f"{DEFAULT_HEARTBEAT_S} s")), "s")
        if heartbeat_s / rate < SHORTEST_HEARTBEAT_S:
            raise ConfigError(
                f"at this rate the heartbeat of {name}, {show_quantity(heartbeat_s, 's')}, lasts only "
                f"{show_quantity(heartbeat_s / rate, 's')} of real time",
                value=f"{rate:g}",
                allowed=f"up to {heartbeat_s / SHORTEST_HEARTBEAT_S:g}",
                remedy="Serve it slower, or lengthen options.heartbeat in the rig file",
                topic="simbench",
            )


def served_rig(rig: Rig, addresses: dict[str, str], rate: float) -> Rig:
    """The rig with these addresses and this rate; all else as it was."""
    instruments = {
        name: instrument.model_copy(update={"address": addresses[name]}) for name, instrument in rig.instruments.items()
    }
    return rig.model_copy(update={"instruments": instruments, "rate": rate})


def write_whole(path: Path, text: str) -> None:
    """Put a file in place in one step: a reader sees the old one, none, or all of the new one."""
    unfinished = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        unfinished.write_text(text, encoding="utf-8")
        unfinished.replace(path)
    finally:
        unfinished.unlink(missing_ok=True)


def _recorder(file: TextIO) -> Callable[[Happened], None]:
    def put_down(happened: Happened) -> None:
        file.write(json.dumps({"mono": time.monotonic(), **happened._asdict()}) + "\n")
        file.flush()

    return put_down


def _loop(bench: Bench, endpoints: list[Endpoint], pace: Pace, ends: Ends) -> str:
    """Serve until one of `ends` comes, and say which. Between two events it sleeps in select; nothing is polled that
    the system can report."""
    readable: list[int] = []
    while not (why := ends.come(readable)):
        pace.catch_up()
        due = bench.next_event()
        handles, blocked, longest_s = list(ends.handles), [], ends.longest_wait_s
        for each in endpoints:
            each.give()
            due = min(due, each.port.next_ready())
            handle = each.handle()
            if handle is not None:
                handles.append(handle)
                if each.unsent:
                    blocked.append(handle)
            elif each.unseen():
                longest_s = LOOK_S
        readable, _, _ = select.select(handles, blocked, [], min(longest_s or LONGEST_WAIT_S, pace.real_s(due)))
        pace.catch_up()
        for each in endpoints:
            if each.handle() in readable or each.unseen():
                each.take()
    return why
