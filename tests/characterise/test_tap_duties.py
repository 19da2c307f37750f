"""Findings of a drive by taps: the duty measured at each, what the step between two does to u, broken wipers."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from sweeprig.characterise import characterise
from sweeprig.characterise.duties_found import STALL, threshold
from sweeprig.characterise.evidence import Chosen, duties
from sweeprig.characterise.findings import UsableRange, not_found
from sweeprig.characterise.usable import resolution
from sweeprig.holds import AtTap, Outcome, Purpose, Verdict
from sweeprig.laws import Trial
from sweeprig.plan import Plan, TapPlan
from sweeprig.taps import Seen, TapMap, tap_map
from tests.characterise.conftest import CONDITION
from tests.characterise.test_usable import branch

MakeOutcome = Callable[..., Outcome]
TAPS = TapPlan((2.0, 98.0), 255, (0.0, 100.0), 300.0, (255,), 5.0)
STEP = 96.0 / 255.0
ABOUT = {"job_hash": "x", "simulated": True, "motor": {}, "rig": {}, "software": {}}


@pytest.fixture
def by_taps(plan: Plan) -> Plan:
    return replace(plan, taps=TAPS, roles={**plan.roles, "duty": "scope.duty"}, duty_step_percent=(STEP,))


def at(outcome: Outcome, tap: int) -> Outcome:
    told = AtTap(outcome.hold.duty_percent, tap, 2.0 + STEP * tap, 0.2, 300.0, 3.0)
    return replace(outcome, hold=replace(outcome.hold, tap=tap, taps=(told,)))


def hold_at(
    make: MakeOutcome, number: int, tap: int, duty: float | None, verdict: Verdict = Verdict.TURNING
) -> Outcome:
    values = {} if duty is None else {"scope.duty": (duty, 0.03, "%")}
    return at(make(number, Purpose.STALL, 12.0, verdict, values=values), tap)


def test_holds_have_the_duty_of_their_tap(by_taps: Plan, outcome: MakeOutcome) -> None:
    """The median of what was read at the tap, for all its holds; a tap never read has what its neighbours let expect,
    and a flag. What was asked for plays no part."""
    holds = [hold_at(outcome, n, 25, duty) for n, duty in ((1, 11.50), (2, 11.52), (3, 11.9), (4, None))]
    holds += [hold_at(outcome, 5, 29, 13.02), hold_at(outcome, 6, 27, None)]
    known = duties(by_taps, CONDITION, holds)
    assert [known.of[n] for n in (1, 2, 3, 4)] == [11.52] * 4
    assert known.of[5] == 13.02
    assert known.of[6] == pytest.approx((11.64 + 13.02) / 2.0, abs=0.05)  # of the means on either side
    assert known.flags == ("duty_of_tap_not_measured",)
    assert (known.u, known.assumes) == (0.03, "duty of each tap as measured by scope.duty")
    assert duties(by_taps, CONDITION, holds[:3]).flags == ()


def trials() -> tuple[Trial, ...]:
    """Forty holds at four duties a tap apart: the lowest all stop, the highest all turn."""
    rows: list[Trial] = []
    for step, stops in enumerate((10, 6, 2, 0)):
        for i in range(10):
            failed = 0.01 if i < stops else None
            rows.append(Trial(len(rows), 11.5 + STEP * step, 0.5 if failed else 1.0, failed))
    return tuple(rows)


def a_map() -> TapMap:
    return tap_map(TAPS, {})


def test_the_step_is_in_u() -> None:
    """A duty found between two taps may lie half a step to either side: u² grows by step²/12 (JCGM 100:2008, 4.3.7,
    from memory), value and law's own part stay, and a drive that sets its duty freely has none of it."""
    bare, stepped = (threshold(STALL, Chosen(trials()), 0.05, known).finding(0.5) for known in (None, a_map()))
    assert bare.u is not None
    assert stepped.u is not None
    assert stepped.value == pytest.approx(bare.value, abs=0.01)
    assert math.sqrt(stepped.u**2 - bare.u**2) == pytest.approx(STEP / math.sqrt(12.0), rel=0.02)
    assert any("between taps" in text for text in stepped.assumes)
    assert not any("between taps" in text for text in bare.assumes)


