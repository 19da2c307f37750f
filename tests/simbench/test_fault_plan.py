"""The plan of faults as a whole: every row is there, each can be timed in every way, instruments see the rig's.

What each kind does to the bytes is test_faults.py's.
"""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from sweeprig.job import Job, load
from sweeprig.job.fault_models import FAULT_KINDS, SimulatedFault
from sweeprig.simbench import Bench, build

ROWS = {
    "late reply": "late_reply", "no reply": "no_reply", "split reply": "split_reply", "dribble": "dribble",
    "extra terminator": "extra_terminator", "missing terminator": "missing_terminator",
    "double terminator": "double_terminator", "CR LF": "cr_lf", "noise bytes before reply": "noise_before",
    "non-ASCII": "non_ascii", "truncated block": "truncated_block", "overlong block": "overlong_block",
    "sentinel values": "sentinel", "text markers": "text_marker", "wrong count of values": "wrong_count",
    "close": "close", "reset": "reset", "refuse": "refuse", "accept but silent": "accept_silent",
    "restart with defaults and power-on bit": "restart", "link limit": "link_limit",
    "minimum gap between commands": "minimum_gap", "busy time": "busy", "completion bit never": "completion_never",
    "completion bit at once": "completion_at_once", "clipped setting with queued error": "clipped_setting",
    "standing error": "standing_error", "queue overflow": "queue_overflow", "local mode": "local_mode",
    "identity changed": "identity_changed", "streaming garbage without end": "garbage",
    "node disappears and returns under another name": "node_moves", "reset on open": "reset_on_open",
    "heartbeat loss": "heartbeat_loss",
    "reversed leads": "reverse_rotation", "tachometer wire broken for a time": "broken_tach_wire",
}  # fmt: skip
"""Row of the fault plan that every simulated instrument should take → the kind that does it."""
WHENS = {
    "on the k-th exchange": "exchange = 40",
    "with a probability": 'probability = "5 %"',
    "for a time": 'start = "10 s"\nlasts = "3 s"',
    "in a time by chance": 'probability = "5 %"\nstart = "10 s"\nlasts = "3 s"',
}


def test_every_row_of_the_plan_has_its_kind() -> None:
    """No row is without a kind, and no kind of a port without a row."""
    assert set(ROWS.values()) <= set(FAULT_KINDS)
    assert {kind for kind, what in FAULT_KINDS.items() if what.place != "rig"} <= set(ROWS.values())


@pytest.mark.parametrize("when", WHENS)
def test_every_kind_can_be_timed_in_every_way(short_job: Path, when: str) -> None:
    """A rig file that plans all kinds of ports so is accepted and built, each at its instrument; faults of the rig
    take the time alone."""
    rig = short_job.parent / "shelter-bench.toml"
    text, planned = rig.read_text("utf-8"), []
    for kind, what in FAULT_KINDS.items():
        place = 'instrument = "board"\n' if what.place != "rig" else ""
        if place or when == "for a time":
            text += f'\n[[simulated_faults]]\nkind = "{kind}"\n{place}{WHENS[when]}\n'
            planned.append(kind)
    rig.write_text(text, "utf-8")
    job = load(short_job)
    assert [spec.kind for spec in job.rig.simulated_faults or ()] == planned
    port = build(job).ports["board"]
    kinds = [fault.spec.kind for fault in port.faults]  # type: ignore[attr-defined]  # a FaultyPort
    assert kinds == [kind for kind in planned if FAULT_KINDS[kind].place != "rig"]


def driven(short_job: Path, *faults: dict[str, object]) -> Bench:
    """The short job's bench with the motor running at 60 % on 12 V, heartbeat 10 s."""
    job: Job = load(short_job)
    specs = tuple(SimulatedFault.model_validate(fault) for fault in faults)
    bench = build(job.model_copy(update={"rig": job.rig.model_copy(update={"simulated_faults": specs})}))
    for port in bench.ports.values():
        port.open()
    ask(bench, "supply", "SOUR:VOLT 12;CURR 1.5;:OUTP ON")
    ask(bench, "meter", "CONF:VOLT:DC 100;:SENS:VOLT:DC:APER 0.2")
    ask(bench, "board", "SYST:COMM:TIM 10000;:SOUR:FREQ 1000;:SOUR:PULS:DCYC 60;:OUTP ON")
    return bench


