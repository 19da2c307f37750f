"""The manual: Markdown texts that ship with the program, by topic. No other room's code is imported but errors."""

from __future__ import annotations

import difflib
import re
from importlib.resources import files

from sweeprig.errors import ConfigError

_ORDER = (
    "start", "words", "job-files", "search", "rig", "links", "safety", "findings", "report", "resume", "unattended",
    "bounds", "simbench", "exit-codes", "adapters", "dialects", "library", "testing",
)  # fmt: skip
ALSO = {"motor": "job-files", "sweep": "job-files", "instruments": "rig"}
"""Other names under which error texts send people to a topic."""
_CAUTIONS_HEAD = "## Cautions in short"


def topics() -> tuple[str, ...]:
    """All topics, in the order in which a newcomer reads them."""
    return _ORDER


def text(topic: str) -> str:
    """The Markdown of one topic, or of the one that answers for it (`ALSO`). ConfigError for an unknown one."""
    topic = ALSO.get(topic, topic)
    if topic not in _ORDER:
        near = difflib.get_close_matches(topic, _ORDER, n=1, cutoff=0.75)
        pages = pages_with(topic)
        if near:
            hint = f"Did you mean '{near[0]}'?"
        elif pages:
            hint = f"The word stands in: {', '.join(pages)}"
        else:
            hint = "Run 'sweeprig manual' for the list"
        raise ConfigError("no such topic in the manual", value=topic, allowed=", ".join(_ORDER), remedy=hint)
    return files(__name__).joinpath(f"{topic}.md").read_text(encoding="utf-8")


def pages_with(word: str) -> list[str]:
    """The topics in which a word stands, most often first; equal counts in the manual's order."""
    pattern = re.compile(rf"(?<!\w){re.escape(word)}(?!\w)", re.IGNORECASE)
    counts = {topic: len(pattern.findall(text(topic))) for topic in _ORDER}
    return sorted((topic for topic in _ORDER if counts[topic]), key=lambda topic: -counts[topic])


def heading(topic: str) -> str:
    """The first heading of a topic, for a list of topics."""
    return text(topic).split("\n", 1)[0].removeprefix("# ").strip()


def cautions() -> list[str]:
    """The short cautions that a real run prints and every report carries, from the topic `safety`."""
    part = text("safety").split(_CAUTIONS_HEAD, 1)[1].split("\n## ", 1)[0]
    items = part.split("\n* ")[1:]
    return [" ".join(item.split()) for item in items]
