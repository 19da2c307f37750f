"""Outcomes → findings. Pure: no link, clock, file or thread in here; the values are in `findings`."""

from sweeprig.characterise.assemble import characterise
from sweeprig.characterise.findings import (
    ConditionFindings,
    Finding,
    Findings,
    SpeedCurve,
    UsableRange,
    WorstCase,
)

__all__ = ["ConditionFindings", "Finding", "Findings", "SpeedCurve", "UsableRange", "WorstCase", "characterise"]
