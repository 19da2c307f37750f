"""The simulated scope: frequency, duty and mean of one channel."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

from sweeprig.errors import ConfigError
from sweeprig.quantities import Accuracy

if TYPE_CHECKING:
    from tests.simbench.conftest import Bed

QUIET = {"frequency_noise_percent": 0.0, "duty_noise_percent": 0.0, "volts_noise": 0.0}


def test_it_reads_the_quantised_signal_that_the_board_makes(bed: Bed) -> None:
    """25 kHz and 33.3 % are 640 ticks of which 213 are on: 33.28125 %."""
    board, scope = bed.board(), bed.scope(errors=QUIET)
    bed.tell(board, "SOUR:FREQ 25000", "SOUR:PULS:DCYC 33.3", "OUTP ON")
    began = bed.bench.now
    assert float(bed.ask(scope, "MEAS:FREQ? (@1)")) == pytest.approx(25_000.0, rel=1e-7)
    assert bed.bench.now == pytest.approx(began + 0.051, abs=1e-9)
    assert float(bed.ask(scope, "MEAS:PDUT? (@1)")) == pytest.approx(33.28125, rel=1e-7)


@pytest.mark.parametrize(
    "settings", [["SOUR:PULS:DCYC 50"], ["SOUR:PULS:DCYC 0", "OUTP ON"], ["SOUR:PULS:DCYC 100", "OUTP ON"]]
)
def test_without_edges_there_is_nothing_to_measure(bed: Bed, settings: list[str]) -> None:
    """Output off, duty 0 and duty 100 have no edges: 9.91E37 for frequency and duty."""
    board, scope = bed.board(), bed.scope()
    bed.tell(board, *settings)
    assert bed.ask(scope, "MEAS:FREQ? (@1)") == "9.91E+37"
    assert bed.ask(scope, "MEAS:PDUT? (@1)") == "9.91E+37"


def test_a_signal_that_stops_during_the_measurement_is_not_measured(bed: Bed) -> None:
    """Switched off within the 50 ms: 9.91E37."""
    board, scope = bed.board(), bed.scope()
    bed.tell(board, "SOUR:PULS:DCYC 50", "OUTP ON")
    board.port.write(b"OUTP OFF\n")
    assert bed.ask(scope, "MEAS:FREQ? (@1)") == "9.91E+37"


def test_a_signal_that_begins_during_the_measurement_is_not_measured(bed: Bed) -> None:
    """Asked a moment before OUTP ON arrives: 9.91E37; asked again it is there."""
    board, scope = bed.board(), bed.scope()
    bed.tell(board, "SOUR:PULS:DCYC 50")
    board.port.write(b"OUTP ON\n")
    assert bed.ask(scope, "MEAS:FREQ? (@1)") == "9.91E+37"
    assert float(bed.ask(scope, "MEAS:FREQ? (@1)")) == pytest.approx(1000.0, rel=1e-3)


def test_other_channels_see_nothing_and_a_list_gives_a_list(bed: Bed) -> None:
    """The rig says channel 2: channel 1 has no signal; several channels answer separated by commas."""
    board, scope = bed.board(), bed.scope(options={"channel": 2}, errors=QUIET)
    bed.tell(board, "SOUR:PULS:DCYC 50", "OUTP ON")
    nothing, duty = bed.ask(scope, "MEAS:PDUT? (@1,2)").split(",")
    assert nothing == "9.91E+37"
    assert float(duty) == pytest.approx(50.0, rel=1e-7)


def test_the_mean_voltage_follows_what_it_is_connected_to(bed: Bed) -> None:
    """Drive signal: 5 V × duty; switch node: supply − motor; stated errors are in it."""
    board, scope = bed.board(), bed.scope(errors={**QUIET, "volts_offset_error": 0.5})
    bed.tell(board, "SOUR:PULS:DCYC 50", "OUTP ON")
    assert float(bed.ask(scope, "MEAS:VOLT:DC? (@1)")) == pytest.approx(3.0, abs=1e-6)


def test_the_mean_at_the_switch_node_is_supply_less_motor(bed: Bed) -> None:
    """12 V at 25 %: 9 V."""
    board, scope = bed.board(), bed.scope("switch_node", errors=QUIET)
    bed.plant.set_supply(12.0, 1.0, True)
    bed.tell(board, "SOUR:PULS:DCYC 25", "OUTP ON")
    assert float(bed.ask(scope, "MEAS:VOLT? (@1)")) == pytest.approx(9.0, abs=1e-4)


def test_duty_errors_come_from_the_accuracy_statement(bed: Bed) -> None:
    """± 0.5 % duty stated: the reading is off by a constant within it."""
    board = bed.board()
    scope = bed.scope(accuracy={"duty": Accuracy(0.0, 0.5)}, errors={"duty_noise_percent": 0.0})
    bed.tell(board, "SOUR:PULS:DCYC 50", "OUTP ON")
    first, second = (float(bed.ask(scope, "MEAS:PDUT? (@1)")) for _ in range(2))
    assert first == second
    assert 0.0 < abs(first - 50.0) <= 0.5


def test_a_missing_or_impossible_channel_is_refused(bed: Bed) -> None:
    """No list -109, channel 5 of 4 -222."""
    scope = bed.scope()
    bed.tell(scope, "MEAS:FREQ?")
    assert bed.ask(scope, "SYST:ERR?").startswith("-109,")
    bed.tell(scope, "MEAS:FREQ? (@5)")
    assert bed.ask(scope, "SYST:ERR?").startswith("-222,")


def test_a_rig_that_names_no_possible_channel_is_refused(bed: Bed) -> None:
    """options.channel = 9 is a ConfigError with the allowed span."""
    with pytest.raises(ConfigError, match="1 to 4"):
        bed.scope(options={"channel": 9})
