"""What to do next: pure decisions from the plan and what came of earlier holds. No clock, link, file or thread here."""

from sweeprig.schedule.history import History
from sweeprig.schedule.next_hold import next_hold
from sweeprig.schedule.preview import Preview, preview

__all__ = ["History", "Preview", "next_hold", "preview"]
