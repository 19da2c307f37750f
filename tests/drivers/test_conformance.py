"""The conformance suite on our own adapters, and on adapters that break the contract in one place each."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

import pytest
from sweeprig_drivers.board import Board
from sweeprig_drivers.multimeter import ScpiMultimeter
from sweeprig_drivers.scope import ScpiScope
from sweeprig_drivers.supply import ScpiSupply

from sweeprig.conformance import Check, Scripted, checks
from sweeprig.quantities import Reading
from sweeprig.roles import (
    Adapter,
    AdapterSetup,
    Ask,
    DriveSetting,
    Identity,
    Reply,
    Steps,
    SupplySetting,
    Window,
)

DRIVE = (DriveSetting(1000.0, 30.0), DriveSetting(250.0, 62.5))
SUPPLY = (SupplySetting(12.0, 1.5), SupplySetting(5.0, 0.5))
SETTINGS: dict[str, tuple[DriveSetting, DriveSetting] | tuple[SupplySetting, SupplySetting] | None] = {
    "meter": None, "scope": None, "supply": SUPPLY, "board": DRIVE,
}  # fmt: skip
KINDS: dict[str, Callable[[AdapterSetup], Adapter]] = {
    "meter": ScpiMultimeter, "scope": ScpiScope, "supply": ScpiSupply, "board": Board,
}  # fmt: skip

Instruments = Mapping[str, Callable[[], Scripted]]


def suite(kind: Callable[[], Adapter], name: str, new_instrument: Instruments) -> list[Check]:
    return checks(kind, new_instrument[name], SETTINGS[name])


def failed(found: list[Check]) -> set[str]:
    return {check.name for check in found if not check.passed}


@pytest.mark.parametrize("name", sorted(KINDS))
def test_our_adapters_keep_the_contract(
    name: str, setups: dict[str, AdapterSetup], new_instrument: Instruments
) -> None:
    """Every check passes on each shipped adapter, each with evidence."""
    found = suite(lambda: KINDS[name](setups[name]), name, new_instrument)
    assert [check for check in found if not check.passed] == []
    assert all(check.evidence for check in found)


@pytest.mark.parametrize("name", ["supply", "board"])
def test_every_check_applies_to_an_actuator(
    name: str, setups: dict[str, AdapterSetup], new_instrument: Instruments
) -> None:
    """On an actuator only `configure` may have nothing to confirm."""
    found = suite(lambda: KINDS[name](setups[name]), name, new_instrument)
    idle = {check.name for check in found if check.evidence.startswith("does not apply")}
    assert idle <= {"configure is confirmed"}


class Broken(ScpiMultimeter):
    """Overridden in one place by each case below."""


class SetsUnconfirmed(Broken):
    def configure(self) -> Steps[None]:
        yield self._function


class Silent(Broken):
    """Takes a refused reading for a zero."""

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        del window
        answer = yield self._read
        try:
            value = float(answer.raw)
        except ValueError:
            value = 0.0
        return {"volts": Reading(value, 0.0, "V", answer.at, "meter.volts")}


class Swallows(Broken):
    def settings(self) -> Steps[dict[str, str]]:
        try:
            yield self._range_query
        except Exception:  # noqa: BLE001 - the fault under test
            return {}
        return {}


class Stubborn(Broken):
    """Cannot be closed while it waits for an answer."""

    def settings(self) -> Steps[dict[str, str]]:
        try:
            yield self._range_query
        finally:
            yield self._range_query
        return {}


class Chatty(Broken):
    def identify(self) -> Steps[Identity]:
        yield Ask(b"*RST", Reply.NOTHING)
        return (yield from super().identify())


class Terminated(Broken):
    def settings(self) -> Steps[dict[str, str]]:
        yield Ask(b"READ?\n")
        return {}


class Endless(Broken):
    def settings(self) -> Steps[dict[str, str]]:
        while True:
            yield self._range_query


class Gullible(Broken):
    def identify(self) -> Steps[Identity]:
        answer = yield self._identity
        return Identity(answer.raw.decode("latin-1"), "", "", "")


class NotTexts(Broken):
    def settings(self) -> Steps[dict[str, str]]:
        yield self._range_query
        return {"range": 100.0}  # type: ignore[dict-item] # the fault under test


class Restarting(Broken):
    """Its power-on bit is never cleared, so every hold would be discarded."""

    def settings(self) -> Steps[dict[str, str]]:
        return (yield from super().settings()) | {"event_status": "128"}


class Signed(Broken):
    """Shows the register in a way in which nobody looks for the bit."""

    def settings(self) -> Steps[dict[str, str]]:
        return (yield from super().settings()) | {"event_status": "+0"}


class Unbounded(Broken):
    def settings(self) -> Steps[dict[str, str]]:
        yield Ask(b"READ?", within_s=float("inf"))
        return {}


class Deaf(Broken):
    """Returns nothing for its only channel."""

    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        del window
        yield self._read
        return {}


class WrongUnit(Broken):
    def measure(self, window: Window) -> Steps[dict[str, Reading]]:
        readings = yield from super().measure(window)
        return {"volts": replace(readings["volts"], unit="A")}


@pytest.mark.parametrize(
    ("kind", "caught_by"),
    [
        (SetsUnconfirmed, "configure is confirmed"),
        (Silent, "garbage is refused"),
        (Silent, "a wrong count is refused"),
        (Silent, "no data stays no data"),
        (Swallows, "link errors come through"),
        (Stubborn, "steps can be closed anywhere"),
        (Chatty, "identity is asked first early and alone"),
        (Chatty, "asking sets nothing"),
        (Terminated, "messages are clean"),
        (Endless, "asks are bounded"),
        (Gullible, "no identity is refused"),
        (NotTexts, "settings are texts"),
        (Restarting, "a restart shows"),
        (Signed, "a restart shows"),
        (Unbounded, "asks are bounded"),
        (Deaf, "every channel is read"),
        (WrongUnit, "every channel is read"),
    ],
)
def test_a_broken_adapter_is_caught(
    kind: type[Broken], caught_by: str, setups: dict[str, AdapterSetup], new_instrument: Instruments
) -> None:
    """Each way of breaking the contract fails the check that is there for it."""
    assert caught_by in failed(suite(lambda: kind(setups["meter"]), "meter", new_instrument))


class LateOff(ScpiSupply):
    def switch_off(self) -> Steps[None]:
        yield self._output
        yield self._off


class BlindOff(ScpiSupply):
    def switch_off(self) -> Steps[None]:
        yield self._off


class HopefulApply(ScpiSupply):
    def apply(self, setting: SupplySetting) -> Steps[dict[str, Reading]]:
        del setting
        readings = {}
        for quantity, message in (("volts_set", b"SOUR:VOLT 12"), ("amps_limit", b"SOUR:CURR 1.5")):
            yield Ask(message, Reply.NOTHING)
            answer = yield Ask(b"*OPC?")
            readings[quantity] = Reading(1.0, 0.0, self.channels[quantity], answer.at, f"supply.{quantity}")
        return readings


class HopefulOn(ScpiSupply):
    def switch_on(self) -> Steps[None]:
        yield self._on
        yield self._output


@pytest.mark.parametrize(
    ("kind", "caught_by"),
    [
        (LateOff, {"off is early", "off is proved"}),
        (BlindOff, {"off is proved"}),
        (HopefulApply, {"apply is confirmed"}),
        (HopefulOn, {"switch on is confirmed"}),
    ],
)
def test_a_broken_actuator_is_caught(
    kind: type[ScpiSupply], caught_by: set[str], setups: dict[str, AdapterSetup], new_instrument: Instruments
) -> None:
    """Each way of not confirming or not proving fails the check that is there for it, and no other."""
    assert failed(suite(lambda: kind(setups["supply"]), "supply", new_instrument)) == caught_by


def test_an_actuator_without_settings_fails(setups: dict[str, AdapterSetup], new_instrument: Instruments) -> None:
    """Leaving the settings out does not let an actuator pass unseen."""
    found = checks(lambda: ScpiSupply(setups["supply"]), new_instrument["supply"])
    assert {"apply is confirmed", "switch on is confirmed", "off is proved"} <= failed(found)
