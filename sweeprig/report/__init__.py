"""The report of a run: figures, tables and one self-contained page. Loaded on first use; figures need matplotlib.

`render(run)` gives the page as text, `write(run, path)` puts it in a file; `tables` serves the terminal without either.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

__all__ = ["render", "write"]


def render(run: Any) -> str:
    """The whole report as HTML text. See `report.page.render`."""
    from sweeprig.report import page

    return page.render(run)


def write(run: Any, path: Path | str) -> Path:
    """Write the report to `path`, whole or not at all; returns the path. See `report.page.write`."""
    from sweeprig.report import page

    return page.write(run, path)
