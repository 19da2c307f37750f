"""Every fault of instruments and links is seen to act, by a plain client of the bench's ports. When: test_fault_times.

Expected bytes are the plain bench's own answer altered by hand in the test: the kinds' definitions, from the manual.
"""

from __future__ import annotations

import itertools

import pytest

from sweeprig import manual
from sweeprig.errors import ConfigError
from sweeprig.job.amounts import shown
from sweeprig.job.fault_models import FAULT_KINDS
from sweeprig.simbench.faults import KINDS
from sweeprig.simbench.port import Port
from sweeprig.simbench.rig_faults import FaultyMachine
from tests.simbench.conftest import Client, Faulty, on

PLAIN = b"0.00000E+00\n"
"""The answer to `SOUR:VOLT?` after power-on: six digits, NR3 (own earlier output, checked in the test below)."""

ANSWERS: dict[str, bytes] = {
    "no_reply": b"",
    "extra_terminator": b"\n" + PLAIN,
    "missing_terminator": PLAIN[:-1],
    "double_terminator": PLAIN + b"\n",
    "cr_lf": PLAIN[:-1] + b"\r\n",
    "sentinel": b"9.91E37\n",
    "text_marker": b"****\n",
    "wrong_count": PLAIN[:-1] + b"," + PLAIN,
}


@pytest.mark.parametrize("kind", ANSWERS)
def test_the_kth_answer_and_no_other(faulty: Faulty, kind: str) -> None:
    """The second answer is altered as the manual says; the first, the third and other instruments' are not."""
    bench = faulty(on(kind, exchange=2))
    supply = Client(bench, "supply")
    assert [supply.ask("SOUR:VOLT?") for _ in range(3)] == [PLAIN, ANSWERS[kind], PLAIN]
    assert Client(bench, "meter").ask("*OPC?") == b"1\n"
    assert [(one.kind, one.instrument, one.exchange) for one in bench.struck] == [(kind, "supply", 2)]


def test_a_message_that_asks_nothing_passes_the_fault_on(faulty: Faulty) -> None:
    """A fault of answers planned for a setting strikes the next message that asks something, once."""
    supply = Client(faulty(on("no_reply", exchange=1)), "supply")
    assert [supply.ask(message) for message in ("SOUR:VOLT 0", "SOUR:VOLT?", "SOUR:VOLT?")] == [b"", b"", PLAIN]


def test_noise_and_high_bits(faulty: Faulty) -> None:
    """Row C17: Noise stands before the whole answer; a byte that is no ASCII replaces one of it, and its end stays."""
    supply = Client(faulty(on("noise_before", exchange=1, count=5), on("non_ascii", exchange=2, count=2)), "supply")
    noisy, high = supply.ask("SOUR:VOLT?"), supply.ask("SOUR:VOLT?")
    assert len(noisy) == len(PLAIN) + 5
    assert noisy.endswith(PLAIN)
    assert sum(byte > 0x7F for byte in high) == 2
    assert bytes(byte & 0x7F for byte in high) == PLAIN


def test_late_split_and_dribbled(faulty: Faulty) -> None:
    """Times of the pieces: all of it late; the second half later; each byte after the last one."""
    bench = faulty(
        on("late_reply", exchange=1, delay="3 s"),
        on("split_reply", exchange=2, delay="0.5 s"),
        on("dribble", exchange=3, delay="0.2 s"),
    )
    supply = Client(bench, "supply")
    usual_s = Client(faulty(on("late_reply", exchange=9)), "supply").pieces("SOUR:VOLT?")[0][0]
    (late,) = supply.pieces("SOUR:VOLT?", 5.0)
    assert late[0] == pytest.approx(usual_s + 3.0)
    assert late[1] == PLAIN
    split = supply.pieces("SOUR:VOLT?", 5.0)
    assert [data for _, data in split] == [PLAIN[:6], PLAIN[6:]]
    assert split[1][0] - split[0][0] == pytest.approx(0.5)
    dribbled = supply.pieces("SOUR:VOLT?", 5.0)
    assert [data for _, data in dribbled] == [PLAIN[place : place + 1] for place in range(len(PLAIN))]
    gaps = [later[0] - sooner[0] for sooner, later in itertools.pairwise(dribbled)]
    assert gaps == pytest.approx([0.2] * (len(PLAIN) - 1))


