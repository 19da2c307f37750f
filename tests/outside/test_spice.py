"""The power stages against ngspice, a circuit simulator that shares nothing with this project (independent method).

Same switch resistance and diode law in both; the figures' group `physics` runs 72 cases, here are a few of each stage.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from sweeprig.simbench.bridge import Kind, SwitchedStage

POINTS = [(300.0, 40.0, 5.0), (1000.0, 20.0, 1.0)]
STAGES: list[tuple[Kind, bool, bool, float]] = [
    ("low_side_diode", False, False, 0.0),
    ("half_bridge", True, False, 2e-6),
    ("h_bridge", True, False, 2e-6),
    ("h_bridge", False, True, 0.0),
]


@pytest.fixture
def spice(reference: Callable[[str], Any]) -> Any:
    """The netlists; skips where ngspice is not installed."""
    module = reference("spice")
    if module.found() is None:
        pytest.skip("ngspice is not installed here (Debian package: ngspice)")
    return module


@pytest.mark.parametrize(("kind", "synchronous", "fast", "dead_s"), STAGES)
@pytest.mark.parametrize(("pwm_hz", "duty", "emf"), POINTS)
def test_waveform_against_a_circuit_simulator(
    spice: Any, reference: Callable[[str], Any], kind: Kind, synchronous: bool, fast: bool, dead_s: float,
    pwm_hz: float, duty: float, emf: float,
) -> None:  # fmt: skip
    """Mean current and voltage agree to 0.1 %, valley and peak to 0.1 % of the peak; ngspice begins 10 % aside.

    ngspice's own error, seen over its tolerances and steps, is below 0.05 %.
    """
    circuit = reference("circuits").Circuit(
        kind, 12.0, 6.0, 3e-3, pwm_hz, duty, 0.15, 0.6, 0.08, 0.2, dead_s, synchronous, fast
    )
    stage = SwitchedStage(kind, synchronous, fast, 0.15, 0.6, 0.08, dead_s, 0.0, 0.2)
    shape = stage.setting(12.0, 6.0, 3e-3, pwm_hz, duty, True).wave(emf)
    found = spice.solve(circuit, emf, 0.9 * shape.value("motor_lead", 0.0))
    peak = max(shape.peak_amps, -shape.valley_amps)
    assert found["amps"] == pytest.approx(shape.mean_motor_amps, rel=1e-3)
    assert found["volts"] == pytest.approx(shape.mean_motor_volts, rel=1e-3)
    assert -found["supply"] == pytest.approx(shape.mean_supply_amps, abs=1e-3 * peak)
    assert found["valley"] == pytest.approx(shape.valley_amps, abs=1e-3 * peak)
    assert found["peak"] == pytest.approx(shape.peak_amps, abs=1e-3 * peak)
