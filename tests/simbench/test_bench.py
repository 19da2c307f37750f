"""The bench as a whole: events, clock, record, and the job's own bench with the real plant."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from sweeprig import job as jobs
from sweeprig.errors import ConfigError, SweeprigError, UnknownAdapter
from sweeprig.simbench import Bench, build
from sweeprig.simbench.plant import Plant
from sweeprig.simbench.port import Port

DEMO = Path(__file__).parents[2] / "configs" / "demo.toml"


@pytest.fixture(scope="module")
def demo() -> jobs.Job:
    return jobs.load(DEMO)


class Waiting:
    """One or more ports, as a clock waits on them."""

    def __init__(self, port: Port) -> None:
        self._port = port

    def fileno(self) -> int | None:
        return None

    def ready_at(self) -> float:
        return self._port.next_ready()


def ask(bench: Bench, name: str, message: str) -> str:
    """Send a query and wait for its answer."""
    port = bench.ports[name]
    port.write(message.encode("ascii") + b"\n")
    bench.clock.wait(bench.now + 20.0, (Waiting(port),))
    return port.read().decode("ascii").removesuffix("\n")


def opened(job: jobs.Job, session: int = 1, began: float = 0.0) -> Bench:
    bench = build(job, session, began)
    for port in bench.ports.values():
        port.open()
    return bench


def started(job: jobs.Job, session: int = 1, duty: float = 60.0) -> Bench:
    """The fan driven for 3 s at 1 kHz and 12 V."""
    bench = opened(job, session)
    for name, messages in {
        "supply": "SOUR:VOLT 12;CURR 1.5;:OUTP ON",
        "meter": "CONF:VOLT:DC 100;:SENS:VOLT:DC:APER 0.2",
        "board": f"SYST:COMM:TIM 10000;:SOUR:FREQ 1000;PULS:DCYC {duty};:OUTP ON",
    }.items():
        bench.ports[name].write(messages.encode("ascii") + b"\n")
    bench.advance(bench.now + 3.0)
    return bench


def everything(job: jobs.Job, session: int) -> list[str]:
    """What all instruments say during a short run: the bytes that a run would record."""
    bench = started(job, session)
    said = []
    for _ in range(5):
        said += [ask(bench, "board", "FETC:COUN?"), ask(bench, "meter", "READ?"), ask(bench, "supply", "MEAS:CURR?")]
        said += [ask(bench, "scope", "MEAS:PDUT? (@1)"), ask(bench, "scope", "MEAS:FREQ? (@1)")]
    return said


def test_events_happen_in_time_order_and_equal_times_in_the_order_of_asking(demo: jobs.Job) -> None:
    """Two events at one time keep their order; an earlier one asked for later still comes first."""
    bench = build(demo)
    seen: list[tuple[float, object]] = []
    for time, what in ((2.0, "a"), (1.0, "b"), (2.0, "c"), (3.5, "d")):
        bench.at(time, lambda argument: seen.append((bench.now, argument)), what)
    bench.advance(3.0)
    assert seen == [(1.0, "b"), (2.0, "a"), (2.0, "c")]
    assert bench.now == 3.0
    assert bench.next_event() == 3.5


def test_passing_time_stops_where_a_port_was_touched(demo: jobs.Job) -> None:
    """`pass_until` returns True at the event that gave an answer, and False at its end when none did."""
    bench = opened(demo)
    bench.at(0.5, lambda _: None, None)
    assert (bench.pass_until(1.0), bench.now) == (False, 1.0)
    bench.at(1.5, lambda _: bench.ports["meter"].put(b"1\n"), None)
    bench.at(1.6, lambda _: None, None)
    assert (bench.pass_until(2.0), bench.now, bench.next_event()) == (True, 1.5, 1.6)


def test_unread_answers_are_counted(demo: jobs.Job) -> None:
    """What is under way counts until it is read, or lost with its connection."""
    bench = opened(demo)
    meter, supply = bench.ports["meter"], bench.ports["supply"]
    for _ in range(3):
        meter.put(b"1\n")
    supply.put(b"2\n")
    assert bench.unread == 4
    bench.advance(1.0)
    assert (meter.read(), bench.unread) == (b"1\n1\n1\n", 1)
    supply.close()
    supply.close()
    assert bench.unread == 0
    supply.put(b"nobody holds it open\n")
    assert bench.unread == 0


def test_time_never_runs_backwards(demo: jobs.Job) -> None:
    """Advancing to the past does nothing; waiting for a moment that has passed returns at once."""
    bench = build(demo, began=10.0)
    bench.advance(5.0)
    bench.clock.wait(7.0)
    assert bench.now == 10.0


def test_waiting_for_ever_with_nothing_to_come_is_an_error(demo: jobs.Job) -> None:
    """A wait without end on an idle bench would hang a test: it is refused."""
    with pytest.raises(SweeprigError, match="wait for ever"):
        build(demo).clock.wait(math.inf)


def test_the_clock_stops_at_the_first_answer_and_at_the_deadline(demo: jobs.Job) -> None:
    """Waiting on two ports returns when the first has bytes; without bytes exactly at `until`."""
    bench = opened(demo)
    bench.ports["meter"].write(b"READ?\n")
    bench.ports["scope"].write(b"MEAS:FREQ? (@1)\n")
    both = tuple(Waiting(bench.ports[name]) for name in ("meter", "scope"))
    bench.clock.wait(5.0, both)
    assert bench.now == pytest.approx(0.021)
    assert bench.ports["meter"].read() != b""
    assert bench.ports["scope"].read() == b""
    bench.clock.wait(0.03, both)
    assert bench.now == 0.03


def test_utc_runs_with_bench_time_from_the_given_start(demo: jobs.Job) -> None:
    """UTC is the start's plus the time since; by default a fixed evening, so that runs are repeatable."""
    bench = build(demo, began=100.0, began_utc=2e9)
    bench.advance(130.0)
    assert bench.clock.utc() == 2e9 + 30.0
    # 2026-03-02 18:00:00 UTC (computed with the standard library's datetime)
    assert build(demo).clock.utc() == 1_772_474_400.0
    assert build(demo, began=50.0).clock.utc() == 1_772_474_450.0


