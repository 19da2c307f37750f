"""Every line, mark and colour of the figures, in one place. Nothing is drawn here.

Kinds differ by line and mark first and by hue last, so that a grey print and colour-blind eyes lose nothing. The two
hues are blue and vermilion of the eight that Okabe and Ito chose for all colour visions (Color Universal Design,
2008; values from memory); blue is the darker one in grey. Ink, grey and pale are our own choice.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

INK = "#1b1b1b"
GREY = "#5f5f5f"
RULE = "#b9b7b0"
PALE = "#ecebe6"
PALER = "#f6f5f2"
PAPER = "#ffffff"
BLUE = "#0072B2"
VERMILION = "#D55E00"


@dataclass(frozen=True, slots=True)
class Mark:
    """How one kind is drawn; `filled` False leaves the mark open."""

    label: str
    marker: str
    line: str = ""
    colour: str = INK
    filled: bool = True

    def style(self, size: float = 5.0) -> dict[str, Any]:
        """Keyword arguments for a matplotlib line with these marks."""
        return {
            "marker": self.marker, "linestyle": self.line or "none", "color": self.colour, "markersize": size,
            "markerfacecolor": self.colour if self.filled else PAPER, "markeredgecolor": self.colour,
            "markeredgewidth": 1.0, "linewidth": 1.2,
        }  # fmt: skip


BRANCHES = {
    "falling": Mark("falling duty", "o", "-", BLUE),
    "rising": Mark("rising duty", "^", "--", INK, filled=False),
}
THRESHOLDS = {
    "stall_duty_percent": Mark("stall duty (50 %)", "o", "-", BLUE),
    "sustain_99_duty_percent": Mark("sustaining duty (99 %)", "v", "-.", BLUE, filled=False),
    "start_duty_percent": Mark("start duty (50 %)", "s", "--", INK),
    "start_99_duty_percent": Mark("start duty (99 %)", "D", ":", INK, filled=False),
}
CONDITIONS = (
    Mark("", "o", "-", BLUE), Mark("", "s", "--", INK, filled=False), Mark("", "^", "-.", GREY),
    Mark("", "D", ":", BLUE, filled=False), Mark("", "v", "-", INK), Mark("", "P", "--", GREY, filled=False),
)  # fmt: skip
VERDICTS = {
    "turning": Mark("turning", "o", colour=BLUE),
    "stopped": Mark("stopped", "o", colour=INK, filled=False),
    "started": Mark("started", "^", colour=BLUE),
    "did_not_start": Mark("did not start", "v", colour=INK, filled=False),
    "stepping": Mark("stepping", "s", colour=INK, filled=False),
    "undecided": Mark("undecided", "|", colour=GREY),
}
NOT_DATA = {
    "discarded": Mark("discarded", "x", colour=VERMILION),
    "abandoned": Mark("abandoned", "+", colour=VERMILION),
    "tripped": Mark("tripped", "X", colour=VERMILION),
}
STALL = Mark("stall", "*", "", INK)
REFERENCE = Mark("", "", (":"), GREY)


def of_condition(index: int) -> Mark:
    """The mark of the index-th condition; they repeat after six, and the legend names them."""
    return CONDITIONS[index % len(CONDITIONS)]


def literal(text: str) -> str:
    """`text` for a figure, so that a dollar sign in a name is a dollar sign and no formula."""
    return "".join(c for c in text if c.isprintable()).replace("$", r"\$")
