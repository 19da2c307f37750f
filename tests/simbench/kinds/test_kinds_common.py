"""What every kind of motor promises the instruments: histories that looking does not change, edges, integrals, rest."""

from __future__ import annotations

import itertools
import math
import random
from typing import TYPE_CHECKING

import pytest

from sweeprig.errors import ConfigError, SweeprigError
from sweeprig.job import load, shipped
from sweeprig.simbench import build
from sweeprig.simbench.build import motor_truth
from sweeprig.simbench.kinds.stepped import Flow, Stepped
from sweeprig.simbench.rotor import Motion

if TYPE_CHECKING:
    from tests.simbench.kinds.conftest import Kinds

KINDS = ("electronic", "chopped tach", "held up", "four wires", "prescribed", "geared")
STORY = ((0.013, 300.0, 80.0, True), (2.41, 25e3, 100.0, True), (6.0, 100.0, 30.0, True), (9.07, 100.0, 30.0, False),
         (40.3, 1000.0, 12.0, True), (47.0, 25e3, 55.5, True), (50.0, 25e3, 55.5, True))  # fmt: skip


def read(machine: Stepped) -> tuple[float, ...]:
    return (
        machine.now, machine.omega, machine.edges, machine.last_edge_at, machine.angle, machine.motor_volt_seconds,
        machine.motor_amp_seconds, machine.supply_amp_seconds, machine.supply_volt_seconds, machine.stops,
        float(machine.supply_limited), machine.pwm_phase_s(),
    )  # fmt: skip


def story(machine: Stepped, looks: random.Random | None) -> list[tuple[float, ...]]:
    """Starts, a frequency change, coasting, an idle gap without supply; looked at in between or not."""
    seen = []
    for begin, pwm_hz, duty, on in STORY:
        while looks is not None and (at := machine.now + looks.uniform(0.0, 0.3)) < begin:
            machine.advance(at)
            read(machine)
        machine.advance(begin)
        machine.set_drive(pwm_hz, duty, on)
        machine.set_supply(12.0, 3.0, on)
        seen.append(read(machine))
    return seen


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("seed", [1, 2])
def test_looking_changes_nothing(kinds: type[Kinds], kind: str, seed: int) -> None:
    """However often it is looked at in between, all that is read later is the same to the last bit."""
    assert story(kinds.of_kind(kind, seed), random.Random(seed)) == story(kinds.of_kind(kind, seed), None)


@pytest.mark.parametrize("kind", KINDS)
def test_everything_runs_forward(kinds: type[Kinds], kind: str) -> None:
    """Edges, angle and the supply's integrals never fall, and no edge comes later than now."""
    seen = story(kinds.of_kind(kind), random.Random(5))
    assert all(earlier[k] <= later[k] for earlier, later in itertools.pairwise(seen) for k in (2, 4, 7, 8))
    assert all(row[3] <= row[0] for row in seen)
    assert seen[-1][2] > 50


@pytest.mark.parametrize("kind", [kind for kind in KINDS if kind not in ("chopped tach", "geared")])
def test_edges_are_the_angle(kinds: type[Kinds], kind: str) -> None:
    """Edges = whole parts of angle · pulses / 2π, and at the time given for the last one the angle is just that."""
    machine, twin = kinds.of_kind(kind), kinds.of_kind(kind)
    for one in (machine, twin):
        one.set_drive(25e3, 100.0, True)
    machine.advance(3.217)
    edges, last = machine.edges, machine.last_edge_at
    assert edges == math.floor(machine.angle / math.pi)
    twin.advance(last)
    assert twin.angle == pytest.approx(edges * math.pi, abs=1e-6)


@pytest.mark.parametrize("kind", KINDS)
def test_without_supply_it_comes_to_rest_and_draws_nothing(kinds: type[Kinds], kind: str) -> None:
    """With the supply off the rotor coasts to rest, and no charge is drawn from then on."""
    machine = kinds.of_kind(kind)
    machine.set_drive(25e3, 100.0, True)
    machine.advance(4.0)
    assert machine.omega > 50.0
    machine.set_supply(12.0, 3.0, False)
    charge = machine.supply_amp_seconds
    machine.advance(64.0)
    assert machine.omega == 0.0
    assert machine.supply_amp_seconds == charge
    assert machine.supply_volt_seconds == pytest.approx(48.0, rel=1e-12)
    assert machine.stops == 1


