"""The served bench with twenty instruments in real time: how late its clock is, and what the serving process costs.

The server is this file in a process of its own; the client asks each instrument at a usual rate, the motor turning.
"""

from __future__ import annotations

import json
import os
import select
import signal
import socket
import statistics
import subprocess
import sys
import time
import tty
from collections.abc import Iterator
from typing import Any

from sweeprig.job import Job, load, shipped
from sweeprig.simbench import serve
from sweeprig.simbench.bench import Bench

LATE_MS, CPU_PERCENT = 10.0, 5.0
WARM_S = 3.0
MESSAGES: dict[str, tuple[bytes, float]] = {
    "board": (b"FETC:COUN?", 0.2),
    "supply": (b"MEAS:VOLT?", 0.25),
    "meter": (b"READ?", 0.25),
    "ammeter": (b"READ?", 0.25),
    "scope": (b"MEAS:FREQ? (@1)", 0.5),
    "node": (b"MEAS:PDUT? (@1)", 0.5),
    "thermometer": (b"MEAS:TEMP? (@1)", 1.0),
    "sound": (b"MEAS:SLEV?", 1.5),
    "generator": (b"SOUR:FREQ?", 1.0),
}
"""What is asked, and every how many seconds; the tachometers send by themselves, four lines a second."""
PREPARED = {
    "supply": [b"SOUR:VOLT 12", b"SOUR:CURR 1.5", b"OUTP ON"],
    "board": [b"SYST:COMM:TIM 3000", b"SOUR:FREQ 1000", b"SOUR:PULS:DCYC 60", b"OUTP ON"],
}


def twenty() -> Job:
    """The full bench's ten, all but the board a second time, and a third meter."""
    job = load(shipped("full-bench"))
    instruments = dict(job.rig.instruments)
    for name, one in job.rig.instruments.items():
        if name != "board":
            instruments[f"{name}-2"] = one
    instruments["meter-3"] = instruments["meter"]
    return job.model_copy(update={"rig": job.rig.model_copy(update={"instruments": instruments})})


def serving() -> None:
    """Serve until SIGTERM; from SIGUSR1 on count how late each event of the bench came and what it cost."""
    late: list[float] = []
    paces: list[serve.Pace] = []
    began = [0.0, 0.0]

    class Pace(serve.Pace):
        def __init__(self, *more: Any) -> None:
            super().__init__(*more)
            paces.append(self)

    stepped = Bench.step

    def step(bench: Bench, to: float) -> bool:
        due = bench.next_event()
        done = stepped(bench, to)
        if done:
            late.append(paces[0].now() - due)
        return done

    def count(*_: object) -> None:
        late.clear()
        began[:] = [time.monotonic(), time.process_time()]

    serve.Pace, Bench.step = Pace, step  # type: ignore[misc, assignment, method-assign]  # timing only
    signal.signal(signal.SIGUSR1, count)
    serve.serve(twenty(), 1.0, ready=lambda addresses: print(json.dumps(addresses), flush=True), signals=True)
    wall_s, own_s = time.monotonic() - began[0], time.process_time() - began[1]
    print(json.dumps({"late": sorted(late), "wall_s": wall_s, "own_s": own_s}), flush=True)


class Asked:
    """One instrument, asked at its rate; the next question waits for the last answer."""

    def __init__(self, name: str, address: str) -> None:
        self.kind = name.partition("-")[0]
        self.message, self.every_s = MESSAGES.get(self.kind, (b"", float("inf")))
        self.due, self.answers, self._waits = 0.0, 0, False
        self._socket: socket.socket | None = None
        if address.startswith("serial:"):
            self.handle = os.open(address.removeprefix("serial:"), os.O_RDWR | os.O_NOCTTY)
            tty.setraw(self.handle)
        else:
            _, host, port, _ = address.split("::")
            self._socket = socket.create_connection((host, int(port)), 10.0)
            self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self.handle = self._socket.fileno()
        for line in PREPARED.get(name, []):
            os.write(self.handle, line + b"\n")

    def ask(self, now: float) -> None:
        if now >= self.due and not self._waits and self.message:
            os.write(self.handle, self.message + b"\n")
            self.due, self._waits = now + self.every_s, True

    def read(self) -> None:
        if b"\n" in os.read(self.handle, 4096):
            self._waits = False
            self.answers += 1

    def close(self) -> None:
        if self._socket is None:
            os.close(self.handle)
        else:
            self._socket.close()


def served(seconds: float) -> tuple[dict[str, Any], int]:
    """What the server counted in so many seconds, and how many answers the client had of all instruments."""
    server = subprocess.Popen([sys.executable, __file__], stdout=subprocess.PIPE, text=True)
    try:
        assert server.stdout is not None
        asked = [Asked(*each) for each in json.loads(server.stdout.readline()).items()]
        try:
            _ask(asked, WARM_S)
            server.send_signal(signal.SIGUSR1)
            before = [each.answers for each in asked]
            _ask(asked, seconds)
            answers = [each.answers - earlier for each, earlier in zip(asked, before, strict=True)]
        finally:
            for each in asked:
                each.close()
        silent = [each.kind for each, count in zip(asked, answers, strict=True) if not count]
        if silent:
            raise RuntimeError(f"no answer of {', '.join(silent)}: nothing was measured")
        server.terminate()
        return json.loads(server.stdout.readline()), sum(answers)
    finally:
        server.kill()
        server.wait(10)
        if server.stdout is not None:
            server.stdout.close()


def _ask(asked: list[Asked], seconds: float) -> None:
    by_handle = {each.handle: each for each in asked}
    end = time.monotonic() + seconds
    while (now := time.monotonic()) < end:
        for each in asked:
            each.ask(now)
        due = min(each.due if each.due > now else end for each in asked)
        for handle in select.select(list(by_handle), [], [], max(0.0, min(due, end) - now))[0]:
            by_handle[handle].read()


def figures(full: bool) -> Iterator[dict[str, Any]]:
    counted, answers = served(120.0 if full else 20.0)
    late = counted["late"]
    ms = 1000.0 * late[min(len(late) - 1, round(0.99 * len(late)))]
    yield {
        "figure": "serve_late_ms", "value": round(ms, 2), "target": f"<= {LATE_MS:g}", "meets": ms <= LATE_MS,
        "n": len(late), "median_ms": round(1000.0 * statistics.median(late), 3),
        "worst_ms": round(1000.0 * late[-1], 2),
    }  # fmt: skip
    percent = 100.0 * counted["own_s"] / counted["wall_s"]
    yield {
        "figure": "serve_cpu_percent", "value": round(percent, 2), "target": f"<= {CPU_PERCENT:g}",
        "meets": percent <= CPU_PERCENT, "n": answers, "wall_s": round(counted["wall_s"], 1),
    }  # fmt: skip


if __name__ == "__main__":
    serving()