def test_answers_keep_their_order(faulty: Faulty) -> None:
    """What is asked while an answer is late is answered after it."""
    supply = Client(faulty(on("late_reply", exchange=1, delay="3 s")), "supply")
    assert supply.ask("SOUR:VOLT?", 1.0) == b""
    assert supply.ask("*OPC?", 5.0) == PLAIN + b"1\n"


@pytest.mark.parametrize(("name", "comes"), [("meter", b""), ("board", b"1\n")])
def test_late_behind_a_new_connection(faulty: Faulty, name: str, comes: bytes) -> None:
    """A late answer dies with its network connection; on a serial line it reaches whoever opened the port since."""
    bench = faulty(on("late_reply", name, exchange=1, delay="3 s"))
    assert Client(bench, name).ask("*OPC?") == b""
    assert Client(bench, name).ask(seconds=5.0) == comes


def test_blocks_that_lie(faulty: Faulty) -> None:
    """Row B11: Three bytes fewer, two more than the header says; an answer that is no block is left alone and does not
    count."""
    bench = faulty(on("truncated_block", "scope", exchange=1), on("overlong_block", "scope", exchange=3, count=2))
    bench.instruments["scope"].tree.add("TEST:BLOCk?", lambda _: "#15h\nllo")  # type: ignore[attr-defined]  # an Instrument
    scope = Client(bench, "scope")
    asked = ["*OPC?", "TEST:BLOC?", "TEST:BLOC?", "TEST:BLOC?"]
    assert [scope.ask(one) for one in asked] == [b"1\n", b"#15h\n\n", b"#15h\nllo**\n", b"#15h\nllo\n"]


@pytest.mark.parametrize(("kind", "error"), [("close", ConnectionAbortedError), ("reset", ConnectionResetError)])
def test_a_broken_connection(faulty: Faulty, kind: str, error: type[Exception]) -> None:
    """It is seen at once, by reading and writing alike, until the port is opened again; the instrument went on."""
    bench = faulty(on(kind, exchange=2))
    supply = Client(bench, "supply")
    supply.ask("SOUR:VOLT 3")
    began = bench.now
    supply.port.write(b"SOUR:VOLT?\n")
    bench.clock.wait(began + 60.0, (supply,))
    assert bench.now == began
    with pytest.raises(error):
        supply.port.read()
    with pytest.raises(error):
        supply.port.write(b"*OPC?\n")
    assert Client(bench, "supply").ask("SOUR:VOLT?") == b"3.00000E+00\n"


def test_a_node_that_moves(faulty: Faulty) -> None:
    """The port is lost, cannot be opened for the delay, and is the same instrument afterwards."""
    bench = faulty(on("node_moves", "board", exchange=1, delay="4 s"))
    board = Client(bench, "board")
    board.port.write(b"*OPC?\n")
    bench.advance(bench.now + 0.1)
    with pytest.raises(ConnectionResetError):
        board.port.read()
    with pytest.raises(ConnectionRefusedError):
        board.port.open()
    bench.advance(4.2)
    assert Client(bench, "board").ask("*OPC?") == b"1\n"


def test_garbage_without_end(faulty: Faulty) -> None:
    """64 bytes every 50 ms and never an end of line, whatever is asked; a new connection is free of it."""
    bench = faulty(on("garbage", exchange=2))
    supply = Client(bench, "supply")
    assert supply.ask("SOUR:VOLT?") == PLAIN
    flood = supply.ask("SOUR:VOLT?", 10.0)
    assert 199 * 64 <= len(flood) <= 200 * 64
    assert b"\n" not in flood
    assert supply.ask(seconds=1.0)
    assert Client(bench, "supply").ask("SOUR:VOLT?") == PLAIN


def test_openings(faulty: Faulty) -> None:
    """The second opening is refused, the third taken in silence, the fourth as it should be."""
    bench = faulty(on("refuse", exchange=2), on("accept_silent", exchange=3))
    assert Client(bench, "supply").ask("SOUR:VOLT?") == PLAIN
    with pytest.raises(ConnectionRefusedError):
        Client(bench, "supply")
    assert Client(bench, "supply").ask("SOUR:VOLT?") == b""
    assert Client(bench, "supply").ask("SOUR:VOLT?") == PLAIN
    assert [(one.kind, one.exchange) for one in bench.struck] == [("refuse", 2), ("accept_silent", 3)]


