"""The simulated bench: a true motor, instruments that make errors, and a clock that jumps to the next event."""

from sweeprig.simbench.bench import Bench
from sweeprig.simbench.build import build

__all__ = ["Bench", "build"]
