"""Faults of the simulated bench, as the rig file states them: which kinds there are, when one acts, how strong it is.

Only values; what a fault does is room simbench's. Whether a fault fits its rig is fault_checks.py.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Annotated, Literal

from pydantic import AfterValidator, WithJsonSchema

from sweeprig.job.amounts import Amount, Number, Strict, Words, problem

Place = Literal["answer", "link", "opening", "instrument", "rig"]


@dataclass(frozen=True, slots=True)
class FaultKind:
    """One kind of fault: where it acts, what it does, and the defaults of the keys that it takes (None: takes none).

    place   `answer`, `link` and `instrument` count messages, `opening` counts openings; `rig` knows bench time only
    once    with nothing but a start it acts a single time
    """

    place: Place
    about: str
    delay: float | None = None
    count: int | None = None
    text: str | None = None
    voltage: bool = False
    once: bool = False

    @property
    def takes(self) -> frozenset[str]:
        """The keys of its strength."""
        stated = {"delay": self.delay, "count": self.count, "text": self.text, "voltage": self.voltage or None}
        return frozenset(key for key, value in stated.items() if value is not None)


FAULT_KINDS: Mapping[str, FaultKind] = {
    "late_reply": FaultKind("answer", "the answer comes `delay` late", delay=8.0),
    "no_reply": FaultKind("answer", "the message is obeyed, its answer is lost"),
    "split_reply": FaultKind("answer", "the second half of the answer comes `delay` after the first", delay=0.5),
    "dribble": FaultKind("answer", "each byte of the answer comes `delay` after the last one", delay=0.3),
    "extra_terminator": FaultKind("answer", "an empty line before the answer"),
    "missing_terminator": FaultKind("answer", "the answer has no end"),
    "double_terminator": FaultKind("answer", "an empty line after the answer"),
    "cr_lf": FaultKind("answer", "the answer ends with CR LF"),
    "noise_before": FaultKind("answer", "`count` bytes of noise before the answer", count=4),
    "non_ascii": FaultKind("answer", "`count` bytes of the answer have their highest bit set", count=1),
    "truncated_block": FaultKind("answer", "a block lacks `count` bytes of what its header says", count=3),
    "overlong_block": FaultKind("answer", "a block has `count` bytes more than its header says", count=3),
    "sentinel": FaultKind("answer", "one value of the answer is the number `text`", text="9.91E37"),
    "text_marker": FaultKind("answer", "one value of the answer is the word `text`", text="****"),
    "wrong_count": FaultKind("answer", "the answer has one value too few; a single value comes twice"),
    "identity_changed": FaultKind("answer", "the identity query names the serial number `text`", text="SIM00000000"),
    "close": FaultKind("link", "the instrument closes the connection instead of answering", once=True),
    "reset": FaultKind("link", "the connection is reset instead of an answer", once=True),
    "node_moves": FaultKind("link", "the port vanishes, and is there again after `delay`", delay=2.0, once=True),
    "garbage": FaultKind("link", "bytes without end, `count` every 50 ms; nothing else is heard", count=64),
    "refuse": FaultKind("opening", "a new connection is refused"),
    "accept_silent": FaultKind("opening", "the connection is taken, and nothing ever answers on it"),
    "link_limit": FaultKind(
        "opening", "each opening takes one of `count` links for `delay`; with none left it is refused",
        delay=30.0, count=2,
    ),
    "reset_on_open": FaultKind("opening", "opening restarts the instrument: silent for `delay`, then ready", delay=1.5),
    "restart": FaultKind(
        "instrument", "off and on again: defaults, power-on bit, deaf for `delay`", delay=1.0, once=True
    ),
    "minimum_gap": FaultKind("instrument", "a message sooner than `delay` after the last one is lost", delay=0.01),
    "busy": FaultKind("instrument", "the message and all after it are obeyed only `delay` later", delay=2.0),
    "completion_never": FaultKind("instrument", "`*OPC?` is never answered, and the bit of `*OPC` never comes"),
    "completion_at_once": FaultKind("instrument", "`*OPC?` is answered and `*OPC` done before the work is"),
    "clipped_setting": FaultKind("instrument", "a setting is cut to 90 % and error -222 queued"),
    "standing_error": FaultKind("instrument", "error -240 is queued again as soon as the queue was found empty"),
    "queue_overflow": FaultKind("instrument", "`count` errors at once fill the queue", count=20, once=True),
    "local_mode": FaultKind("instrument", "settings are ignored, queries are answered"),
    "heartbeat_loss": FaultKind("instrument", "the drive switches off as if it had heard nothing", once=True),
    "switch_short": FaultKind("rig", "the switch conducts whatever the gate says"),
    "switch_open": FaultKind("rig", "the switch never conducts"),
    "missing_diode": FaultKind("rig", "no freewheel diode: the switch's breakdown ends the current"),
    "seized_rotor": FaultKind("rig", "the rotor stands and nothing moves it"),
    "loose_coupling": FaultKind("rig", "the tachometer's wheel is loose and coasts, time constant `delay`", delay=2.0),
    "broken_tach_wire": FaultKind("rig", "no tachometer edges"),
    "supply_dropout": FaultKind("rig", "the supply gives at most `voltage` (0 V)", voltage=True),
    "supply_pumped_up": FaultKind("rig", "the supply stands at `voltage` at least (1.5 × the set one)", voltage=True),
    "brush_bounce": FaultKind(
        "rig", "the brushes lift `count` times a second, for `delay` each, at random", delay=0.01, count=5
    ),
    "reverse_rotation": FaultKind("rig", "motor leads swapped: it turns backwards, and its voltage reads negative"),
    "motor_overheats": FaultKind(
        "rig", "the motor binds as it heats: after `delay` even the full voltage cannot turn it", delay=120.0
    ),
}  # fmt: skip
"""Every kind of fault that the simulated bench has, in the order of the manual."""


def _read_kind(kind: str) -> str:
    if kind not in FAULT_KINDS:
        near = difflib.get_close_matches(kind, FAULT_KINDS, 1, 0.5)
        remedy = f'Did you mean "{near[0]}"?' if near else "What each does: sweeprig manual simbench"
        raise problem("the simulated bench has no such fault", kind, ", ".join(FAULT_KINDS), remedy)
    return kind


_KIND_SCHEMA = {"type": "string", "enum": list(FAULT_KINDS)}


class SimulatedFault(Strict):
    """One fault: where (`instrument`, none for faults of the rig), when, and how strong.

    exchange      it begins with the k-th message to the instrument in this session (the k-th opening, for faults of
                  opening) that it can act on, counted from 1; `exchanges`: how many of them, unless `lasts` says so
    probability   of each message (or opening) that the other conditions leave
    start, lasts  bench time; without a start `lasts` counts from the exchange
    delay, count, voltage, text   its strength; which of them a kind takes, and the defaults, are its own
    """

    kind: Annotated[str, AfterValidator(_read_kind), WithJsonSchema(_KIND_SCHEMA)]
    instrument: Annotated[str, Words(32, ascii_only=True)] | None = None
    exchange: Annotated[int, Number(1, 1_000_000_000, "Counted from 1", whole=True)] | None = None
    exchanges: Annotated[int, Number(1, 1_000_000, "How many are struck", whole=True)] | None = None
    probability: Annotated[float, Amount("%", 0.0, 100.0, "A fault that never comes is none", above=True)] | None = None
    start: Annotated[float, Amount("s", 0.0, 604_800.0, "A simulated job lasts no longer than a week")] | None = None
    lasts: Annotated[float, Amount("s", 0.0, 604_800.0, "A fault of no length is none", above=True)] | None = None
    delay: Annotated[float, Amount("s", 0.0, 3600.0, "Longer is the same as never")] | None = None
    count: Annotated[int, Number(1, 65_536, "More is the same as without end", whole=True)] | None = None
    voltage: Annotated[float, Amount("V", 0.0, 120.0, "As far as a rig's limit may go")] | None = None
    text: Annotated[str, Words(72, ascii_only=True)] | None = None

    @property
    def what(self) -> FaultKind:
        return FAULT_KINDS[self.kind]

    @property
    def seconds(self) -> float:
        """`delay`, or its default, s."""
        return (self.what.delay or 0.0) if self.delay is None else self.delay

    @property
    def number(self) -> int:
        """`count`, or its default."""
        return self.count or self.what.count or 0

    @property
    def words(self) -> str:
        """`text`, or its default."""
        return self.text or self.what.text or ""
