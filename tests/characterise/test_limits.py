"""Verdicts against limits: guarded on both sides, honest about what is not decided."""

from __future__ import annotations

import pytest

from sweeprig.characterise import Finding
from sweeprig.characterise.findings import not_found
from sweeprig.characterise.limits import judge

TEN = Finding(10.0, 0.5, 9.0, 11.0, coverage_probability=0.95, coverage_factor=2.0, holds=tuple(range(24)))


@pytest.mark.parametrize(
    ("at_most", "verdict"),
    [(10.0 + 0.8226, "pass"), (10.0 + 0.8224, "not_decided"), (10.0, "not_decided"), (10.0 - 0.8224, "not_decided"),
     (10.0 - 0.8226, "fail")],
)  # fmt: skip
def test_one_limit_is_guarded_by_1_645_u(at_most: float, verdict: str) -> None:
    """u = 0.5: the guard is 0.8225 on either side of a single limit (definition; normal quantile of 0.95)."""
    assert judge(TEN, None, at_most).verdict == verdict
    assert judge(Finding(-10.0, 0.5, -11.0, -9.0, holds=(1,)), -at_most, None).verdict == verdict


@pytest.mark.parametrize(
    ("low", "high", "verdict"),
    [(8.99, 11.01, "pass"), (9.01, 20.0, "not_decided"), (0.0, 10.99, "not_decided"), (11.01, 20.0, "fail")],
)
def test_two_limits_are_guarded_by_expanded_uncertainty(low: float, high: float, verdict: str) -> None:
    """k = 2, u = 0.5: the guard is U = 1 inside and outside a pair of limits."""
    assert judge(TEN, low, high).verdict == verdict


@pytest.mark.parametrize(
    ("at_least", "at_most", "verdict"),
    [(None, 12.0, "pass"), (None, 9.0, "not_decided"), (11.0, None, "fail"), (9.0, None, "not_decided"),
     (9.0, 12.0, "not_decided")],
)  # fmt: skip
def test_an_upper_bound_decides_only_its_side(at_least: float | None, at_most: float | None, verdict: str) -> None:
    """From "at most 10" follows that a limit of 12 is kept and that 11 is not reached; nothing else."""
    bound = Finding(10.0, bound="upper", coverage_probability=0.95, high=10.0, holds=(1, 2))
    assert judge(bound, at_least, at_most).verdict == verdict


def test_not_decided_says_how_many_more_holds() -> None:
    """24 holds with a guard of twice the distance: four times as many are needed, 72 more (u falls with the root)."""
    judged = judge(Finding(10.0, 1.0, 8.0, 12.0, holds=tuple(range(24))), None, 10.0 + 1.645 / 2)
    assert judged.verdict == "not_decided"
    assert "about 72 more holds" in judged.rule


def test_a_missing_finding_is_not_decided_with_its_reason() -> None:
    """What could not be found decides nothing, and the rule says why."""
    judged = judge(not_found("no start trials"), None, 5.0)
    assert judged.verdict == "not_decided"
    assert "no start trials" in judged.rule