def test_links_run_out(faulty: Faulty) -> None:
    """Row A20: With two links for 30 s each the third opening is refused, and not when the first link is free again."""
    bench = faulty(on("link_limit", start="0 s"))
    for _ in range(2):
        Client(bench, "supply").port.close()
    with pytest.raises(ConnectionRefusedError):
        Client(bench, "supply")
    bench.advance(30.1)
    assert Client(bench, "supply").ask("SOUR:VOLT?") == PLAIN
    assert [one.kind for one in bench.struck] == ["link_limit"]


def test_reset_on_open(faulty: Faulty) -> None:
    """Row C1: A board that resets when it is opened is deaf for 1.5 s, then has its defaults and the power-on bit."""
    bench = faulty(on("reset_on_open", "board", exchange=2))
    assert Client(bench, "board").ask("SENS:FREQ:APER 0.5;APER?;*ESR?") == b"5.000000E-01;128\n"
    again = Client(bench, "board")
    assert again.ask("*OPC?", 1.4) == b""
    bench.advance(bench.now + 0.2)
    assert again.ask("SENS:FREQ:APER?;*ESR?") == b"2.500000E-01;128\n"


def test_restart(faulty: Faulty) -> None:
    """Off and on: the message is lost, the instrument deaf for a second, the settings gone, the power-on bit set."""
    supply = Client(faulty(on("restart", exchange=2)), "supply")
    supply.ask("SOUR:VOLT 5;*ESR?")
    assert [supply.ask("SOUR:VOLT?", 0.5) for _ in range(2)] == [b"", b""]
    assert supply.ask("SOUR:VOLT?;*ESR?", 0.5) == b"0.00000E+00;128\n"


def test_minimum_gap(faulty: Faulty) -> None:
    """Row B5: A message 1 ms after the last one is lost, one 20 ms after it is obeyed."""
    bench = faulty(on("minimum_gap", start="0 s"))
    supply = Client(bench, "supply")
    supply.port.write(b"SOUR:VOLT 5\n")
    bench.advance(bench.now + 0.001)
    supply.port.write(b"SOUR:VOLT 7\n")
    bench.advance(bench.now + 0.02)
    assert supply.ask("SOUR:VOLT?") == b"5.00000E+00\n"
    assert len(bench.struck) == 1


def test_busy(faulty: Faulty) -> None:
    """The message and those after it are obeyed in order, two seconds later."""
    supply = Client(faulty(on("busy", exchange=1)), "supply")
    supply.port.write(b"SOUR:VOLT 5\n")
    came = supply.pieces("SOUR:VOLT?", 5.0)
    assert [data for _, data in came] == [b"5.00000E+00\n"]
    assert came[0][0] == pytest.approx(2.0, abs=0.01)


def test_completion_that_lies(faulty: Faulty) -> None:
    """Row B6: A reading of 1 s is under way: complete at once, in its time where the fault is another one, or never."""
    times = []
    for kind in ("completion_at_once", "cr_lf", "completion_never"):
        meter = Client(faulty(on(kind, "meter", exchange=3)), "meter")
        meter.ask("CONF:VOLT:DC 100;:SENS:VOLT:DC:APER 1", 0.1)
        meter.ask("INIT", 0.1)
        times.append([round(time_s, 2) for time_s, _ in meter.pieces("*OPC?", 5.0)])
    assert times == [[0.0], [0.9], []]


def test_a_clipped_setting(faulty: Faulty) -> None:
    """12 V become 10.8 V and -222 is queued; off and on are no numbers; a line with checksum keeps a right one."""
    bench = faulty(on("clipped_setting", start="0 s"), on("clipped_setting", "board", start="0 s"))
    supply, board = Client(bench, "supply"), Client(bench, "board")
    supply.ask("OUTP 1")
    supply.ask("SOUR:VOLT 12")
    assert supply.ask("SOUR:VOLT?;:OUTP?;:SYST:ERR?") == b'1.08000E+01;1;-222,"Data out of range;cut"\n'
    # CRC-8, polynomial 0x07, of the two lines: computed bit by bit apart from the bench (independent method)
    asked = [f"{line}~{crc8_by_division(line.encode()):02X}" for line in ("SENS:FREQ:APER 0.5", "SENS:FREQ:APER?")]
    assert [board.ask(line) for line in (asked[1], *asked)] == [b"2.500000E-01\n", b"", b"4.500000E-01\n"]


def crc8_by_division(data: bytes) -> int:
    """The remainder of the message polynomial · x⁸ by x⁸ + x² + x + 1, by long division."""
    rest = int.from_bytes(data, "big") << 8
    for place in range(rest.bit_length() - 9, -1, -1):
        rest ^= (0x107 << place) * (rest >> (place + 8) & 1)
    return rest


