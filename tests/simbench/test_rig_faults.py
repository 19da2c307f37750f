"""Every fault of the rig is seen to act on the motor, at its time and for its time, and leaves the motor as it was.

A brushed motor from the demo, driven at 12 V and 60 %; the healthy bench of the same seed is the yardstick.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import load
from sweeprig.job.fault_models import FAULT_KINDS, SimulatedFault
from sweeprig.simbench import Bench, build
from sweeprig.simbench.rig_faults import FaultyMachine

Driven = Callable[..., "Driving"]
VOLTS, DUTY, LIMIT = 12.0, 60.0, 5.0


class Driving:
    """A bench whose motor is driven from 0 s on; readings are means over a second, as instruments take them."""

    def __init__(self, bench: Bench, duty_percent: float = DUTY) -> None:
        self.bench = bench
        plant = bench.plant_now()
        plant.set_supply(VOLTS, LIMIT, True)
        plant.set_drive(1000.0, duty_percent, True)

    def to(self, time: float) -> Any:
        self.bench.advance(time)
        return self.bench.plant_now()

    def over(self, begin: float, end: float) -> dict[str, float]:
        """Means from `begin` to `end`: motor volts, supply amps, supply volts, edges a second."""
        names = ("motor_volt_seconds", "supply_amp_seconds", "supply_volt_seconds", "edges")
        first = {name: getattr(self.to(begin), name) for name in names}
        return {name: (getattr(self.to(end), name) - first[name]) / (end - begin) for name in names}


@pytest.fixture
def driven(short_job: Path) -> Driven:
    """`driven(kind, start="10 s", lasts="5 s", …)`: the short job's motor, running, with this fault."""

    def made(kind: str = "", duty_percent: float = DUTY, start: str = "10 s", **more: object) -> Driving:
        job = load(short_job)
        fault = {"kind": kind, "start": start, "lasts": "5 s", **more}
        faults = (SimulatedFault.model_validate(fault),) if kind else ()
        return Driving(build(with_faults(job, faults)), duty_percent)

    return made


def with_faults(job: Any, faults: tuple[SimulatedFault, ...]) -> Any:
    return job.model_copy(update={"rig": job.rig.model_copy(update={"simulated_faults": faults})})


@pytest.mark.parametrize("kind", [kind for kind, what in FAULT_KINDS.items() if what.place == "rig"])
def test_before_and_after(driven: Driven, kind: str) -> None:
    """Until its time the motor runs to the last digit as without the fault, and long after it again as fast.

    After: within 1 % of the edges of 20 s; friction wanders by some 2 % of its torque meanwhile.
    """
    plain, struck = driven(), driven(kind)
    assert struck.over(5.0, 10.0 - 1e-9) == plain.over(5.0, 10.0 - 1e-9)
    assert struck.over(40.0, 60.0)["edges"] == pytest.approx(plain.over(40.0, 60.0)["edges"], rel=0.01)
    assert [(one.at, one.kind, one.instrument) for one in struck.bench.struck] == [(10.0, kind, "")]


def test_the_switch_conducts_always(driven: Driven) -> None:
    """Failed short, the motor has the whole supply at duty 0 and with the gate off; nothing is left afterwards."""
    driving = driven("switch_short", duty_percent=0.0)
    assert driving.over(8.0, 9.0) == {"motor_volt_seconds": 0.0, "supply_amp_seconds": 0.0, "edges": 0.0,
                                      "supply_volt_seconds": pytest.approx(VOLTS)}  # fmt: skip
    during = driving.over(13.0, 14.0)
    assert during["motor_volt_seconds"] == pytest.approx(VOLTS)
    assert during["edges"] > 10.0
    assert driving.over(30.0, 31.0)["edges"] == 0.0


def test_the_gate_may_be_told_meanwhile(driven: Driven) -> None:
    """What is commanded while the switch is failed open holds when it works again."""
    driving = driven("switch_open")
    assert driving.to(12.0).drive_on is False
    driving.bench.plant_now().set_drive(1000.0, 80.0, True)
    assert (driving.to(14.0).drive_on, driving.to(15.0).drive_on, driving.to(15.0).duty_percent) == (False, True, 80.0)


