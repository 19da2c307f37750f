"""One suite of named checks for every adapter, ours and third-party: does it keep the contract in `roles`?

It runs on a scripted instrument, on a simulated one or on a real link. What a link must do is not checked here.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

from sweeprig.conformance.bed import Bed, Exchange, Failed, NotApplicable, over_link, perform
from sweeprig.conformance.scripted import Scripted
from sweeprig.conformance.suite import SUITE
from sweeprig.roles import Adapter, DriveSetting, SupplySetting, Window

__all__ = ["Check", "Exchange", "Scripted", "checks", "over_link", "perform"]


class Check(NamedTuple):
    """`evidence`: what was seen; for a check that does not apply, why."""

    name: str
    passed: bool
    evidence: str


def checks(
    adapter: Callable[[], Adapter],
    exchange: Callable[[], Exchange],
    settings: tuple[DriveSetting, DriveSetting] | tuple[SupplySetting, SupplySetting] | None = None,
    window: Window | None = None,
) -> list[Check]:
    """Run every check; none stops the others, none raises.

    adapter   makes a new adapter
    exchange  makes the exchange with its instrument: a fresh scripted one each time, or the same link each time
              (`over_link`), whose instrument then keeps its settings from one check to the next
    settings  two that differ in every part and that the instrument can honour; an actuator without them fails
    """
    bed = Bed(adapter, exchange, settings, window or Window(0.5))
    return [_run(name.replace("_", " "), check, bed) for name, check in SUITE.items()]


def _run(name: str, check: Callable[[Bed], str], bed: Bed) -> Check:
    try:
        return Check(name, True, check(bed))
    except NotApplicable as reason:
        return Check(name, True, f"does not apply: {reason}")
    except Failed as fault:
        return Check(name, False, str(fault))
    except Exception as fault:  # noqa: BLE001 - a stranger's adapter may raise anything; that is the finding
        return Check(name, False, f"{type(fault).__name__}: {fault}")