def ask(bench: Bench, name: str, message: str) -> str:
    """What came within half a second."""
    bench.ports[name].write(message.encode("ascii") + b"\n")
    bench.advance(bench.now + 0.5)
    return bench.ports[name].read().decode("ascii")


def seen(bench: Bench, at: float) -> tuple[float, float, int]:
    """Around that time: the meter's volts, the supply's amperes, the edges of the board's last whole gate."""
    while bench.now < at:
        ask(bench, "board", "FETC:COUN?")
    volts, amps = float(ask(bench, "meter", "READ?")), float(ask(bench, "supply", "MEAS:CURR?"))
    return volts, amps, int(ask(bench, "board", "FETC:COUN?").split(",")[1])


def test_reversed_leads_at_the_instruments(short_job: Path) -> None:
    """From 20 s for 10 s the meter across the motor reads the same voltage with the other sign, while the drive is on
    and the tachometer and the current say that it turns; before and after it is as ever.

    2 %: the motor is still warming up (its voltage across is held by the stage, not by its speed)."""
    bench = driven(short_job, {"kind": "reverse_rotation", "start": "20 s", "lasts": "10 s"})
    before, within, after = (seen(bench, at) for at in (15.0, 22.0, 35.0))
    assert before[0] > 5.0
    assert within[0] == pytest.approx(-before[0], rel=0.02)
    assert after[0] == pytest.approx(before[0], rel=0.02)
    for _, amps, edges in (before, within, after):
        assert amps > 0.01
        assert edges > 5
    assert [one.what for one in bench.record] == ["supply_on", "drive_on"]


def test_a_tachometer_wire_broken_for_some_seconds_at_the_instruments(short_job: Path) -> None:
    """From 20 s for 6 s the board counts no edge, while voltage and current go on as of a motor that turns; then the
    edges are there again.

    25 % of the current, own choice: friction wanders, and the current with it. A rotor that is seized instead shows no
    edge either, but draws more than twice as much."""
    bench = driven(short_job, {"kind": "broken_tach_wire", "start": "20 s", "lasts": "6 s"})
    before, within, after = (seen(bench, at) for at in (15.0, 22.0, 30.0))
    seized = seen(driven(short_job, {"kind": "seized_rotor", "start": "20 s", "lasts": "6 s"}), 22.0)
    assert seized[2] == 0
    assert seized[1] > 2.0 * before[1]
    assert (before[2] > 5, within[2], after[2] > 5) == (True, 0, True)
    for volts, amps, _ in (within, after):
        assert volts == pytest.approx(before[0], rel=0.02)
        assert amps == pytest.approx(before[1], rel=0.25)


def test_whoever_sleeps_until_the_next_event_wakes_when_a_port_goes_and_comes(short_job: Path) -> None:
    """A served bench looks at nothing between events: so a refusing time's both ends are events, and so are a vanishing
    port and its return."""
    job = load(short_job)
    faults = (
        {"kind": "refuse", "instrument": "meter", "start": "5 s", "lasts": "2 s"},
        {"kind": "node_moves", "instrument": "board", "start": "10 s", "delay": "4 s"},
    )
    specs = tuple(SimulatedFault.model_validate(fault) for fault in faults)
    bench = build(job.model_copy(update={"rig": job.rig.model_copy(update={"simulated_faults": specs})}))
    for at, accept in (
        (5.0, (False, True)), (7.0, (True, True)), (10.0, (True, False)), (14.0, (True, True)),
    ):  # fmt: skip
        assert bench.next_event() == at
        bench.advance(at)
        assert (bench.ports["meter"].accepts, bench.ports["board"].accepts) == accept
    assert bench.next_event() == math.inf
