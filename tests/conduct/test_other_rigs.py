"""Rigs other than the demo's: the meter at the switch node, no supply on the bus, no scope."""

from __future__ import annotations

from pathlib import Path

import pytest

from sweeprig.conduct.states import State
from sweeprig.holds import Purpose, Status, Verdict
from sweeprig.launch import start
from sweeprig.opened import Run, open_run


def edit(path: Path, *changes: tuple[str, str]) -> None:
    text = path.read_text("utf-8")
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    path.write_text(text, "utf-8")


def without(path: Path, instrument: str, *roles: str) -> None:
    """Take an instrument and its roles out of a rig file."""
    blocks = path.read_text("utf-8").split("\n\n")
    kept = [block for block in blocks if not block.startswith(f"[instruments.{instrument}]")]
    for index, block in enumerate(kept):
        if block.startswith("[roles]"):
            lines = [line for line in block.splitlines() if line.split(" = ")[0] not in roles]
            kept[index] = "\n".join(lines)
    path.write_text("\n\n".join(kept) + "\n", "utf-8")


def finished(job: Path, folder: Path) -> Run:
    launched = start(job, folder / "runs")
    assert launched.ending.state is State.FINISHED
    return open_run(launched.path)


def test_the_meter_at_the_switch_node(short_job: Path, tmp_path: Path) -> None:
    """At the node the meter reads the supply while the drive is off: supply less node is what counts as the motor's.

    Off is proved, no hold is spoiled, and the voltages found agree with those of a meter across the motor."""
    across = finished(short_job, tmp_path)
    edit(
        short_job.parent / "shelter-bench.toml",
        ('voltage_at = "across_motor"', 'voltage_at = "switch_node"'),
        ('connected_to = "across_motor"', 'connected_to = "switch_node"'),
    )
    node = finished(short_job, tmp_path / "node")
    assert {outcome.status for outcome in node.outcomes} == {Status.DONE}
    zero = next(outcome for outcome in node.outcomes if outcome.hold.purpose is Purpose.ZERO)
    volts = zero.means["meter.volts"].value
    assert volts is not None
    assert abs(volts) < 0.5 or abs(volts - 12.0) < 0.5
    one, other = (run.findings.conditions[0].stall_voltage_volts for run in (across, node))
    assert one.value is not None
    assert other.value is not None
    assert one.u is not None
    assert other.u is not None
    assert abs(one.value - other.value) <= 4.0 * (one.u**2 + other.u**2) ** 0.5


@pytest.mark.parametrize(("instrument", "roles"), [
    ("supply", ("supply", "current")), ("scope", ("duty", "pwm_frequency")), ("meter", ("motor_voltage",)),
])  # fmt: skip
def test_a_rig_that_lacks_an_instrument(
    short_job: Path, tmp_path: Path, instrument: str, roles: tuple[str, ...]
) -> None:
    """Without supply, scope or meter on the bus the motor is still found to turn, to stall and to start."""
    without(short_job.parent / "shelter-bench.toml", instrument, *roles)
    run = finished(short_job, tmp_path)
    verdicts = {outcome.verdict for outcome in run.outcomes if outcome.status is Status.DONE}
    assert {Verdict.TURNING, Verdict.STOPPED, Verdict.STARTED} <= verdicts
    assert run.findings.conditions[0].top_speed_rpm.found
