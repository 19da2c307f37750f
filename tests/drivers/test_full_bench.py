"""The bench with everything on it: every adapter through a real link on its simulated instrument, and a whole run.

The adapters are found as pyproject.toml registers them, so that a development install need not be renewed for it.
"""

from __future__ import annotations

import math
import shutil
import tomllib
from importlib.metadata import EntryPoint
from pathlib import Path

import pytest

from sweeprig import open_run
from sweeprig.conduct.rig import RigUse, build_adapters
from sweeprig.conformance import checks, over_link, perform
from sweeprig.job import Job, load, shipped
from sweeprig.launch import start
from sweeprig.link import registry
from sweeprig.link.link import Link
from sweeprig.link.registry import open_link
from sweeprig.quantities import Reading
from sweeprig.roles import Adapter, Drive, DriveSetting, Supply, SupplySetting, Window
from sweeprig.simbench.bench import Bench
from sweeprig.simbench.build import build

NEW = ("ammeter", "generator", "node", "sound", "tachometer", "thermometer")
"""Board, supply, voltmeter and the first scope have their own tests on the demo's bench."""
SETTINGS: dict[str, tuple[DriveSetting, DriveSetting] | tuple[SupplySetting, SupplySetting]] = {
    "board": (DriveSetting(1000.0, 60.0), DriveSetting(250.0, 62.5)),
    "generator": (DriveSetting(1000.0, 60.0), DriveSetting(250.0, 62.5)),
    "supply": (SupplySetting(12.0, 1.5), SupplySetting(5.0, 0.5)),
}
MODULES = {
    "board": "board:Board", "scpi-supply": "supply:ScpiSupply", "scpi-multimeter": "multimeter:ScpiMultimeter",
    "scpi-scope": "scope:ScpiScope", "scpi-generator": "generator:ScpiGenerator",
    "scpi-thermometer": "thermometer:ScpiThermometer", "scpi-sound-meter": "sound_meter:ScpiSoundMeter",
    "line-tachometer": "line_tachometer:LineTachometer",
}  # fmt: skip


@pytest.fixture(autouse=True)
def registered(monkeypatch: pytest.MonkeyPatch) -> None:
    entries = {name: EntryPoint(name, f"sweeprig_drivers.{spec}", registry.GROUP) for name, spec in MODULES.items()}
    monkeypatch.setattr(registry, "_entry_points", lambda: entries)


@pytest.fixture
def job() -> Job:
    return load(shipped("full-bench"))


@pytest.fixture
def generator_job(tmp_path: Path) -> Path:
    """The same bench with the generator at the gate and the line tachometer for the speed."""
    source = shipped("full-bench").parent
    for part in ("full-bench.toml", "motors/aspirator-fan.toml", "sweeps/glance.toml", "rigs/full-bench.toml"):
        (tmp_path / part).parent.mkdir(exist_ok=True)
        shutil.copy(source / part, tmp_path / part)
    rig = tmp_path / "rigs/full-bench.toml"
    text = rig.read_text(encoding="utf-8")
    for old, new in (
        ('drive = "board"', 'drive = "generator"'),
        ('speed = "board.speed"', 'speed = "tachometer.speed"'),
        ('address = "simbench:generator"', 'address = "simbench:generator"\nconnected_to = "drive_signal"'),
    ):
        assert text.count(old) == 1
        text = text.replace(old, new)
    rig.write_text(text, encoding="utf-8")
    return tmp_path / "full-bench.toml"


def adapters_of(job: Job) -> dict[str, Adapter]:
    return build_adapters(RigUse.of_job(job))


def link_to(bench: Bench, name: str) -> Link:
    return open_link(f"simbench:{name}", bench.clock, bench.clock.now() + 5.0, ports=bench.ports)


def test_the_registered_names_are_those_that_ship() -> None:
    """pyproject.toml names the same adapters, wherever the tests run beside it."""
    project = Path(__file__).parents[2] / "pyproject.toml"
    entries = tomllib.loads(project.read_text(encoding="utf-8"))["project"]["entry-points"]["sweeprig.adapters"]
    assert entries == {name: f"sweeprig_drivers.{spec}" for name, spec in MODULES.items()}


@pytest.mark.parametrize("name", NEW)
def test_every_adapter_keeps_the_contract_on_its_simulated_instrument(name: str, job: Job) -> None:
    """The whole conformance suite over one link; the instrument keeps its settings from check to check."""
    bench = build(job)
    link = link_to(bench, name)
    found = checks(lambda: adapters_of(job)[name], lambda: over_link(link, bench.clock), SETTINGS.get(name))
    assert [check for check in found if not check.passed] == []


@pytest.mark.parametrize("name", NEW)
def test_asking_changes_nothing(name: str, job: Job) -> None:
    """Identity, settings and readings obey no state-changing message: the bench counts them."""
    bench, adapter = build(job), adapters_of(job)[name]
    exchange = over_link(link_to(bench, name), bench.clock)
    assert perform(adapter.identify(), exchange).simulated
    perform(adapter.settings(), exchange)
    perform(adapter.measure(Window(0.5)), exchange)
    assert bench.state_changes[name] == 0