def test_no_freewheel_diode(driven: Driven) -> None:
    """The current ends soon after each on-time at the switch's breakdown, 60 V at the node (common practice).

    Checked by the mean motor voltage of a standing rotor: on-time at the supply less the voltage-time that takes the
    current down, L·ΔI at most, with ΔI = V/R·(1 − e^(−ton/τ)) (closed form, independent of the stage's code).
    """
    driving = driven("missing_diode", lasts="60 s")
    plant = driving.to(30.0)
    truth, wave = plant.truth, plant.wave()
    assert wave.discontinuous
    on_s, tau = DUTY / 100.0 / 1000.0, truth.inductance_henry / plant._resistance
    peak = (VOLTS - wave.emf_v) / plant._resistance * (1.0 - math.exp(-on_s / tau))
    assert wave.peak_amps == pytest.approx(peak, rel=1e-9)
    falls_s = tau * math.log1p(peak * plant._resistance / (wave.emf_v + 60.0 - VOLTS))
    assert wave.conduction_s == pytest.approx(on_s + falls_s, rel=1e-9)
    assert driving.over(30.0, 31.0)["edges"] < 0.98 * driven().over(30.0, 31.0)["edges"]


def test_a_seized_rotor(driven: Driven) -> None:
    """It stands at once, at whatever duty, draws the locked-rotor current, and starts again when it is free."""
    driving = driven("seized_rotor")
    edges = driving.to(10.0).edges
    driving.bench.plant_now().set_drive(1000.0, 100.0, True)
    locked, free = driving.over(14.0, 14.9), driven(duty_percent=100.0).over(14.0, 14.9)
    assert driving.to(14.9).edges == edges
    assert locked["supply_amp_seconds"] > 2.0 * free["supply_amp_seconds"]
    assert driving.to(20.0).edges > edges


def test_a_broken_tach_wire(driven: Driven) -> None:
    """No edge and no later last edge, though the motor draws what it did; then edges come on, none is made up."""
    driving, plain = driven("broken_tach_wire"), driven()
    edges, last = driving.to(10.0).edges, driving.to(10.0).last_edge_at
    assert (driving.to(14.9).edges, driving.to(14.9).last_edge_at) == (edges, last)
    assert driving.to(15.0).edges == edges
    assert driving.over(16.0, 20.0) == plain.over(16.0, 20.0)
    assert driving.to(20.0).last_edge_at == plain.to(20.0).last_edge_at


def test_a_loose_coupling(driven: Driven) -> None:
    """The tachometer's wheel coasts: edges f·τ·(1 − e^(−t/τ)) (closed form), the last one where that sum was whole."""
    driving, plain = driven("loose_coupling", delay="2 s"), driven()
    begin = driving.to(10.0)
    edges, pulse_hz = begin.edges, begin.omega * 2.0 / (2.0 * math.pi)  # the fan gives two pulses a revolution
    assert driving.to(13.0).edges - edges == math.floor(pulse_hz * 2.0 * (1.0 - math.exp(-1.5)))
    last = driving.bench.plant_now().last_edge_at
    whole = pulse_hz * 2.0 * (1.0 - math.exp(-(last - 10.0) / 2.0))
    assert 10.0 < last <= 13.0
    assert whole == pytest.approx(round(whole), abs=1e-6)
    assert driving.over(16.0, 20.0) == plain.over(16.0, 20.0)


def test_the_supply_drops_and_is_pumped_up(driven: Driven) -> None:
    """At most nothing, 5 V, 20 V at the terminals; at least 18 V (one and a half times what is set), 5 V, 20 V."""
    seen = [
        driven(kind, voltage=volts).over(13.0, 14.0)["supply_volt_seconds"]
        for kind in ("supply_dropout", "supply_pumped_up")
        for volts in (None, "5 V", "20 V")
    ]
    assert seen == pytest.approx([0.0, 5.0, 12.0, 18.0, 12.0, 20.0])


