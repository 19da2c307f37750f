"""Short nights on the simulated bench, each with planned faults drawn from one number. Here: the benches, the jobs, the
drawing of faults. What a night did is fault_nights.py's, whether its numbers are right is night_numbers.py's."""

from __future__ import annotations

import random
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sweeprig.job.fault_models import FAULT_KINDS

CONFIGS = Path(__file__).parents[2] / "configs"

SWEEP = """
name = "short"
pwm = ["PWM"]
supply = ["12 V"]
duty = { low = "0 %", high = "100 %" }
lowest_speed = "60 rpm"
seed = SEED
[zero]
time = "2 s"
[run_in]
duty = "60 %"
time = "10 s"
[curve]
duties = ["100 %", "60 %", "30 %", "20 %", "16 %", "14 %", "12 %"]
least = "2 s"
most = "8 s"
[stall]
search = "ladder"
hold_time = "8 s"
step = "1 %"
holds = 5
relaunch_above = "12 %"
relaunch_time = "3 s"
[start]
search = "ladder"
start_time = "5 s"
rest_time = "2 s"
step = "1 %"
trials = 5
[settle]
tolerance = "2 %"
"""

LENGTH_S = 180.0
"""Bench time of such a night, about; with trouble in it it lasts longer."""
MESSAGES, MESSAGES_BOARD = 250, 1200
"""Faults by number begin with one of so many first messages to an instrument."""


@dataclass(frozen=True)
class Kind:
    """A rig and a motor on it. heartbeat_s: of the drive; input: the fan has a control input, off is supply off.

    blocks   the frequency is the second scope's, which sends its captured waveform with it
    """

    rig: str
    motor: str
    instruments: tuple[str, ...]
    heartbeat_s: float = 2.0
    pwm: str = "1 kHz"
    input: bool = False
    blocks: bool = False

    @property
    def plant(self) -> bool:
        """Its motor has friction and a stage: it can bind, and its stage can lack a part."""
        return self.motor == "aspirator-fan"


_SMALL = ("board", "supply", "meter", "scope")
_FULL = (*_SMALL, "ammeter", "node", "thermometer", "sound", "generator", "tachometer")
KINDS: Mapping[str, Kind] = {
    "small, fan": Kind("shelter-bench", "aspirator-fan", _SMALL),
    "small, prescribed": Kind("shelter-bench", "prescribed-fan", _SMALL),
    "full, fan": Kind("full-bench", "aspirator-fan", _FULL, 3.0, blocks=True),
    "full, prescribed": Kind("full-bench", "prescribed-fan", _FULL, 3.0),
    "input": Kind("shelter-bench-4wire", "aspirator-fan-4wire", _SMALL, pwm="25 kHz", input=True),
}
"""By name. Physical motor and cheap prescribed one on two rigs, and a fan with a control input."""

BLOCKS, PLANTS = ("truncated_block", "overlong_block"), ("seized_rotor", "motor_overheats", "missing_diode")
BREAKS = ("close", "reset", "node_moves", "no_reply")
ASKED_SELDOM = ("identity_changed", "standing_error")
"""What they act on is asked at the start and in healing only, as is the opening of a link."""
NEVER_ASKED = ("completion_never", "completion_at_once")
"""No adapter or dialect that comes with sweeprig asks for completion: they are planned, and never act."""


@dataclass(frozen=True)
class Night:
    """One night: `seed` is all that it depends on, `kind` a name of KINDS, `faults` tables for [[simulated_faults]]."""

    seed: int
    kind: str
    faults: tuple[Mapping[str, Any], ...] = ()

    @property
    def names(self) -> str:
        """Its faults in one line, as the rig file would have them."""
        return "; ".join(" ".join(f"{key}={value}" for key, value in fault.items()) for fault in self.faults)


def healthy(seed: int, kind: str | None = None) -> Night:
    return Night(seed, kind or tuple(KINDS)[seed % len(KINDS)])