def test_a_standing_error(faulty: Faulty) -> None:
    """It is back after each "no error", also after *CLS, so that only a bounded drain ends."""
    supply = Client(faulty(on("standing_error", start="0 s")), "supply")
    said = []
    for _ in range(4):
        supply.ask("*CLS")
        said.append(supply.ask("SYST:ERR?").partition(b",")[0])
    assert said == [b"-240", b"0", b"-240", b"0"]


def test_a_full_queue(faulty: Faulty) -> None:
    """Row B8: Twenty errors in a queue of sixteen: the last of them says that some are lost (SCPI-1999, 21.8)."""
    supply = Client(faulty(on("queue_overflow", exchange=1)), "supply")
    supply.ask("*OPC?")
    said = [int(supply.ask("SYST:ERR?").partition(b",")[0]) for _ in range(17)]
    assert said == [-113] * 15 + [-350, 0]


def test_local_mode(faulty: Faulty) -> None:
    """Row B12: Settings do nothing and say nothing; queries are answered; afterwards all is as before."""
    bench = faulty(on("local_mode", start="0 s", lasts="5 s"))
    supply = Client(bench, "supply")
    supply.ask("SOUR:VOLT 5")
    assert supply.ask("SOUR:VOLT?;:SYST:ERR?") == b'0.00000E+00;0,"No error"\n'
    bench.advance(5.0)
    supply.ask("SOUR:VOLT 5")
    assert supply.ask("SOUR:VOLT?") == b"5.00000E+00\n"


def test_another_identity(faulty: Faulty) -> None:
    """The serial number is another one, the rest of the identity the same; other answers are not touched."""
    bench = faulty(on("identity_changed", exchange=2))
    supply = Client(bench, "supply")
    before, volts, after = supply.ask("*IDN?"), supply.ask("SOUR:VOLT?"), supply.ask("*IDN?")
    assert before.split(b",")[2] != b"SIM00000000"
    assert after.split(b",") == [*before.split(b",")[:2], b"SIM00000000", before.split(b",")[3]]
    assert volts == PLAIN


def test_a_lost_heartbeat(faulty: Faulty) -> None:
    """The drive goes off although it was fed, as the bench's own record has it, and the board queues -365."""
    bench = faulty(on("heartbeat_loss", "board", exchange=3))
    board = Client(bench, "board")
    board.ask("OUTP ON", 0.1)
    assert board.ask("OUTP?", 0.1) == b"1\n"
    assert board.ask("OUTP?;:SYST:ERR?", 0.1).startswith(b"0;-365,")
    assert [(one.what, one.why) for one in bench.record] == [("drive_on", "OUTP ON"), ("drive_off", "heartbeat")]


def test_only_a_drive_has_a_heartbeat(faulty: Faulty) -> None:
    """A supply that is to lose its heartbeat is refused, with the name of the fault and what to write."""
    with pytest.raises(ConfigError, match=r"supply has no heartbeat.*heartbeat_loss.*role drive"):
        faulty(on("heartbeat_loss", exchange=3))


# ---- the plan -------------------------------------------------------------------------------------------------------


def test_without_faults_nothing_stands_between(faulty: Faulty) -> None:
    """A rig without faults has plain ports and the motor itself; one fault changes its own instrument only."""
    plain, one = faulty(), faulty(on("cr_lf", exchange=1))
    assert {type(port) for port in plain.ports.values()} == {Port}
    assert not isinstance(plain.plant, FaultyMachine)
    assert [name for name, port in one.ports.items() if type(port) is not Port] == ["supply"]


def test_every_kind_of_a_port_is_built() -> None:
    """The kinds that rig files may name are those that the bench can do."""
    assert set(KINDS) == {kind for kind, what in FAULT_KINDS.items() if what.place != "rig"}


def test_the_manual_has_every_kind_with_its_defaults() -> None:
    """Each kind has its line in `simbench`: what it does in the words of the code, and its strength."""
    lines = manual.text("simbench").splitlines()
    for kind, what in FAULT_KINDS.items():
        line = next(line for line in lines if line.startswith(f"| `{kind}` |"))
        assert what.about in line
        delay = [] if what.delay is None else [f"`delay` {shown(what.delay, 's')}"]
        rest = [f"`{key}` {value}" for key, value in (("count", what.count), ("text", what.text)) if value is not None]
        assert [part for part in (*delay, *rest) if part not in line] == [], kind
