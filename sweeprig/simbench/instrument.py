"""What every simulated instrument shares: running a message, status registers, error queue, the common commands.

After IEEE 488.2 chapters 6, 10 and 11 and SCPI-1999 vol. 2, chapter 21. What an instrument measures is not here.
"""

from __future__ import annotations

import random
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, TypeVar

from sweeprig.errors import ConfigError
from sweeprig.quantities import Accuracy
from sweeprig.simbench.panel import KEY, Panel
from sweeprig.simbench.port import Port, Receiver
from sweeprig.simbench.pwm_timer import PwmTimer
from sweeprig.simbench.scpi import (
    CommandTree,
    Finish,
    Later,
    Refused,
    Unit,
    error_answer,
    event_bit,
    integer,
    nr1,
    parse_message,
)

if TYPE_CHECKING:
    from sweeprig.simbench.bench import Bench

PortKind = TypeVar("PortKind", bound=Port)

MAKER = "SIMULATED"
FIRMWARE = "1.0"
QUEUE_DEPTH = 16
POWER_ON = 128
OPERATION_COMPLETE = 1
REMEMBERED_MESSAGES = 512
DEFAULT_LATENCY_S = 1e-3
"""Answer time of an instrument on a local network; common practice, no source."""


@dataclass(frozen=True, slots=True)
class Setup:
    """What one simulated instrument is built from.

    name          as in the rig file
    serial        of the identity; the same instrument has the same serial in every session
    connected_to  where its leads go, in the words of the rig file
    accuracy      quantity → statement; the instrument's own errors are drawn from it
    options       the rig file's options
    errors        the rig file's `[simulated.NAME]` table: overrides, plain numbers
    errors_rng    seeded by (sweep seed, name): the same instrument in every session
    noise         seeded by (sweep seed, session, name): never the same noise twice
    terminator    that ends its messages and answers
    pwm_timer     for the board: the timer whose potentiometer it steps; then the gate is the timer's, not the pin's
    """

    name: str
    serial: str
    errors_rng: random.Random
    noise: random.Random
    connected_to: str = "none"
    accuracy: Mapping[str, Accuracy] = field(default_factory=dict)
    options: Mapping[str, object] = field(default_factory=dict)
    errors: Mapping[str, float] = field(default_factory=dict)
    terminator: bytes = b"\n"
    pwm_timer: PwmTimer | None = None

    def error(self, key: str, default: float) -> float:
        return float(self.errors.get(key, default))


@dataclass(frozen=True, slots=True)
class ScaleError:
    """reading = true × gain + offset."""

    gain: float
    offset: float


def draw_scale_error(setup: Setup, quantity: str) -> ScaleError:
    """Gain and offset error of one quantity, each from a rectangle as wide as the accuracy statement allows.

    `QUANTITY_gain_error_percent` and `QUANTITY_offset_error` of the rig file's `[simulated.NAME]` table replace them.
    """
    stated = setup.accuracy.get(quantity, Accuracy())
    gain_percent = setup.errors_rng.uniform(-1.0, 1.0) * stated.percent_of_reading
    offset = setup.errors_rng.uniform(-1.0, 1.0) * stated.plus
    gain_percent = setup.error(f"{quantity}_gain_error_percent", gain_percent)
    return ScaleError(1.0 + gain_percent / 100.0, setup.error(f"{quantity}_offset_error", offset))


def require_connection(setup: Setup, allowed: tuple[str, ...]) -> None:
    """ConfigError where the rig file connects this instrument to a place that it cannot measure."""
    if setup.connected_to not in allowed:
        raise ConfigError(
            f"the simulated instrument {setup.name} cannot measure there",
            value=setup.connected_to,
            allowed=", ".join(allowed),
            remedy=f"Set connected_to of {setup.name} in the rig file",
            topic="simbench",
        )


def check_error_keys(setup: Setup, quantities: tuple[str, ...], error_keys: tuple[str, ...]) -> None:
    """ConfigError for a key of the `[simulated.NAME]` table that this instrument would ignore."""
    allowed = ["latency", *error_keys]
    for quantity in quantities:
        allowed += [f"{quantity}_gain_error_percent", f"{quantity}_offset_error"]
    for key in setup.errors:
        if key not in allowed:
            raise ConfigError(
                f"the simulated instrument {setup.name} has no such error",
                value=key,
                allowed=", ".join(allowed),
                remedy=f"Correct the table [simulated.{setup.name}] of the rig file",
                topic="simbench",
            )


