"""sweeprig: what a small PWM-driven motor can do, found overnight and with uncertainties.

The public names; each is loaded when it is first used, so that `import sweeprig` stays quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from sweeprig.characterise import Finding, Findings, characterise
    from sweeprig.conduct.states import Event, Orders
    from sweeprig.errors import ConfigError, LinkError, RigError, SweeprigError
    from sweeprig.holds import Condition, Hold, Outcome
    from sweeprig.job import Job, load
    from sweeprig.launch import Launched, resume, start
    from sweeprig.opened import Run, open_run
    from sweeprig.plan import Plan
    from sweeprig.quantities import Reading
    from sweeprig.schedule import next_hold, preview

_HOME = {
    "Condition": "holds",
    "ConfigError": "errors",
    "Event": "conduct.states",
    "Finding": "characterise",
    "Findings": "characterise",
    "Hold": "holds",
    "Job": "job",
    "Launched": "launch",
    "LinkError": "errors",
    "Orders": "conduct.states",
    "Outcome": "holds",
    "Plan": "plan",
    "Reading": "quantities",
    "RigError": "errors",
    "Run": "opened",
    "SweeprigError": "errors",
    "characterise": "characterise",
    "load": "job",
    "next_hold": "schedule",
    "open_run": "opened",
    "preview": "schedule",
    "resume": "launch",
    "start": "launch",
}

__all__ = [
    "Condition", "ConfigError", "Event", "Finding", "Findings", "Hold", "Job", "Launched", "LinkError", "Orders",
    "Outcome", "Plan", "Reading", "RigError", "Run", "SweeprigError", "characterise", "load", "next_hold", "open_run",
    "preview", "resume", "start",
]  # fmt: skip


def __getattr__(name: str) -> object:
    if name not in _HOME:
        raise AttributeError(f"module 'sweeprig' has no attribute {name!r}")
    return getattr(import_module(f"sweeprig.{_HOME[name]}"), name)


def __dir__() -> list[str]:
    return sorted(__all__)
