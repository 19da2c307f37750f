"""A restart that leaves every setting as it was is told by the power-on bit (7; IEEE 488.2, 11.5.1; from memory)."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any

import pytest
from sweeprig_drivers.generator import ScpiGenerator
from sweeprig_drivers.multimeter import ScpiMultimeter
from sweeprig_drivers.scope import ScpiScope
from sweeprig_drivers.supply import ScpiSupply

from sweeprig.conformance import Scripted, perform
from sweeprig.dialects import find_dialect
from sweeprig.errors import LinkGarbled
from sweeprig.roles import AdapterSetup

Bench = Callable[[str], tuple[Any, Scripted]]
KINDS: Mapping[str, type] = {
    "meter": ScpiMultimeter, "scope": ScpiScope, "supply": ScpiSupply, "generator": ScpiGenerator,
}  # fmt: skip
LOAD = {"OUTP:LOAD?": "9.9E37"}
GENERATOR = {
    "OUTP:LOAD": "50", "SOUR:VOLT:HIGH": "5", "SOUR:VOLT:LOW": "0", "SOUR:FREQ": "1000", "SOUR:PULS:DCYC": "50",
    "SOUR:FUNC": "PULS", "SOUR:VOLT:OFFS": "0", "OUTP": "0",
}  # fmt: skip


@pytest.fixture
def setup_of(setups: dict[str, AdapterSetup]) -> Callable[[str], AdapterSetup]:
    generator = AdapterSetup("generator", {"high_level": "5 V"}, find_dialect("pulse-two-levels", None), {})
    return {**setups, "generator": generator}.__getitem__


@pytest.fixture
def bench(
    setup_of: Callable[[str], AdapterSetup], new_instrument: dict[str, Callable[[], Scripted]]
) -> Bench:  # fmt: skip
    """`bench("supply")`: the adapter and its scripted instrument, configured."""

    def made(name: str) -> tuple[Any, Scripted]:
        scripted = Scripted(LOAD, GENERATOR) if name == "generator" else new_instrument[name]()
        adapter = KINDS[name](setup_of(name))
        perform(adapter.configure(), scripted)
        return adapter, scripted

    return made


@pytest.mark.parametrize("name", KINDS)
def test_the_bit_shows_once_with_all_settings_as_they_were(bench: Bench, name: str) -> None:
    """After configuring the register is clear; after a restart it has bit 7, once, and one query more is all it costs.
    Nothing else of the settings need change."""
    adapter, scripted = bench(name)
    before = perform(adapter.settings(), scripted)
    assert before["event_status"] == "0"
    scripted.event_status = 128 + 16
    scripted.sent.clear()
    after = perform(adapter.settings(), scripted)
    assert after == {**before, "event_status": "144"}
    assert scripted.sent.count(b"*ESR?") == 1
    assert perform(adapter.settings(), scripted) == before


@pytest.mark.parametrize("name", KINDS)
def test_a_dialect_without_the_command_goes_without(
    setup_of: Callable[[str], AdapterSetup], new_instrument: dict[str, Callable[[], Scripted]], name: str
) -> None:
    """Dialects written before there was such a command stay valid: nothing is asked and nothing shown."""
    setup = setup_of(name)
    commands = setup.dialect["commands"]
    assert isinstance(commands, dict)
    kept = {key: text for key, text in commands.items() if key != "event_status"}
    adapter = KINDS[name](replace(setup, dialect={**setup.dialect, "commands": kept}))
    scripted = Scripted(LOAD, GENERATOR) if name == "generator" else new_instrument[name]()
    assert "event_status" not in perform(adapter.settings(), scripted)
    assert b"*ESR?" not in scripted.sent


def test_a_register_is_a_whole_number(bench: Bench) -> None:
    """A sign or a point is read as IEEE 488.2 allows it; anything else is garbled, and not "no restart"."""
    adapter, scripted = bench("scope")
    scripted.answers["*ESR?"] = "+128"
    assert perform(adapter.settings(), scripted)["event_status"] == "128"
    scripted.answers["*ESR?"] = "128.5"
    with pytest.raises(LinkGarbled):
        perform(adapter.settings(), scripted)