class _Waiting:
    """A message that waits for an answer: where it goes on, and what has been answered so far."""

    __slots__ = ("answers", "finish", "position", "program")

    def __init__(self, program: tuple[Unit, ...], position: int, answers: list[str], finish: Finish) -> None:
        self.program = program
        self.position = position
        self.answers = answers
        self.finish = finish


class Instrument:
    """One instrument on the bench. Subclasses add commands to `tree` and say what `reset` does.

    changes      state-changing message units obeyed so far; queries do not count
    quantities   what it measures with a gain and an offset error
    error_keys   further keys that its `[simulated.NAME]` table may have
    hasty        says that operations are complete before they are; a fault sets it
    has_panel    a person can turn it too, so it has a remote and a local state (panel.py)
    """

    model = "instrument"
    quantities: tuple[str, ...] = ()
    error_keys: tuple[str, ...] = ()
    byte_s = 0.0
    latency_s = DEFAULT_LATENCY_S
    longest_line = 4096
    has_panel = True

    def __init__(self, setup: Setup, bench: Bench) -> None:
        check_error_keys(setup, self.quantities, (*self.error_keys, *([KEY] if self.has_panel else ())))
        self.setup = setup
        self.name = setup.name
        self.bench = bench
        self.changes = 0
        self.panel = Panel(setup.error(KEY, 0.0) > 0.0) if self.has_panel else None
        self.tree = self.panel or CommandTree()
        self.port = self.new_port(Port, self)
        self.hasty = False
        self._programs: dict[bytes, tuple[Unit, ...]] = {}
        self._waiting: _Waiting | None = None
        self._held: deque[bytes] = deque()
        self._answers: list[str] = []
        self._errors: deque[tuple[int, str]] = deque()
        self._event_status = POWER_ON
        self._event_enable = 0
        self._service_enable = 0
        self._add_common()

    def new_port(self, kind: Callable[..., PortKind], receiver: Receiver) -> PortKind:
        """A port with this instrument's latency, line and terminator, in front of `receiver`."""
        latency_s = self.setup.error("latency", self.latency_s)
        return kind(self.bench, receiver, latency_s, self.byte_s, self.longest_line, self.setup.terminator)

    # what subclasses say

    def reset(self) -> None:
        """*RST: settings to their defaults; status and error queue stay (IEEE 488.2, 10.32)."""

    def pending_until(self) -> float:
        """Bench time at which the last overlapped operation ends; now or earlier when nothing is pending."""
        return 0.0

    # messages

    def receive(self, line: bytes) -> None:
        """One line, now. A message that comes before the last one's answer is formed interrupts it: -410."""
        waiting = self._waiting
        if waiting is not None and not self._interrupt(waiting):
            self._held.append(line)
            return
        program = self._programs.get(line)
        if program is None:
            program = self._remember(line)
        if len(program) != 1:
            self._run(program, 0, [])
            return
        # what `_run` does, for a message of one unit: nearly all are
        ((handler, parameters, query),) = program
        self._answers = []
        try:
            answer = handler(parameters)
        except Refused as refused:
            self.error(refused.number, refused.detail)
            return
        if not query:
            self.changes += 1
        if isinstance(answer, str):
            self.port.send(answer)
        elif answer is not None:
            self._wait(program, 1, [], answer)

    def overrun(self) -> None:
        self.error(-363)

    def _remember(self, line: bytes) -> tuple[Unit, ...]:
        if len(self._programs) >= REMEMBERED_MESSAGES:
            self._programs.clear()
        program = self._programs[line] = parse_message(line, self.tree)
        return program

    def _interrupt(self, waiting: _Waiting) -> bool:
        """False when the waiting message asks nothing (a *WAI): the new one waits behind it."""
        if not waiting.answers and not any(unit.query for unit in waiting.program):
            return False
        self._waiting = None
        self._held.clear()
        self.error(-410)
        return True

    def _wait(self, program: tuple[Unit, ...], position: int, answers: list[str], later: Later) -> None:
        self._waiting = waiting = _Waiting(program, position, answers, later.finish)
        self.bench.at(later.at, self._resume, waiting)

    def _run(self, program: tuple[Unit, ...], position: int, answers: list[str]) -> None:
        self._answers = answers
        for handler, parameters, query in program[position:] if position else program:
            position += 1
            try:
                answer = handler(parameters)
            except Refused as refused:
                self.error(refused.number, refused.detail)
                continue
            if not query:
                self.changes += 1
            if answer is None:
                continue
            if isinstance(answer, str):
                answers.append(answer)
                continue
            self._wait(program, position, answers, answer)
            return
        if answers:
            self.port.send(answers[0] if len(answers) == 1 else ";".join(answers))

    def _resume(self, argument: object) -> None:
        waiting = self._waiting
        if waiting is None or waiting is not argument:
            return
        self._waiting = None
        answer = waiting.finish()
        if answer is not None and not waiting.answers and waiting.position == len(waiting.program):
            self.port.send(answer)
        else:
            if answer is not None:
                waiting.answers.append(answer)
            self._run(waiting.program, waiting.position, waiting.answers)
        while self._held and self._waiting is None:
            self.receive(self._held.popleft())

    # status

    def error(self, code: int, detail: str = "") -> None:
        """Queue an error and set its event bit; on overflow the newest entry becomes -350 (SCPI-1999, 21.8)."""
        self._event_status |= event_bit(code)
        if len(self._errors) < QUEUE_DEPTH:
            self._errors.append((code, detail))
        else:
            self._errors[-1] = (-350, "")

    def power_on(self) -> None:
        """The instrument was off and is on again: defaults, an empty queue, nothing under way, the power-on bit set."""
        self._waiting = None
        self._held.clear()
        self._errors.clear()
        self._event_status = POWER_ON
        self._event_enable = self._service_enable = 0
        if self.panel is not None:
            self.panel.power_on()
        self.port.flush()
        self.reset()

    def _add_common(self) -> None:
        add = self.tree.add
        add("*IDN?", lambda _: self.identity(), indefinite=True)
        add("*RST", lambda _: self.reset())
        add("*CLS", self._clear)
        add("*ESR?", self._event_status_query)
        add("*ESE", self._set_event_enable, 1, 1)
        add("*ESE?", lambda _: nr1(self._event_enable))
        add("*STB?", lambda _: nr1(self._status_byte()))
        add("*SRE", self._set_service_enable, 1, 1)
        add("*SRE?", lambda _: nr1(self._service_enable))
        add("*OPC", self._operation_complete)
        add("*OPC?", lambda _: self._when_complete("1"))
        add("*WAI", lambda _: self._when_complete(None))
        add("*TST?", lambda _: "0")
        add("SYSTem:ERRor[:NEXT]?", self._next_error)
        add("SYSTem:VERSion?", lambda _: "1999.0")

    def identity(self) -> str:
        """Maker, model, serial, firmware (IEEE 488.2, 10.14)."""
        return f"{MAKER},{self.model},{self.setup.serial},{FIRMWARE}"

    def _clear(self, _: tuple[str, ...]) -> None:
        self._errors.clear()
        self._event_status = 0

    def _event_status_query(self, _: tuple[str, ...]) -> str:
        status, self._event_status = self._event_status, 0
        return nr1(status)

    def _set_event_enable(self, parameters: tuple[str, ...]) -> None:
        self._event_enable = integer(parameters[0], 0, 255)

    def _set_service_enable(self, parameters: tuple[str, ...]) -> None:
        self._service_enable = integer(parameters[0], 0, 255) & ~64

    def questionable(self) -> bool:
        """Whether the questionable summary (bit 3 of the status byte) is set."""
        return False

    def _status_byte(self) -> int:
        """Bits 2 error queue, 3 questionable, 4 answer there, 5 event summary, 6 master summary."""
        status = (4 if self._errors else 0) | (8 if self.questionable() else 0) | (16 if self._answers else 0)
        status |= 32 if self._event_status & self._event_enable else 0
        return status | (64 if status & self._service_enable else 0)

    def _operation_complete(self, _: tuple[str, ...]) -> None:
        until = 0.0 if self.hasty else self.pending_until()
        if until <= self.bench.now:
            self._complete(None)
        else:
            self.bench.at(until, self._complete, None)

    def _complete(self, _: object) -> None:
        self._event_status |= OPERATION_COMPLETE

    def _when_complete(self, answer: str | None) -> str | Later | None:
        until = 0.0 if self.hasty else self.pending_until()
        return answer if until <= self.bench.now else Later(until, lambda: answer)

    def _next_error(self, _: tuple[str, ...]) -> str:
        return error_answer(self._errors.popleft() if self._errors else (0, ""))
