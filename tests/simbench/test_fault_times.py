"""Faults act when they were planned: by chance, at an exchange, at a time, whoever asks or nobody; and once only."""

from __future__ import annotations

from pathlib import Path

import pytest

from sweeprig.job import load
from sweeprig.job.fault_models import SimulatedFault
from sweeprig.simbench import build
from tests.simbench.conftest import Client, Faulty, on


def test_by_chance(faulty: Faulty) -> None:
    """A probability of 20 % strikes about so many of 500 exchanges; session and seed decide which, and nothing else.

    Binomial, standard deviation 8.9: 60 to 140 is 4.5 of them, left once in 150,000 seeds.
    """

    def struck(session: int) -> list[int]:
        bench = faulty(on("cr_lf", probability="20 %"), session=session)
        supply = Client(bench, "supply")
        for _ in range(500):
            supply.ask("SOUR:VOLT?", 0.01)
        return [one.exchange for one in bench.struck]

    first = struck(1)
    assert 60 <= len(first) <= 140
    assert struck(1) == first
    assert struck(2) != first


def test_in_a_stated_time(faulty: Faulty) -> None:
    """From 10 s for 5 s, and no other exchange; several exchanges; from an exchange on for a time."""
    bench = faulty(
        on("cr_lf", start="10 s", lasts="5 s"),
        on("cr_lf", "meter", exchange=3, exchanges=4),
        on("cr_lf", "scope", exchange=3, lasts="5 s"),
    )
    clients = [Client(bench, name) for name in ("supply", "meter", "scope")]
    struck: list[list[float]] = [[], [], []]
    for second in range(20):
        for place, client in enumerate(clients):
            client.port.write(b"*OPC?\n")
            bench.advance(second + 0.1 * (place + 1))
            struck[place] += [second] * (client.port.read() == b"1\r\n")
        bench.advance(second + 1.0)
    assert struck == [[10, 11, 12, 13, 14], [2, 3, 4, 5], [2, 3, 4, 5, 6]]


def test_once_from_a_time_on(faulty: Faulty) -> None:
    """A restart with nothing but a start happens once, at that time, between the messages before and after it."""
    bench = faulty(on("restart", start="9.5 s"))
    supply = Client(bench, "supply")
    for second in range(30):
        supply.ask("*OPC?", second + 1.0 - bench.now)
    assert [(one.kind, one.at, one.exchange) for one in bench.struck] == [("restart", 9.5, 10)]


def test_a_supply_drops_out_at_its_time_though_nobody_asks(faulty: Faulty) -> None:
    """On and never asked again, its output goes off at 7 s sharp, by the bench's own record; a heartbeat is lost and a
    queue filled at their times too."""
    bench = faulty(
        on("restart", start="7 s"),
        on("heartbeat_loss", "board", start="3 s"),
        on("queue_overflow", "meter", start="4 s"),
    )
    Client(bench, "supply").port.write(b"SOUR:VOLT 5;:OUTP ON\n")
    Client(bench, "board").port.write(b"SYST:COMM:TIM 10000;:OUTP ON\n")
    meter = Client(bench, "meter")
    bench.advance(20.0)
    assert [(one.kind, one.at) for one in bench.struck] == [
        ("heartbeat_loss", 3.0), ("queue_overflow", 4.0), ("restart", 7.0),
    ]  # fmt: skip
    ends = [(one.at, one.what, one.why) for one in bench.record if one.what.endswith("off")]
    assert ends == [(3.0, "drive_off", "heartbeat"), (7.0, "supply_off", "power")]
    assert meter.ask("SYST:ERR?").startswith(b"-113,")


@pytest.mark.parametrize(("kind", "error"), [("close", ConnectionAbortedError), ("node_moves", ConnectionResetError)])
def test_a_connection_at_rest_breaks_at_its_time(faulty: Faulty, kind: str, error: type[Exception]) -> None:
    """A client that waits for nothing but the connection sees it go at 5 s; where nobody holds one, nothing breaks, and
    who comes later is served."""
    bench = faulty(on(kind, start="5 s"), on(kind, "meter", start="5 s"))
    supply = Client(bench, "supply")
    bench.clock.wait(60.0, (supply,))
    assert bench.now == 5.0
    with pytest.raises(error):
        supply.port.read()
    bench.advance(10.0)
    assert Client(bench, "meter").ask("*OPC?") == b"1\n"
    assert Client(bench, "supply").ask("*OPC?") == b"1\n"
    assert [(one.instrument, one.at) for one in bench.struck] == [("supply", 5.0), ("meter", 5.0)]


def test_garbage_flows_from_its_time_to_its_end(faulty: Faulty) -> None:
    """From 2 s for 3 s, unasked: 64 bytes every 50 ms (60 or 61 pieces), none before and none after."""
    supply = Client(faulty(on("garbage", start="2 s", lasts="3 s")), "supply")
    came = supply.pieces(seconds=20.0)
    assert 2.0 <= came[0][0] < 2.01
    assert 4.9 <= came[-1][0] < 5.01
    assert len(b"".join(data for _, data in came)) in (60 * 64, 61 * 64)


def test_what_happened_in_an_earlier_session_does_not_happen_again(short_job: Path) -> None:
    """A session that begins at 100 s: the restart of 10 s is past, that of 110 s is to come, and garbage without an end
    goes on."""
    job = load(short_job)
    faults = [on("restart", start="10 s"), on("restart", start="110 s"), on("garbage", "meter", start="10 s")]
    specs = tuple(SimulatedFault.model_validate(fault) for fault in faults)
    bench = build(job.model_copy(update={"rig": job.rig.model_copy(update={"simulated_faults": specs})}), 2, 100.0)
    supply, meter = Client(bench, "supply"), Client(bench, "meter")
    assert supply.ask("*OPC?") == b"1\n"
    bench.advance(120.0)
    assert [(one.kind, one.at) for one in bench.struck] == [("garbage", 100.0), ("restart", 110.0)]
    assert len(meter.port.read()) > 1000


def test_a_fault_of_the_rig_begins_though_nobody_looks(faulty: Faulty) -> None:
    """A supply that drops out at 6 s is on the list of what acted at 6 s, with no message in between."""
    bench = faulty({"kind": "supply_dropout", "start": "6 s", "lasts": "1 s"})
    bench.advance(5.9)
    assert bench.struck == []
    bench.advance(6.0)
    assert [(one.kind, one.at) for one in bench.struck] == [("supply_dropout", 6.0)]
