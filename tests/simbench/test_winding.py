"""The winding's current in plain numbers: the settings' own means, and the table's error."""

import math

import numpy as np
import pytest

from sweeprig.simbench.bridge import SwitchedStage
from sweeprig.simbench.chopper import chopper
from sweeprig.simbench.friction import Normals
from sweeprig.simbench.stage import Setting
from sweeprig.simbench.winding import (
    CLOSED_FORM,
    STRAIGHT,
    TABLE,
    averaged,
    chopped,
    flow,
    mean_current,
    mean_supply_current,
    place_in,
)

R, L = 11.2, 10.5e-3
EMFS = [*np.linspace(-2.0, 2.0, 41).tolist(), 0.013, 1.987]


def means(setting: Setting, kind: int, tolerance: float) -> None:
    winding, data = averaged(setting, 0.0, 0.0, 2.0)
    assert winding.kind == kind
    scale, drawn = abs(setting.mean_current(0.0)[0]), abs(setting.mean_supply_current(0.0))
    for emf in EMFS:
        amps, slope = mean_current(winding, data, emf)
        exact, exact_slope = setting.mean_current(emf)
        assert amps == pytest.approx(exact, abs=tolerance * scale)
        assert slope == pytest.approx(exact_slope, abs=100.0 * tolerance * scale)
        expected = setting.mean_supply_current(emf)
        assert mean_supply_current(winding, data, emf) == pytest.approx(expected, abs=10.0 * tolerance * drawn)


@pytest.mark.parametrize(("pwm_hz", "duty"), [(300.0, 9.0), (1000.0, 40.0), (25e3, 12.0), (50.0, 5.0), (1000.0, 0.0)])
def test_closed_form_is_the_choppers(pwm_hz: float, duty: float) -> None:
    """Current, slope and supply current of the plain stage are those of `Chopper`, to 1e-12 of the standing ones."""
    means(chopper(12.0, R, L, pwm_hz, duty), CLOSED_FORM, 1e-12)


def test_synchronous_bridge_is_straight() -> None:
    """A synchronous half bridge gives a current linear in the back-EMF, to 1e-10 of the standing one."""
    stage = SwitchedStage("half_bridge", synchronous=True, switch_ohms=0.05, supply_ohms=0.1, holds_bus=True)
    means(stage.setting(12.0, R, L, 1000.0, 30.0, True), STRAIGHT, 1e-10)


@pytest.mark.parametrize(("pwm_hz", "duty"), [(300.0, 15.0), (1000.0, 12.0), (25e3, 12.0)])
def test_table_of_a_bridge_with_diodes(pwm_hz: float, duty: float) -> None:
    """Where a diode bridge's current becomes discontinuous the table errs by less than 1e-3 of the standing current.

    Independent method: Newton's periodic current of `switched` at back-EMFs between the table's nodes.
    """
    stage = SwitchedStage("half_bridge", switch_ohms=0.05, diode_ohms=0.02)
    means(stage.setting(12.0, R, L, pwm_hz, duty, True), TABLE, 1e-3)


@pytest.mark.parametrize("emf", [0.0, 0.6, 1.5, -0.3])
def test_flow_over_periods_settles_to_the_mean(emf: float) -> None:
    """Stepped for 60 periods at constant back-EMF, charge and supply charge of the last are those of the means."""
    setting = chopper(12.0, R, L, 400.0, 20.0)
    winding, data = chopped(setting, R, L)
    amps = charge = drawn = 0.0
    for _ in range(60):
        charge = drawn = 0.0
        for phase in range(winding.phases):
            amps, gone, taken = flow(winding, data, amps, emf, float(data[7 * phase]), phase)
            charge, drawn = charge + gone, drawn + taken
    assert charge * 400.0 == pytest.approx(setting.mean_current(emf)[0], rel=1e-9)
    assert drawn * 400.0 == pytest.approx(setting.mean_supply_current(emf), rel=1e-9)


def test_place_in_the_period() -> None:
    """The part of the period and what is left of it; just before an end it is already the next part."""
    winding, data = chopped(chopper(12.0, R, L, 100.0, 20.0), R, L)
    for phase_s, part, left in ((0.0, 0, 0.002), (0.003, 1, 0.007), (0.002 * (1.0 - 1e-12), 1, 0.008)):
        found = place_in(winding, data, phase_s)
        assert found[0] == part
        assert found[1] == pytest.approx(left)
    assert place_in(*averaged(chopper(12.0, R, L, 100.0, 20.0), 0.0, 0.0, 1.0), 0.003) == (0, math.inf)


def test_normals_seen_ahead_are_those_drawn() -> None:
    """What is seen ahead is what is drawn next, across the ends of blocks, however much of it is passed over."""
    seen, plain = Normals(np.random.default_rng(5)), Normals(np.random.default_rng(5))
    for count, taken in ((3, 2), (700, 511), (48, 48), (1, 0), (1200, 3), (2, 2)):
        ahead = seen.ahead(count)
        assert len(ahead) == count
        seen.pass_over(taken)
        assert [plain() for _ in range(taken)] == ahead[:taken]
    assert seen() == plain()
