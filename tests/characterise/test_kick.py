"""The kick: which pulse nearly always starts the motor, and the charge that it takes."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from sweeprig.characterise.kick import KICK_DUTIES, kicks
from sweeprig.exposures import KICK_AMPS, KICK_PULSE
from sweeprig.holds import Approach, Outcome, Purpose, Verdict
from sweeprig.plan import KickPlan, Plan

MakeOutcome = Callable[..., Outcome]
Kicked = Callable[..., Outcome]
ONCE = (
    (0.10, False), (0.20, True), (0.14, False), (0.17, True), (0.12, False), (0.20, True), (0.17, False),
    (0.28, True), (0.24, True), (0.20, True), (0.17, True), (0.14, True), (0.12, False), (0.20, True),
)  # fmt: skip
STARTS = 4 * ONCE


@pytest.fixture
def kicked(outcome: MakeOutcome) -> Kicked:
    """(number, pulse s, started, …): one kick from rest; `timed`: (s, u) where the pulse was timed."""

    def make(
        number: int,
        pulse_s: float,
        started: bool,
        kick: float = 100.0,
        run: float = 13.0,
        timed: tuple[float, float] | None = None,
        amps: float | None = None,
    ) -> Outcome:
        verdict = Verdict.STARTED if started else Verdict.DID_NOT_START
        values = {} if timed is None else {KICK_PULSE: (*timed, "s")}
        if amps is not None:
            values[KICK_AMPS] = (amps, 0.01, "A")
        return outcome(
            number, Purpose.KICK, run, verdict, approach=Approach.FROM_REST, lead=((0.0, 5.0), (kick, pulse_s)),
            values=values,
        )  # fmt: skip

    return make


def brute_force(trials: Sequence[tuple[float, bool]], logistic: bool) -> float:
    """The 95 % point of ln of the pulse for 99 %, on a plain dense grid with scipy's own distributions."""
    place = np.linspace(-4.0, 1.0, 1501)[:, None]
    log_spread = np.linspace(math.log(0.3) - 4.0, math.log(0.3) + 4.0, 601)[None, :]
    spread = np.exp(log_spread)
    law = stats.logistic(scale=math.sqrt(3.0) / math.pi) if logistic else stats.norm()
    total = stats.norm.logpdf(log_spread, math.log(0.3), 1.0) + np.zeros_like(place)
    for pulse_s, started in trials:
        z = (math.log(pulse_s) - place) / spread
        total = total + (law.logcdf(z) if started else law.logsf(z))
    weight = np.exp(total - total.max())
    wanted = place + float(law.ppf(0.99)) * spread
    order = np.argsort(wanted, axis=None)
    share = np.cumsum(weight.ravel()[order])
    return float(wanted.ravel()[order][np.searchsorted(share, 0.95 * share[-1])])


def test_bound_against_brute_force(plan: Plan, kicked: Kicked) -> None:
    """The bound is the worse of the two laws' 95 % points (independent method: scipy's distributions on a plain dense
    grid). 1 % of the time: the grids' steps."""
    found = kicks(plan, [kicked(i, *row) for i, row in enumerate(STARTS)])[0].pulse
    assert found.bound == "upper"
    assert found.value == found.high
    expected = math.exp(max(brute_force(STARTS, True), brute_force(STARTS, False)))
    assert found.value == pytest.approx(expected, rel=0.01)
    assert found.holds == tuple(range(len(STARTS)))


@pytest.mark.parametrize(("starts", "enough"), [(298, False), (299, True)])
def test_success_run(plan: Plan, kicked: Kicked, starts: int, enough: bool) -> None:
    """299 starts without a failure bring the bound down to the pulse tried, 298 do not (0.99^299 < 0.05: common
    practice, and exact)."""
    found = kicks(plan, [kicked(i, 0.2, True) for i in range(starts)])[0].pulse
    assert found.value is not None
    assert (found.value <= 0.2 + 1e-6) is enough
    assert "always_started" in found.flags


def test_pulse_as_it_was(plan: Plan, kicked: Kicked) -> None:
    """What counts is the pulse as it was timed: all of them 10 % longer than asked for give a bound 10 % longer."""
    asked = kicks(plan, [kicked(i, *row) for i, row in enumerate(STARTS)])[0].pulse
    timed = kicks(plan, [kicked(i, *row, timed=(1.1 * row[0], 0.0)) for i, row in enumerate(STARTS)])[0].pulse
    assert asked.value is not None
    assert timed.value == pytest.approx(1.1 * asked.value, rel=2e-3)