def test_brush_bounce(driven: Driven) -> None:
    """Lifted for 20 ms some 10 times a second, the motor is driven for less of its time; the same seed, the same times.

    A cycle is 20 ms lifted after 100 ms (mean, exponential) closed: 83 % driven. Over 300 s the standard deviation of
    that part is below 0.3 %: 80 to 87 % is 10 of them.
    """

    def part_driven() -> float:
        driving = driven("brush_bounce", lasts="300 s", delay="20 ms", count=10)
        driving.to(10.0)
        looks = [bool(driving.to(10.0 + 0.01 * step).drive_on) for step in range(1, 29_900)]
        return sum(looks) / len(looks)

    first = part_driven()
    assert 0.80 <= first <= 0.87
    assert part_driven() == first


def test_reverse_rotation(driven: Driven) -> None:
    """A meter across the motor reads the same voltage with the other sign; speed and supply current stay."""
    driving, plain = driven("reverse_rotation"), driven()
    during, usual = driving.over(12.0, 14.0), plain.over(12.0, 14.0)
    assert during["motor_volt_seconds"] == pytest.approx(-usual["motor_volt_seconds"])
    assert (during["edges"], during["supply_amp_seconds"]) == (usual["edges"], usual["supply_amp_seconds"])
    assert driving.to(14.0).wave() is None
    assert driving.over(16.0, 18.0)["motor_volt_seconds"] == pytest.approx(plain.over(16.0, 18.0)["motor_volt_seconds"])


def test_a_motor_that_heats_until_it_stops(driven: Driven) -> None:
    """It slows down, draws more, gets hotter, and stands before the delay has passed."""
    driving = driven("motor_overheats", lasts="100 s", delay="40 s")
    early, cool = driving.over(11.0, 12.0), driving.to(12.0).winding_degc
    late, warm = driving.over(20.0, 21.0), driving.to(21.0).winding_degc
    assert late["edges"] < early["edges"]
    assert late["supply_amp_seconds"] > early["supply_amp_seconds"]
    assert warm > cool
    assert driving.to(51.0).edges == driving.to(100.0).edges


def test_other_motors_refuse_what_they_cannot() -> None:
    """A machine without a bearing to bind or a stage to change is refused the fault, with those that it can have."""

    class Bare:
        now = 0.0
        edges = 0
        last_edge_at = 0.0

    for kind in ("seized_rotor", "motor_overheats", "missing_diode"):
        spec = SimulatedFault.model_validate({"kind": kind, "start": "1 s"})
        with pytest.raises(ConfigError, match=f"{kind}.*switch_short"):
            FaultyMachine(Bare(), [(spec, None)], 2.0, [])  # type: ignore[list-item]  # refused before it draws


def test_a_fault_that_was_over_does_not_come_back(short_job: Path) -> None:
    """A session that begins after the fault's end runs without it; one that begins within it has the rest of it."""
    spec = SimulatedFault.model_validate({"kind": "switch_open", "start": "10 s", "lasts": "5 s"})
    job = with_faults(load(short_job), (spec,))
    after, within = Driving(build(job, began=20.0)), Driving(build(job, began=12.0))
    assert after.to(21.0).drive_on is True
    assert (within.to(14.0).drive_on, within.to(16.0).drive_on) == (False, True)
    assert after.bench.struck == []


def test_overlapping_faults_are_one(short_job: Path) -> None:
    """Of two faults of one kind that overlap, the effect begins with the first and ends with the last of them."""
    kinds = ("broken_tach_wire", "missing_diode", "reverse_rotation", "switch_open")
    times = (("10 s", "5 s"), ("12 s", "8 s"))
    faults = tuple(
        SimulatedFault.model_validate({"kind": kind, "start": start, "lasts": lasts})
        for kind in kinds
        for start, lasts in times
    )
    job = load(short_job)
    driving, plain = Driving(build(with_faults(job, faults))), Driving(build(job))
    edges = driving.to(10.0).edges
    seen = [
        (machine.edges - edges, machine.drive_on, machine.wave()) for machine in map(driving.to, (14.0, 16.0, 19.9))
    ]
    assert seen == [(0, False, None)] * 3
    assert driving.over(50.0, 52.0)["motor_volt_seconds"] == pytest.approx(
        plain.over(50.0, 52.0)["motor_volt_seconds"], rel=0.01
    )
    assert driving.to(52.0).edges > edges