def struck(seed: int) -> Night:
    """The night of that number: every kind of fault leads in turn, on another instrument and bench each time."""
    rng = random.Random(f"night {seed}")
    order = tuple(FAULT_KINDS)
    first = order[seed % len(order)]
    fitting = [name for name in KINDS if places(first, KINDS[name])]
    kind = fitting[seed // len(order) % len(fitting)]
    there = places(first, KINDS[kind])
    faults = [drawn(first, there[seed // len(order) // len(fitting) % len(there)], rng)]
    if seldom(first) and rng.random() < 0.8:
        # A link that is opened again: only then is there an opening in the middle of a night.
        faults.append(drawn(rng.choice(BREAKS), faults[0]["instrument"], rng))
    elif rng.random() < 0.5:
        second = rng.choice([each for each in order if places(each, KINDS[kind])])
        faults.append(drawn(second, rng.choice(places(second, KINDS[kind])), rng))
    return Night(seed, kind, tuple(faults))


def seldom(fault: str) -> bool:
    return FAULT_KINDS[fault].place == "opening" or fault in ASKED_SELDOM


def places(fault: str, kind: Kind) -> Sequence[str | None]:
    """Instruments of this bench that can have the fault; [None] for one of the rig; empty where none can."""
    if FAULT_KINDS[fault].place == "rig":
        return [] if fault in PLANTS and not kind.plant else [None]
    if fault in BLOCKS:
        return ["node"] if kind.blocks else []
    if fault == "heartbeat_loss":
        return ["board"]
    return kind.instruments


def drawn(fault: str, instrument: str | None, rng: random.Random) -> dict[str, Any]:
    """A fault of this kind at a random moment, for a random time, of a random strength."""
    what = FAULT_KINDS[fault]
    table: dict[str, Any] = {"kind": fault}
    if instrument is not None:
        table["instrument"] = instrument
    if what.place == "rig":
        table |= {"start": seconds(rng.uniform(0.0, LENGTH_S))} | ends(rng)
    elif fault == "link_limit":
        table |= {"start": seconds(0.0)}  # the first opening must count, for the one after a break to find none left
    elif seldom(fault):
        how = rng.choice(["first", "later", "chance", "time"])
        if how == "first":
            table["exchange"] = 1
        elif how == "later":
            table |= {"exchange": 2, "exchanges": rng.randint(1, 4)}
        elif how == "chance":
            table["probability"] = "50 %"
        else:
            table |= {"start": seconds(rng.uniform(0.0, LENGTH_S))} | ends(rng)
    else:
        table |= moment(rng, MESSAGES_BOARD if instrument == "board" else MESSAGES)
    return table | dict(strengths(fault, rng))


def moment(rng: random.Random, messages: int) -> dict[str, Any]:
    """The k-th message, so many from it on, by chance, or a stretch of time."""
    how = rng.choice(["one", "some", "chance", "time", "from there"])
    if how == "chance":
        return {"probability": f"{10.0 ** rng.uniform(-1.0, 1.3):.3g} %"}
    if how == "time":
        return {"start": seconds(rng.uniform(0.0, LENGTH_S))} | ends(rng)
    table: dict[str, Any] = {"exchange": rng.randint(1, messages)}
    if how == "some":
        table["exchanges"] = rng.randint(2, 12)
    return table | (ends(rng) if how == "from there" else {})


def ends(rng: random.Random) -> dict[str, Any]:
    """One in four goes on to the end of the night."""
    return {} if rng.random() < 0.25 else {"lasts": seconds(10.0 ** rng.uniform(-0.7, 1.7))}


def strengths(fault: str, rng: random.Random) -> Iterator[tuple[str, Any]]:
    """Half of the time the default, else one drawn about it."""
    what = FAULT_KINDS[fault]
    if fault == "supply_dropout":
        yield "voltage", f"{rng.choice([0.0, rng.uniform(0.0, 11.5)]):.3g} V"
    elif fault == "minimum_gap":
        yield "delay", seconds(rng.uniform(0.01, 0.2))  # less than a message takes is no gap
    elif fault != "link_limit" and rng.random() < 0.5:
        return
    elif fault == "supply_pumped_up":
        yield "voltage", f"{rng.uniform(12.6, 30.0):.3g} V"
    elif fault in ("sentinel", "text_marker"):
        yield "text", rng.choice(["9.9E37", "-9.9E37", "+9.91000000E+37", "NAN", "INF", "OVLD", "---"])
    elif what.delay is not None:
        yield "delay", seconds(what.delay * 10.0 ** rng.uniform(-1.0, 0.7))
    if fault == "link_limit":
        yield "count", 1
    elif what.count is not None and rng.random() < 0.5:
        yield "count", rng.randint(1, 2 * what.count)


def seconds(value: float) -> str:
    return f"{value:.3f} s"


def write_job(night: Night, folder: Path) -> Path:
    """The night's job in files of its own; the path of its job file."""
    kind = KINDS[night.kind]
    rig = (CONFIGS / "rigs" / f"{kind.rig}.toml").read_text("utf-8")
    if kind.blocks:
        rig = rig.replace('"scope.frequency"', '"node.frequency"')
    texts = {
        "rig": rig + "".join(f"\n[[simulated_faults]]\n{_table(fault)}" for fault in night.faults),
        "motor": (CONFIGS / "motors" / f"{kind.motor}.toml").read_text("utf-8"),
        "sweep": SWEEP.replace("PWM", kind.pwm).replace("SEED", str(night.seed)),
        "job": 'title = "short"\nrig = "rig.toml"\nmotor = "motor.toml"\nsweep = "sweep.toml"\n',
    }
    for name, text in texts.items():
        (folder / f"{name}.toml").write_text(text, "utf-8")
    return folder / "job.toml"


def _table(fault: Mapping[str, Any]) -> str:
    return "".join(
        f"{key} = {value}\n" if isinstance(value, int) else f'{key} = "{value}"\n' for key, value in fault.items()
    )