def test_timing_is_in_the_bound(plan: Plan, kicked: Kicked) -> None:
    """Pulses known to 30 % only, all by the same link, move the bound up; what was assumed says so."""
    sharp = kicks(plan, [kicked(i, *row, timed=(row[0], 0.0)) for i, row in enumerate(STARTS)])[0].pulse
    loose = kicks(plan, [kicked(i, *row, timed=(row[0], 0.3 * row[0])) for i, row in enumerate(STARTS)])[0].pulse
    assert sharp.value is not None
    assert loose.value is not None
    assert loose.value > 1.1 * sharp.value
    assert any("30 %" in one for one in loose.assumes)


def test_each_kick_duty_has_its_own(plan: Plan, kicked: Kicked) -> None:
    """The finding proper is that of the highest kick duty; the others follow in order, and stay apart."""
    high = [kicked(i, *row) for i, row in enumerate(STARTS)]
    low = [kicked(100 + i, 3.0 * pulse, started, kick=50.0) for i, (pulse, started) in enumerate(STARTS)]
    found = kicks(plan, [*low, *high])
    assert len(found) == KICK_DUTIES
    assert found[0].pulse == kicks(plan, high)[0].pulse
    assert found[0].pulse.value is not None
    assert found[1].pulse.value == pytest.approx(3.0 * found[0].pulse.value, rel=2e-3)
    assert "50 %" in found[1].pulse.method
    assert not found[2].pulse.found
    assert found[2].pulse.reason


def test_a_kick_duty_that_was_asked_for_keeps_its_place(plan: Plan, kicked: Kicked) -> None:
    """Where the highest kick duty gave nothing, the next one's pulse does not stand under its name."""
    asked = replace(plan, kick=KickPlan((100.0, 50.0), 1.0, 0.02, 2.0, 5.0, 5.0, 20))
    found = kicks(asked, [kicked(i, *row, kick=50.0) for i, row in enumerate(STARTS)])
    assert not found[0].pulse.found
    assert found[1].pulse.found


def test_only_one_run_duty(plan: Plan, kicked: Kicked) -> None:
    """Trials that ended at another run duty belong to another question: they are left out, and that is said."""
    made = [kicked(i, *row) for i, row in enumerate(STARTS)]
    found = kicks(plan, [*made, *(kicked(150 + i, 0.5, False, run=12.0) for i in range(5))])[0].pulse
    assert found.value == kicks(plan, made)[0].pulse.value
    assert "other_run_duty_left_out" in found.flags


def test_what_says_nothing(plan: Plan, kicked: Kicked) -> None:
    """None of the pulses started it: no upper bound. Undecided ones are left out, flagged. Nothing done: a reason."""
    failed = kicks(plan, [kicked(i, 0.1 * (i + 1), False) for i in range(5)])[0].pulse
    assert not failed.found
    assert "never_started" in failed.flags
    doubtful = replace(kicked(190, 0.2, True), verdict=Verdict.UNDECIDED)
    found = kicks(plan, [doubtful, *(kicked(i, *row) for i, row in enumerate(STARTS))])[0].pulse
    assert "undecided_left_out" in found.flags
    assert 190 not in found.holds
    for one in kicks(plan, []):
        assert one.pulse.reason
        assert one.charge.reason


def test_charge(plan: Plan, kicked: Kicked) -> None:
    """The charge is the mean current of the pulses near the bound times the bound; u is the scatter of that mean and
    the meter's accuracy in squares. Pulses that were not read say nothing; without any there is no charge."""
    made = [kicked(i, *row, amps=0.8 + 0.02 * (i % 2) if row[0] >= 0.2 else None) for i, row in enumerate(STARTS)]
    found = kicks(plan, made)[0]
    pulse = found.pulse.value
    assert pulse is not None
    read = [one for one in made if KICK_AMPS in one.means and pulse / 2.0 <= one.hold.lead[-1][1] <= 2.0 * pulse]
    amps = np.array([one.means[KICK_AMPS].value for one in read])
    u = math.hypot(0.01, float(np.std(amps, ddof=1)) / math.sqrt(len(amps)))
    assert len(amps) > 2
    assert found.charge.value == pytest.approx(float(amps.mean()) * pulse, rel=1e-9)
    assert found.charge.u == pytest.approx(u * pulse, rel=1e-9)
    assert not kicks(plan, [kicked(i, *row) for i, row in enumerate(STARTS)])[0].charge.found
