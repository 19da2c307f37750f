"""The registry: kinds of links by the form of the address, adapters by entry points of really installed packages.

A package is installed here by its metadata folder on the import path, which is what an installer leaves behind.
"""

from __future__ import annotations

import importlib
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from sweeprig.clock import SystemClock
from sweeprig.errors import ConfigError, MissingPackage, UnknownAdapter
from sweeprig.link import registry
from sweeprig.link.inprocess import BytePort, InProcessLink
from sweeprig.link.registry import adapters, find_adapter, open_link

if TYPE_CHECKING:
    from tests.link.conftest import PortFar

Install = Callable[[str, dict[str, str], dict[str, str]], None]


@pytest.fixture
def install(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Install:
    """install(package, {adapter: "module:class"}, {module: source}); gone after the test."""
    monkeypatch.syspath_prepend(str(tmp_path))

    def put(package: str, entries: dict[str, str], modules: dict[str, str]) -> None:
        info = tmp_path / f"{package.replace('-', '_')}-1.0.dist-info"
        info.mkdir()
        (info / "METADATA").write_text(f"Metadata-Version: 2.1\nName: {package}\nVersion: 1.0\n")
        lines = [f"[{registry.GROUP}]", *(f"{name} = {value}" for name, value in entries.items())]
        (info / "entry_points.txt").write_text("\n".join(lines) + "\n")
        for name, source in modules.items():
            (tmp_path / f"{name}.py").write_text(source)
            monkeypatch.delitem(sys.modules, name, raising=False)
        importlib.invalidate_caches()

    return put


def test_finds_a_third_party_adapter(install: Install) -> None:
    """An adapter of an installed package is found by its name and listed as usable."""
    install("lab-flow", {"lab-flow-meter": "lab_flow_one:Meter"}, {"lab_flow_one": "class Meter: pass\n"})
    assert find_adapter("lab-flow-meter").__name__ == "Meter"
    assert adapters()["lab-flow-meter"] == ""


def test_our_own_adapters_are_registered() -> None:
    """The adapters that come with the package are listed like any third party's."""
    assert {"board", "scpi-multimeter", "scpi-scope", "scpi-supply"} <= set(adapters())


def test_unknown_adapter_lists_those_known(install: Install) -> None:
    """An unknown name is told with the known ones and what to do."""
    install("lab-flow", {"lab-flow-meter": "lab_flow_two:Meter"}, {})
    with pytest.raises(UnknownAdapter) as caught:
        find_adapter("lab-flow-metre")
    text = str(caught.value)
    assert text.startswith("no adapter of this name: lab-flow-metre (allowed: ")
    assert "lab-flow-meter" in text
    assert "scpi-supply" in text
    assert "install the package that brings it" in text


def test_missing_package_names_the_command(install: Install) -> None:
    """An adapter whose module needs a package that is absent stays listed, with the reason and the command."""
    install("lab-flow", {"lab-flow-meter": "lab_flow_three:Meter"}, {"lab_flow_three": "import no_such_vendor.io\n"})
    with pytest.raises(MissingPackage, match=r"No module named 'no_such_vendor'.*pip install no_such_vendor") as caught:
        find_adapter("lab-flow-meter")
    assert isinstance(caught.value.__cause__, ModuleNotFoundError)
    assert adapters()["lab-flow-meter"] == str(caught.value)


@pytest.mark.parametrize(
    ("value", "source", "why"),
    [
        ("lab_flow_four:Meter", "Meter = 3\n", "is no class"),
        ("lab_flow_four:Absent", "class Meter: pass\n", "AttributeError"),
        ("lab_flow_four:Meter", "1 / 0\n", "ZeroDivisionError"),
        ("lab_flow_four:Meter", "class Meter\n", "SyntaxError"),
        ("lab_flow_absent:Meter", "", "No module named 'lab_flow_absent'"),
    ],
)
def test_broken_package_is_to_be_installed_anew(install: Install, value: str, source: str, why: str) -> None:
    """Whatever is wrong inside the package itself, the others stay usable and the text says what to reinstall."""
    install("lab-flow", {"lab-flow-meter": value}, {"lab_flow_four": source})
    install("lab-other", {"lab-other": "lab_other_module:Other"}, {"lab_other_module": "class Other: pass\n"})
    listed = adapters()
    assert why in listed["lab-flow-meter"]
    assert "pip install --force-reinstall lab-flow" in listed["lab-flow-meter"]
    assert listed["lab-other"] == ""


def test_duplicate_name_is_an_error(install: Install) -> None:
    """Two packages with one adapter name are refused, both named: nothing is replaced silently."""
    install("lab-flow", {"lab-meter": "lab_flow_five:Meter"}, {"lab_flow_five": "class Meter: pass\n"})
    install("lab-copy", {"lab-meter": "lab_flow_five:Meter"}, {})
    for call in (adapters, lambda: find_adapter("lab-meter")):
        with pytest.raises(ConfigError, match="two adapters are named lab-meter") as caught:
            call()
        assert "lab-flow" in str(caught.value)
        assert "lab-copy" in str(caught.value)


@pytest.mark.parametrize("address", ["GPIB0::22::INSTR", "TCPIP0::10.0.0.1::INSTR", "/dev/ttyUSB0", "", "http://a"])
def test_unknown_kind_of_address(address: str, clock: SystemClock) -> None:
    """An address of an unknown kind is told with the known forms."""
    with pytest.raises(ConfigError, match="TCPIP0::host::port::SOCKET, serial:PORT, simbench:NAME") as caught:
        open_link(address, clock, clock.now() + 1.0)
    assert caught.value.value == address


def test_in_process_link(port_far: PortFar, clock: SystemClock) -> None:
    """A `simbench:` address opens the port of that name, unidentified and clean."""
    link = open_link("simbench:meter", clock, clock.now(), ports={"meter": port_far})
    assert isinstance(link, InProcessLink)
    assert (link.dirty, link.identified, port_far.opened) == ("", False, 1)
    assert isinstance(port_far, BytePort)


def test_no_port_of_that_name(port_far: PortFar, clock: SystemClock) -> None:
    """A `simbench:` name without a port is told with those there are, or that no simulated bench runs."""
    with pytest.raises(ConfigError, match=r"simbench:metre \(allowed: simbench:meter\)"):
        open_link("simbench:metre", clock, clock.now(), ports={"meter": port_far})
    with pytest.raises(ConfigError, match="no simulated bench runs here"):
        open_link("simbench:meter", clock, clock.now())


def test_terminator_is_used_and_needed(port_far: PortFar, clock: SystemClock) -> None:
    """The terminator given ends what is sent; a message without any is refused."""
    with pytest.raises(ConfigError, match="needs a terminator"):
        open_link("simbench:meter", clock, clock.now(), ports={"meter": port_far}, terminator=b"")


def test_link_kind_without_its_package(clock: SystemClock, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without the serial library a `serial:` address says which package to install, under its real name."""
    monkeypatch.delitem(sys.modules, "sweeprig.link.serial_port", raising=False)
    monkeypatch.setitem(sys.modules, "serial", None)
    with pytest.raises(MissingPackage, match="links of the form serial:PORT"):
        open_link("serial:/dev/ttyACM0", clock, clock.now() + 1.0)


def test_install_command_uses_the_packages_name() -> None:
    """The serial library's module and package names differ; the command gives the package's."""
    error = ModuleNotFoundError("No module named 'serial'", name="serial.tools")
    assert registry._install(error, "sweeprig", "sweeprig.link.serial_port") == "pip install pyserial"


def test_kinds_are_imported_on_first_use() -> None:
    """Importing the registry and the loop loads no socket link, no serial library and no adapter."""
    code = "import sys, sweeprig.link.registry, sweeprig.link.together; print([m for m in WATCHED if m in sys.modules])"
    watched = ["serial", "sweeprig.link.tcp", "sweeprig.link.serial_port", "sweeprig_drivers", "numpy"]
    run = subprocess.run(
        [sys.executable, "-c", code.replace("WATCHED", repr(watched))], capture_output=True, text=True, check=True
    )
    assert run.stdout.strip() == "[]"