@pytest.mark.parametrize("kind", KINDS)
def test_node_is_supply_less_motor(kinds: type[Kinds], kind: str) -> None:
    """What a probe at the switch node integrates is the supply's part less the motor's."""
    machine = kinds.of_kind(kind)
    machine.set_drive(300.0, 60.0, True)
    machine.advance(1.7)
    assert machine.node_volt_seconds == pytest.approx(machine.supply_volt_seconds - machine.motor_volt_seconds)
    assert machine.supply_volt_seconds == pytest.approx(12.0 * 1.7, rel=1e-9)


@pytest.mark.parametrize("kind", KINDS)
def test_refuses_what_no_drive_or_supply_can(kinds: type[Kinds], kind: str) -> None:
    """A duty above 100 %, a negative current limit and time running backwards are refused."""
    machine = kinds.of_kind(kind)
    with pytest.raises(SweeprigError, match="101 %"):
        machine.set_drive(1000.0, 101.0, True)
    with pytest.raises(SweeprigError, match="zero or more"):
        machine.set_supply(12.0, -1.0, True)
    machine.advance(1.0)
    with pytest.raises(SweeprigError, match="backwards"):
        machine.advance(0.5)


@pytest.mark.parametrize(("kind", "limit"), [("electronic", 0.4), ("four wires", 0.15), ("geared", 0.4)])
def test_supply_limit_acts_on_the_mean_current(kinds: type[Kinds], kind: str, limit: float) -> None:
    """While the limit acts it is said, the terminal voltage is lower, and the charge is just limit times time."""
    machine = kinds.of_kind(kind)
    machine.set_supply(12.0, limit, True)
    machine.set_drive(25e3, 100.0, True)
    machine.advance(0.05)
    charge, volts, began = machine.supply_amp_seconds, machine.supply_volt_seconds, machine.now
    limited = [machine.supply_limited]
    while machine.now < began + 0.05 - 1e-9:
        machine.advance(machine.now + 0.01)
        limited.append(machine.supply_limited)
    assert all(limited)
    assert machine.supply_amp_seconds - charge == pytest.approx(limit * (machine.now - began), rel=1e-9)
    assert machine.supply_volt_seconds - volts < 12.0 * (machine.now - began) * 0.95


@pytest.mark.parametrize("name", ["stirrer", "electronic", "four-wire", "prescribed"])
def test_truth_by_trials_says_that_it_knows_one_kind_only(name: str) -> None:
    """Asked for the truth of another kind it refuses, instead of giving that of a brushed motor with these values."""
    with pytest.raises(ConfigError, match=r"they know one kind only.*allowed: brushed"):
        motor_truth(load(shipped(name)))


@pytest.mark.parametrize("name", ["stirrer", "electronic", "four-wire", "prescribed"])
def test_a_bench_of_each_kind_can_be_built(name: str) -> None:
    """The shipped job of each kind gives a bench whose machine is that kind's, from its own bench time on."""
    bench = build(load(shipped(name)), began=1000.0)
    assert isinstance(bench.plant, Stepped)
    assert (bench.plant.now, bench.plant.edges) == (1000.0, 0)


class Stopping(Stepped):
    """A rotor that is braked evenly from 2 rad/s to rest within its first cell; volts and amperes follow its speed."""

    def _flow(self) -> Flow:
        how = Motion(2.0, -200.0, 0.0, 0.5, 0.05)
        return Flow(how, 3.0, 1.5, 0.7, 0.25, 12.0)

    def _decide(self, new_cell: bool) -> None:
        del new_cell
        self.turning = True

    @property
    def _idle(self) -> bool:
        return False


def test_integrals_of_a_cell_in_which_the_rotor_stops() -> None:
    """By hand: from 2 rad/s by 200 rad/s² it stops after 10 ms; what follows its speed falls no further then.

    ∫ω dt = 0.01 rad; (ω - 2) integrated over 15 ms is 0.01 − 0.03 rad.
    """
    machine = Stopping(2.0, 0.0)
    machine.set_supply(12.0, 1.0, True)
    machine.advance(0.015)
    lag = 0.01 - 2.0 * 0.015
    assert machine.angle == pytest.approx(0.01, rel=1e-9)
    assert machine.motor_volt_seconds == pytest.approx(3.0 * 0.015 + 1.5 * lag, rel=1e-9)
    assert machine.motor_amp_seconds == pytest.approx(0.5 * 0.015 + 0.05 * lag, rel=1e-9)
    assert machine.supply_amp_seconds == pytest.approx(0.7 * 0.015 + 0.25 * lag, rel=1e-9)