def turning(path: Path, seconds: float = 6.0) -> tuple[Bench, dict[str, Reading]]:
    """The bench of a job with the fan turning at 12 V and 60 % of 1 kHz, and what every instrument reads then."""
    job = load(path)
    bench, adapters = build(job), adapters_of(job)
    exchanges = {name: over_link(link_to(bench, name), bench.clock) for name in adapters}
    for name, adapter in adapters.items():
        perform(adapter.identify(), exchanges[name])
        perform(adapter.configure(), exchanges[name])
    for role in ("supply", "drive"):
        name = job.rig.roles[role]
        adapter = adapters[name]
        assert isinstance(adapter, Drive | Supply)
        perform(adapter.apply(SETTINGS[name][0]), exchanges[name])  # type: ignore[arg-type] # of its own kind
        perform(adapter.switch_on(), exchanges[name])
    tacho = job.rig.roles["speed"].partition(".")[0]
    perform(adapters[tacho].measure(Window(seconds)), exchanges[tacho])
    readings: dict[str, Reading] = {}
    # the speed's instrument first and last: asking it is the board's heartbeat
    for name in (*adapters, tacho):
        measured = perform(adapters[name].measure(Window(0.5, 1000.0)), exchanges[name])
        readings.update({reading.channel: reading for reading in measured.values()})
    return bench, readings


def test_all_of_them_see_the_same_motor() -> None:
    """Two duties, two tachometers, and mean voltage over resistance agree within what each is good for.

    The bench's own truth: 60 % at the gate; speeds of one shaft, 3 % for the wandering friction between the windows;
    the motor's current is (mean voltage − back-EMF) / resistance by Kirchhoff (independent arithmetic on the motor
    file's 11.2 ohm and 0.0283 V·s, and the ammeter's 0.1 ohm), 5 % for the same reason and for the warm winding.
    """
    _, readings = turning(shipped("full-bench"))
    values = {channel: reading.value for channel, reading in readings.items() if reading.value is not None}
    assert values["scope.duty"] == pytest.approx(60.0, abs=0.2)
    assert values["node.duty"] == pytest.approx(60.0, abs=1.0)  # one of the screen's 10 us samples in a period of 1 ms
    assert values["tachometer.speed"] == pytest.approx(values["board.speed"], rel=0.03)
    emf = 0.0283 * values["board.speed"] * 2.0 * math.pi / 60.0
    assert values["ammeter.amps"] == pytest.approx((values["meter.volts"] - emf) / 11.3, rel=0.05)
    # 12 V and the freewheel diode's 0.5 V: the chopper's own constants; 0.16 V is one of the screen's 256 steps
    assert values["node.highest"] == pytest.approx(12.5, abs=0.5)
    assert values["node.lowest"] == pytest.approx(0.0, abs=0.5)
    # a winding that has just begun to warm, behind its sensor's 5 s: the room's 20 degC and ± 0.5 K of the statement
    assert values["thermometer.winding"] == pytest.approx(20.0, abs=0.7)
    # energies of 32 dB background and of a fan that makes 48 dB at 100 pulses a second; 1.1 dB statement, 0.2 dB noise
    fan_db = 48.0 + 50.0 * math.log10(values["board.speed"] / 30.0 / 100.0)
    expected_db = 10.0 * math.log10(10.0**3.2 + 10.0 ** (fan_db / 10.0))
    assert values["sound.level"] == pytest.approx(expected_db, abs=2.0)


def test_a_generator_and_a_line_tachometer_turn_the_fan_as_well(generator_job: Path) -> None:
    """The same 60 % from another source; the board's pin is on nothing, and what it does reaches no gate."""
    bench, readings = turning(generator_job)
    values = {channel: reading.value for channel, reading in readings.items()}
    assert values["scope.duty"] == pytest.approx(60.0, abs=0.2)
    assert values["tachometer.speed"] == pytest.approx(values["board.speed"], rel=0.03)
    assert [happened.what for happened in bench.record] == ["supply_on", "drive_on"]
    board = over_link(link_to(bench, "board"), bench.clock)
    adapter = adapters_of(load(generator_job))["board"]
    perform(adapter.identify(), board)
    perform(adapter.switch_off(), board)
    assert bench.signal.on


@pytest.mark.parametrize("which", ["board", "generator"])
def test_a_job_runs_on_the_whole_bench(which: str, generator_job: Path, tmp_path: Path) -> None:
    """The sweep ends with readings of every role that its holds ask for, and a top speed as the demo's fan has it."""
    path = shipped("full-bench") if which == "board" else generator_job
    run = open_run(start(load(path), tmp_path / "runs").path)
    channels = set(run.readings["channel"])
    roles = load(path).rig.roles
    assert {target for role, target in roles.items() if "." in target and role != "sound_level"} <= channels
    assert run.findings.conditions[0].top_speed_rpm.value == pytest.approx(3000.0, rel=0.1)
