"""A matplotlib figure as an SVG element for an HTML page: no prologue, no metadata, no address in it."""

from __future__ import annotations

import io
import re
import warnings

import matplotlib as mpl
from markupsafe import Markup, escape
from matplotlib.figure import Figure

_CUT = (
    re.compile(r"^.*?(?=<svg\b)", re.S),
    re.compile(r"<!--.*?-->", re.S),
    re.compile(r"<metadata>.*?</metadata>", re.S),
)
_NAMESPACES = re.compile(r'\s+xmlns(?::\w+)?="[^"]*"')


def inline_svg(figure: Figure, name: str, description: str) -> Markup:
    """The figure as one `<svg>` element, letters drawn as shapes, so that it looks the same everywhere.

    name         keeps the ids of several figures on one page apart
    description  read out in place of the picture; escaped here
    """
    written = io.BytesIO()
    with mpl.rc_context({"svg.hashsalt": name, "svg.fonttype": "path"}), warnings.catch_warnings():
        # a letter that the figure's font lacks is drawn as a box; no reason to fail the report
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")
        figure.savefig(written, format="svg", metadata={"Date": None, "Creator": None})
    text = written.getvalue().decode()
    for pattern in _CUT:
        text = pattern.sub("", text)
    head, rest = text.split(">", 1)
    head = f'{_NAMESPACES.sub("", head)} role="img" aria-label="{escape(description)}"'
    return Markup(f"{head}>{rest}")
