"""What a rig can offer, and how an adapter is spoken to. The contract every adapter keeps.

An adapter is pure: no link, no clock, no sleep, no retry. Each method is a generator that yields `Ask`, is sent
`Answer`, and returns its result; `link.together` drives it.

MUST   confirm every set by a query (read-back or *OPC?) before returning; raise InstrumentRefused when it differs
MUST   send the identity query, and only it, from `identify`, as an early ask
MUST   return from `measure` quantity → Reading for each of its channels, `no_data:…` flagged where there is none
MUST   refuse in its constructor (ConfigError) any option it cannot honour
MUST   refuse in `check_window` (ConfigError) a window that it can never honour; asked once when the rig opens
MUST   switch off in `switch_off` with early asks and without needing an earlier answer
MUST   ask for nothing longer than its own stated `within_s`
MAY    ask several times in one method, pace asks with `after_s`, and read several channels with one ask
MUST NOT wait, repeat a failed ask, keep a link, or read a clock
"""

from __future__ import annotations

from collections.abc import Generator, Mapping
from dataclasses import dataclass, field
from enum import Enum
from typing import NamedTuple, Protocol, TypeVar, runtime_checkable

from sweeprig.quantities import Accuracy, Reading

ACTUATORS = ("drive", "supply")
SENSORS = (
    "pwm_frequency", "duty", "motor_voltage", "speed", "current", "winding_temperature", "case_temperature",
    "ambient", "sound_level", "pressure", "flow", "torque",
)  # fmt: skip
UNIT_OF_ROLE = {
    "pwm_frequency": "Hz", "duty": "%", "motor_voltage": "V", "speed": "rpm", "current": "A",
    "winding_temperature": "degC", "case_temperature": "degC", "ambient": "degC", "sound_level": "dB",
    "pressure": "Pa", "flow": "m3/s", "torque": "Nm",
}  # fmt: skip


class Reply(Enum):
    """STREAM: the next whole line that begins after the ask, from an instrument that sends by itself; what came before
    is passed over. Its ask may have an empty message: then nothing is sent. Such an instrument takes no other asks."""

    NOTHING = "nothing"
    LINE = "line"
    BLOCK = "block"
    STREAM = "stream"


@dataclass(frozen=True, slots=True)
class Ask:
    """One message and the reply it wants.

    message   bytes without terminator; the link adds it
    within_s  longest wait for the whole reply (or, for NOTHING, for the write)
    after_s   send no earlier than this long after the previous answer in these steps
    early     may be sent before the link has answered its identity query (identity itself, switching off)
    """

    message: bytes
    reply: Reply = Reply.LINE
    within_s: float = 2.0
    after_s: float = 0.0
    early: bool = False


class Answer(NamedTuple):
    """raw: the reply without terminator (b"" for NOTHING); at: clock when it was whole."""

    raw: bytes
    at: float


T = TypeVar("T")
Steps = Generator[Ask, Answer, T]


@dataclass(frozen=True, slots=True)
class Identity:
    """The four fields of *IDN? (IEEE 488.2, 10.14)."""

    maker: str
    model: str
    serial: str
    firmware: str

    @property
    def simulated(self) -> bool:
        return self.maker.upper() == "SIMULATED"


@dataclass(frozen=True, slots=True)
class Window:
    """What a reading averages over: `seconds`, as whole periods of `pwm_hz` where that is not None."""

    seconds: float
    pwm_hz: float | None = None


@dataclass(frozen=True, slots=True)
class AdapterSetup:
    """What an adapter is built from: its entry in the rig file and the names that were resolved for it.

    name      the instrument's name in the rig file; channels are `name.quantity`
    options   the rig file's option table, plain TOML values
    dialect   the dialect's table, or {} where the adapter has none
    """

    name: str
    options: Mapping[str, object] = field(default_factory=dict)
    dialect: Mapping[str, object] = field(default_factory=dict)
    accuracy: Mapping[str, Accuracy] = field(default_factory=dict)
    pulses_per_revolution: float = 1.0


@dataclass(frozen=True, slots=True)
class DriveSetting:
    pwm_hz: float
    duty_percent: float
    tap: int | None = None


@dataclass(frozen=True, slots=True)
class SupplySetting:
    volts: float
    current_limit_amps: float


@runtime_checkable
class Adapter(Protocol):
    """A thin driver on a link. `channels`: quantity → unit, for example {"volts": "V"}."""

    name: str
    channels: Mapping[str, str]

    def identify(self) -> Steps[Identity]: ...
    def configure(self) -> Steps[None]: ...
    def settings(self) -> Steps[dict[str, str]]: ...
    def check_window(self, window: Window) -> None: ...
    def measure(self, window: Window) -> Steps[dict[str, Reading]]: ...
    def switch_off(self) -> Steps[None]: ...


@runtime_checkable
class Drive(Adapter, Protocol):
    """`apply` returns the quantised values really produced, channels `name.pwm_hz` and `name.duty_set`.

    heartbeat_s: the drive stops by itself when nothing valid came for so long; None where it has no such thing."""

    heartbeat_s: float | None

    def apply(self, setting: DriveSetting) -> Steps[dict[str, Reading]]: ...
    def switch_on(self) -> Steps[None]: ...


@runtime_checkable
class Supply(Adapter, Protocol):
    def apply(self, setting: SupplySetting) -> Steps[dict[str, Reading]]: ...
    def switch_on(self) -> Steps[None]: ...
