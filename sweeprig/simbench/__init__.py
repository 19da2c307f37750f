"""The simulated bench: a true motor, instruments that make errors, and a clock that jumps to the next event."""

from sweeprig.simbench.bench import Bench, build

__all__ = ["Bench", "build"]