def test_the_same_seed_gives_the_same_bytes(demo: jobs.Job) -> None:
    """Two benches of one job and session say the same, byte for byte."""
    assert everything(demo, 1) == everything(demo, 1)


def test_another_session_has_other_noise_and_the_same_instruments(demo: jobs.Job) -> None:
    """Session 2: identities and the instruments' own errors as before, every reading stream different."""
    first, second = build(demo, 1), build(demo, 2)
    for name in first.instruments:
        one, other = (vars(bench.instruments[name])["setup"] for bench in (first, second))
        assert first.instruments[name].identity() == second.instruments[name].identity()
        assert one.errors_rng.getstate() == other.errors_rng.getstate()
        assert one.noise.getstate() != other.noise.getstate()
    assert vars(first.instruments["meter"])["_scale"] == vars(second.instruments["meter"])["_scale"]
    said = zip(everything(demo, 1), everything(demo, 2), strict=True)
    assert sum(one != other for one, other in said) >= 20


def test_every_instrument_says_simulated_and_has_its_own_serial(demo: jobs.Job) -> None:
    """The maker field marks the record as simulated; serials differ."""
    bench = opened(demo)
    identities = [ask(bench, name, "*IDN?").split(",") for name in bench.ports]
    assert {maker for maker, *_ in identities} == {"SIMULATED"}
    assert len({serial for _, _, serial, _ in identities}) == len(identities) == 4


def test_looking_for_instruments_changes_nothing(demo: jobs.Job) -> None:
    """Identity, error queue, event status and settings asked of all four: no state-changing command counted."""
    bench = opened(demo)
    for name in bench.ports:
        for query in ("*IDN?", "SYST:ERR?", "*ESR?", "*STB?"):
            ask(bench, name, query)
    assert bench.state_changes == dict.fromkeys(bench.ports, 0)
    assert bench.record == []