def test_the_step_is_in_a_bound() -> None:
    """Where no trial failed the bound moves outwards by 1.645 times its u, the tap's part in it."""
    good = tuple(replace(trial, survived=1.0, failed=None) for trial in trials())
    bare, stepped = (threshold(STALL, Chosen(good), 0.05, known).bound(0.99, widen=True) for known in (None, a_map()))
    assert stepped - bare == pytest.approx(1.645 * (math.hypot(0.05, STEP / math.sqrt(12.0)) - 0.05), rel=1e-3)


def test_resolution_by_the_local_step() -> None:
    """The speed step is that of one tap where it is found, not the nominal one: of taps that lie 20 % further apart
    than the parts say it is 20 % more, and not much less well known."""
    wide = {tap: Seen(0.0, 1, 2.0 + 1.2 * STEP * tap, 0.03) for tap in (10, 60, 110, 160, 205)}
    found = branch()
    low, high = (replace(resolution(found, within(), 0.1), value=duty) for duty in (15.0, 80.0))
    range_ = replace(within(), low_duty_percent=low, high_duty_percent=high)
    nominal, local = resolution(found, range_, STEP), resolution(found, range_, STEP, tap_map(TAPS, wide))
    assert nominal.value is not None
    assert local.value == pytest.approx(1.2 * nominal.value, rel=0.02)
    assert local.value is not None
    assert (local.u or 0.0) < 0.1 * local.value


def within() -> UsableRange:
    return UsableRange(*[not_found("not asked for")] * 6)


def test_a_broken_wiper_is_doubted(by_taps: Plan, outcome: MakeOutcome) -> None:
    """A tap out of order is told with its evidence, the findings of its condition are flagged, and the hold counts at
    the duty that was measured; an orderly potentiometer gives no doubt."""
    holds = [hold_at(outcome, n, tap, 2.0 + STEP * tap) for n, tap in enumerate((24, 25, 26, 28, 29, 30), 1)]
    holds += [hold_at(outcome, 7, 27, 9.5, Verdict.STOPPED)]
    found = characterise(by_taps, holds, ABOUT)
    (doubt,) = found.suspicions
    assert doubt["what"].startswith("tap 27 of the digital potentiometer is out of order")
    assert "9.5 % at tap 27" in doubt["evidence"]
    assert "tap_map_not_monotone" in found.conditions[0].stall_duty_percent.flags
    assert duties(by_taps, CONDITION, holds).of[7] == 9.5
    orderly = characterise(by_taps, holds[:6], ABOUT)
    assert orderly.suspicions == ()
    assert "tap_map_not_monotone" not in orderly.conditions[0].stall_duty_percent.flags


def test_remarks_go_into_the_findings(by_taps: Plan) -> None:
    """What the plan remarks stands beside the findings, as it was said."""
    found = characterise(replace(by_taps, remarks=("PWM 333 Hz was asked for",)), [], ABOUT)
    assert found.advice == ({"note": "PWM 333 Hz was asked for"},)


def test_step_at_a_duty() -> None:
    """The step is that between the two taps about a duty, beyond the ends that of the last two."""
    known = replace(a_map(), duty=np.array([2.0, 3.0, 5.0, 9.0]))
    assert [known.step_at(duty) for duty in (0.0, 2.5, 3.0, 4.0, 8.0, 20.0)] == [1.0, 1.0, 1.0, 2.0, 4.0, 4.0]
    step, u = known.mean_step(2.0, 9.0)
    assert step == pytest.approx(7.0 / 3.0)
    assert u == pytest.approx(0.05 * math.sqrt(2.0 / 3.0) / 3.0)
