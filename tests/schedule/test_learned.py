"""What an earlier run tells for the preview of the next."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

import pytest

from sweeprig.holds import Approach, Condition, EndsWhen, Hold, Outcome, Purpose, Status, Verdict
from sweeprig.laws import EXPONENTIAL, LOGISTIC
from sweeprig.schedule.learned import learned

WARM = Condition(1000.0, 12.0)


def findings(**values: tuple[float | None, float | None]) -> dict[str, Any]:
    names = ("stall_duty_percent", "sustain_99_duty_percent", "start_duty_percent", "start_99_duty_percent")
    found: dict[str, Any] = {name: {"value": None, "u": None} for name in names}
    found |= {name: {"value": value, "u": u} for name, (value, u) in values.items()}
    return {**asdict(WARM), **found}


def a_hold(purpose: Purpose, approach: Approach, lead: tuple[tuple[float, float], ...] = ()) -> Hold:
    return Hold(1, purpose, approach, WARM, 20.0, 2.0, 20.0, EndsWhen.TIME, ("speed",), "", lead)


def an_outcome(hold: Hold, verdict: Verdict, began: float, ended: float, exposed: float) -> Outcome:
    return Outcome(1, hold, 1, Status.DONE, verdict, began, ended, began, ended, exposed, (exposed, None))


def test_place_and_spread_come_from_half_and_tail() -> None:
    """A law that was read off at 50 and at 99 % gives back its place and its spread."""
    half, spread = 11.3, 0.42
    tail = half + EXPONENTIAL.offset(0.99) * spread
    start_tail = 17.0 + LOGISTIC.offset(0.99) * 0.7
    one = findings(
        stall_duty_percent=(half, 0.1), sustain_99_duty_percent=(tail, 0.3), start_duty_percent=(17.0, 0.2),
        start_99_duty_percent=(start_tail, 0.4),
    )  # fmt: skip
    expected = learned([one], [], "the run of Monday")[WARM]
    assert expected.stall_percent[0] == half
    assert expected.stall_spread_percent[0] == pytest.approx(spread)
    assert expected.start_percent[0] == 17.0
    assert expected.start_spread_percent[0] == pytest.approx(0.7)
    assert expected.source == "the run of Monday"


def test_a_bound_teaches_no_place() -> None:
    """A stall duty that is only a bound (u unknown) leaves the guess as it was."""
    one = findings(stall_duty_percent=(5.0, None), start_duty_percent=(17.0, 0.2))
    expected = learned([one], [], "x")[WARM]
    assert expected.stall_percent == type(expected)().stall_percent
    assert expected.start_percent[0] == 17.0


def test_times_come_from_the_holds() -> None:
    """Settling from curve holds that turned; coasting from what a start trial took besides rest and exposure."""
    curve = an_outcome(a_hold(Purpose.CURVE, Approach.FALLING), Verdict.TURNING, 0.0, 7.0, 6.5)
    start = an_outcome(
        a_hold(Purpose.START, Approach.FROM_REST, ((0.0, 5.0),)), Verdict.STARTED, 10.0, 10.0 + 5.0 + 4.25 + 3.0, 3.0
    )
    expected = learned([findings()], [curve, start], "x")[WARM]
    assert expected.settle_s[0] == 6.5
    assert expected.coast_s[0] == pytest.approx(4.25)


def test_nothing_found_nothing_learned() -> None:
    """A condition without findings and holds keeps what the motor file expects."""
    assert learned([findings()], [], "x") == {}