def test_what_the_instruments_read_agrees_with_the_plant(demo: jobs.Job) -> None:
    """Meter, supply, scope and tachometer against the true motor, within twice each accuracy statement plus noise.

    Bounds: the rig file's statements (meter 0.02 % + 3 mV, supply 0.2 % + 1 mA, scope 0.05 %, board 0.01 %), and for
    the short aperture the published square-wave bound 12.5 V/(4·f·T) of checks.md 11.5 is zero: 200 whole periods.
    """
    bench = started(demo)
    plant = bench.plant_now()
    volts, amps, began = plant.motor_volt_seconds, plant.supply_amp_seconds, bench.now
    meter = float(ask(bench, "meter", "READ?"))
    passed = 0.2
    bench_end = bench.now
    true_volts = (bench.plant_now().motor_volt_seconds - volts) / (bench_end - began)
    assert meter == pytest.approx(true_volts, abs=2 * (0.0002 * true_volts + 3e-3) + 2e-3)
    assert bench_end - began == pytest.approx(passed + 1e-3)
    amps, began = bench.plant_now().supply_amp_seconds, bench.now
    supply = float(ask(bench, "supply", "MEAS:CURR?"))
    true_amps = (bench.plant_now().supply_amp_seconds - amps) / (bench.now - began)
    assert supply == pytest.approx(true_amps, abs=2 * (0.002 * true_amps + 1e-3))
    assert float(ask(bench, "scope", "MEAS:PDUT? (@1)")) == pytest.approx(60.0, abs=0.2)
    _, edges, ticks, clock_hz, _ = (int(field) for field in ask(bench, "board", "FETC:COUN?").split(","))
    true_rpm = true_omega(bench) * 60.0 / (2.0 * math.pi)
    assert edges / ticks * clock_hz * 60.0 / 2.0 == pytest.approx(true_rpm, rel=0.01)


def true_omega(bench: Bench) -> float:
    """The true speed now, rad/s; the real plant has it, the instruments' view of it does not."""
    plant = bench.plant_now()
    assert isinstance(plant, Plant)
    return plant.omega


def test_silence_stops_the_real_motor(demo: jobs.Job) -> None:
    """With a 2 s heartbeat and nobody asking, the drive goes off after 2 s and the fan runs down."""
    bench = started(demo)
    bench.ports["board"].write(b"SYST:COMM:TIM 2000\n")
    bench.advance(bench.now + 0.1)
    assert true_omega(bench) > 100.0
    bench.advance(bench.now + 20.0)
    assert [(what, why) for _, what, why in bench.record] == [
        ("supply_on", "OUTP ON"), ("drive_on", "OUTP ON"), ("drive_off", "heartbeat"),
    ]  # fmt: skip
    assert bench.record[-1].at == pytest.approx(3.0 + 2.0 + 19 * 10 / 115_200, abs=1e-6)
    assert true_omega(bench) == 0.0


def test_a_resumed_bench_starts_cold_and_still_at_its_time(demo: jobs.Job) -> None:
    """Built for session 2 at 1000 s: outputs off, rotor at rest, and bench time goes on from there."""
    bench = opened(demo, 2, 1000.0)
    assert bench.now == bench.plant_now().now == 1000.0
    assert ask(bench, "board", "OUTP?") == "0"
    assert ask(bench, "supply", "OUTP?") == "0"
    assert true_omega(bench) == 0.0
    assert ask(bench, "board", "FETC:COUN?").startswith("0,0,0,16000000,")


def test_an_adapter_that_nothing_simulates_is_refused(demo: jobs.Job) -> None:
    """A rig with an unknown adapter names it, and lists the adapters that can be simulated."""
    meter = demo.rig.instruments["meter"].model_copy(update={"adapter": "crystal-ball"})
    rig = demo.rig.model_copy(update={"instruments": {**demo.rig.instruments, "meter": meter}})
    with pytest.raises(UnknownAdapter) as refused:
        build(demo.model_copy(update={"rig": rig}))
    assert "crystal-ball" in str(refused.value)
    assert "scpi-multimeter" in str(refused.value)


def test_a_motor_without_true_values_is_refused(demo: jobs.Job) -> None:
    """Without a [simulated] table there is nothing to simulate, and the text says what to add."""
    motor = demo.motor.model_copy(update={"simulated": None})
    with pytest.raises(ConfigError, match=r"Add a \[simulated\] table"):
        build(demo.model_copy(update={"motor": motor}))


def test_carriage_returns_are_spoken_where_the_rig_says_so(demo: jobs.Job) -> None:
    """terminator = "CR LF" and "CR" are kept in both directions."""
    for terminator, ending in (("CR LF", b"\r\n"), ("CR", b"\r")):
        meter = demo.rig.instruments["meter"].model_copy(update={"terminator": terminator})
        rig = demo.rig.model_copy(update={"instruments": {**demo.rig.instruments, "meter": meter}})
        bench = opened(demo.model_copy(update={"rig": rig}))
        bench.ports["meter"].write(b"*OPC?" + ending)
        bench.advance(1.0)
        assert bench.ports["meter"].read() == b"1" + ending
