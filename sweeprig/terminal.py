"""What the terminal shows: progress while a run lasts, tables afterwards. Used by `cli` only; in the terminal
with rich, without one as plain lines."""

from __future__ import annotations

import math
import shutil
import sys
from collections.abc import Mapping, Sequence
from contextlib import suppress
from typing import Any

from sweeprig.conduct.states import Event

WIDTH_ELSEWHERE = 120
"""Columns of a table that goes to a file or a pipe."""
WIDEST_PAGE = 100
"""Longer lines of running text are hard to read."""
GAP = 3
"""Columns that a table spends between two of its own."""
MOST_NAMED = 3
"""A remark on more findings than this says how many; the report names each."""

AT_REST = ("finished", "parked", "tripped")
"""States in which a session ends, drive off and shown to be off."""

SIMULATED = "SIMULATED: no real motor was moved; these numbers describe an invented one."


def show_time(seconds: float) -> str:
    """'2 h 05 min', '3 min 20 s', '12 s'."""
    seconds = round(seconds)
    if seconds >= 3600:
        return f"{seconds // 3600} h {seconds % 3600 // 60:02d} min"
    if seconds >= 60:
        return f"{seconds // 60} min {seconds % 60:02d} s"
    return f"{seconds} s"


class Lines:
    """Plain lines: one a hold; for logs, pipes and slow remote shells."""

    def __init__(self, expected_s: float, most_s: float | None = None) -> None:
        self.expected_s, self.most_s = expected_s, most_s
        self.began: float | None = None
        self.holds = 0

    def __enter__(self) -> Lines:
        return self

    def __exit__(self, *_: object) -> None:
        return None

    def say(self, text: str) -> None:
        with suppress(OSError):  # the terminal or the pipe has gone: nobody reads, and that is no reason to end a run
            print(text, file=sys.stderr, flush=True)

    def left(self, at: float) -> str:
        spent = at - (self.began if self.began is not None else at)
        left = self.expected_s - spent
        if left > 0:
            return f"about {show_time(left)} left"
        if self.most_s is None or self.most_s <= spent:
            return "longer than predicted"
        return f"longer than predicted; {show_time(self.most_s - spent)} to the deadline"

    def __call__(self, event: Event) -> None:
        if event.kind == "session" and self.began is None:
            self.began = event.at
        text = self.sentence(event)
        if text is not None:
            self.say(text)

    def sentence(self, event: Event) -> str | None:
        """One sentence for an event that a person wants to read; None for the others."""
        data = event.data
        if event.kind == "session":
            simulated = f"  {SIMULATED}" if data["simulated"] else ""
            return f"session {data['session']}{simulated}"
        if event.kind == "hold_began":
            self.holds += 1
            return f"hold {data['number']}: {data['why']} ({self.left(event.at)})"
        if event.kind == "hold_ended" and data["status"] != "done":
            return f"  hold {data['number']} {data['status']}: {data['reason']}"
        if event.kind == "trip":
            return f"TRIPPED: {data['evidence']}. The drive was switched off."
        if event.kind == "state" and data["state"] in ("parked", "waiting for a person"):
            wait_s = data.get("next_try_s")
            again = f"; tried again in {show_time(wait_s)}" if isinstance(wait_s, float) else ""
            return f"{str(data['state']).upper()}: {data.get('reason', '')}{again}"
        if event.kind == "off" and data.get("proved"):
            return "drive and supply off, and shown to be off"
        if event.kind == "link":
            return f"  {data['instrument']}: {data['what']}" if data["instrument"] else f"  {data['what']}"
        if event.kind == "notice":
            return f"  {data['text']}"
        if event.kind == "finished":
            return f"finished: {data['reason']}"
        return None


class Screen(Lines):
    """In a terminal: the same sentences in one status line that changes in place; what matters stays above it."""

    KEEP = ("session", "state", "trip", "link", "notice", "finished", "off")

    def __enter__(self) -> Screen:
        from rich.console import Console

        self.console = Console(stderr=True)
        self.status = self.console.status("opening the rig", spinner="line")
        self.status.start()
        return self

    def __exit__(self, *_: object) -> None:
        with suppress(OSError):
            self.status.stop()

    def say(self, text: str) -> None:
        with suppress(OSError):
            self.console.print(text, markup=False, highlight=False)

    def __call__(self, event: Event) -> None:
        from rich.markup import escape

        if event.kind == "session" and self.began is None:
            self.began = event.at
        text = self.sentence(event)
        if text is None:
            return
        if event.kind in self.KEEP or text.startswith("  hold"):
            self.say(text)
        else:
            self.status.update(escape(text))


def progress(expected_s: float, plain: bool, most_s: float | None = None) -> Lines:
    """A screen where standard error is a terminal, lines elsewhere or when asked. expected_s: predicted from now on;
    most_s: until the deadline."""
    return (Lines if plain or not sys.stderr.isatty() else Screen)(expected_s, most_s)


def width_of_output() -> int:
    """Columns of the terminal that standard output is; `WIDTH_ELSEWHERE` where it is none."""
    return shutil.get_terminal_size((WIDTH_ELSEWHERE, 24)).columns if sys.stdout.isatty() else WIDTH_ELSEWHERE


def table(columns: Sequence[str], rows: Sequence[Sequence[str]], width: int) -> str:
    """A table as text, in as many blocks one under the other as `width` asks for; the first column heads each.

    Nothing is folded where a block of one column fits.
    """
    from rich.markup import escape

    cells = [[escape(cell) for cell in line] for line in (columns, *rows)]
    widths = [max(len(part) for line in (columns, *rows) for part in line[index].split("\n")) for index in
              range(len(columns))]  # fmt: skip
    blocks = _blocks(widths, width)
    return "\n\n".join(_block([[line[index] for index in (0, *block)] for line in cells], width) for block in blocks)


def _blocks(widths: Sequence[int], width: int) -> list[list[int]]:
    """Which columns stand side by side: the fewest blocks, as even as they come."""
    others = list(range(1, len(widths)))
    for each in range(len(others), 1, -1):
        even = math.ceil(len(others) / math.ceil(len(others) / each))
        blocks = [others[first : first + even] for first in range(0, len(others), even)]
        if all(widths[0] + sum(widths[index] + GAP for index in block) <= width for block in blocks):
            return blocks
    return [[index] for index in others]


def _block(cells: Sequence[Sequence[str]], width: int) -> str:
    """Rows of cells, the first row the head, with a line under it; no blanks at the ends of lines."""
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table

    grid = Table(box=SIMPLE_HEAD, pad_edge=False)
    for index, column in enumerate(cells[0]):
        grid.add_column(column, justify="left" if index == 0 else "right", overflow="fold")
    for row in cells[1:]:
        grid.add_row(*row)
    console = Console(width=width, highlight=False, color_system=None)
    with console.capture() as captured:
        console.print(grid)
    return "\n".join(line.rstrip() for line in captured.get().splitlines() if line.strip())


def page_text(markdown: str) -> str:
    """A page of the manual: laid out for the terminal that standard output is, else as it was written."""
    if not sys.stdout.isatty():
        return markdown
    from rich.console import Console
    from rich.markdown import Markdown

    console = Console(width=min(width_of_output(), WIDEST_PAGE))
    with console.capture() as captured:
        console.print(Markdown(markdown, code_theme="bw"))
    return captured.get()


def preview_text(night: Any, title: str, sums: Mapping[str, float], alone: Sequence[Any]) -> str:
    """The night ahead in words: holds and time, what can and cannot be found, safety sums, persons, guesses.

    `alone`: the points of `conduct.unattended`, each shown with yes or no."""
    from sweeprig.report.catalogue import meaning

    lines = [title, ""]
    total = sum(night.holds.values())
    kinds = ", ".join(f"{count} {purpose.replace('_', ' ')}" for purpose, count in night.holds.items())
    low, high = (show_time(3600.0 * hours) for hours in (night.hours.low, night.hours.high))
    lines.append(f"{total} holds ({kinds});")
    lines.append(f"about {show_time(night.seconds)} on the bench, between {low} and {high} in nine nights of ten.")
    if night.answered_s is None:
        lines.append("Not every condition has an answer at the end of every such night.")
    elif night.answered_s < 0.95 * night.seconds:
        lines.append(f"Every condition has an answer after {show_time(night.answered_s)} at the latest.")
    lines.append(f"The night then ends because {night.ends}.")
    if night.rest_s:
        lines.append(f"{show_time(night.rest_s)} of it are rests: the winding must cool before it may lock again.")
    lines += ["", "With this rig you will get:"] + [f"  {line}" for line in night.can]
    if night.standard_errors:
        lines += ["", "How sure it will be (standard errors at the worst condition; in nine nights of ten between):"]
        lines += [
            f"  {meaning(name).name}: {band.median:.2f} % ({band.low:.2f} to {band.high:.2f} %)"
            for name, band in night.standard_errors.items()
        ]
    if night.cannot:
        lines += ["", "You will not get:"] + [f"  {line}" for line in night.cannot]
    if night.remarks:
        lines += ["", "Otherwise than asked for, or to be known with the results:"]
        lines += [f"  {line}" for line in night.remarks]
    if night.persons:
        lines += ["", "A person is needed for:"] + [f"  {line}" for line in night.persons]
    lines += ["", "If the rotor locks while nobody looks, the drive goes off after at most:"]
    lines += [f"  {name}: {show_time(value) if value >= 60 else f'{value:.1f} s'}" for name, value in sums.items()]
    lines += ["", "Left alone, this rig:"] + [f"  {'yes' if point.met else 'NO '}  {point.words}" for point in alone]
    if refused := [point.why for point in alone if not point.met]:
        lines += ["", "Refused unattended, until this is mended:"] + [f"  {line}" for line in refused]
    lines += ["", "The prediction guesses:"] + [f"  {line}" for line in night.guesses]
    return "\n".join(lines)


def findings_text(findings: Mapping[str, Any], width: int = WIDTH_ELSEWHERE) -> str:
    """The answer: a line a finding, a column a condition; then what was flagged, each remark once."""
    from sweeprig.report import tables

    conditions = findings["conditions"]
    if not conditions:
        return "Nothing was found yet: no condition has a finished hold."
    fields = tables.telling_fields(conditions)
    by_condition = [tables.rows(condition) for condition in conditions]
    names = list(dict.fromkeys(row.finding for rows in by_condition for row in rows if row.found))
    body = []
    for name in names:
        cells = {index: row for index, rows in enumerate(by_condition) for row in rows if row.finding == name}
        some = next(iter(cells.values()))
        body.append([_titled(some.name, some.unit), *(_cell(cells.get(index)) for index in range(len(conditions)))])
    labels = [tables.condition_label(condition, fields) for condition in conditions]
    lines = [f"{findings['motor']} on {findings['rig']}", *([SIMULATED] if findings["simulated"] else [])]
    lines += ["", table(["95 % intervals", *labels], body, width)]
    return "\n".join([*lines, *_verdicts(findings), *_remarks(by_condition, labels)])


def _titled(name: str, unit: str) -> str:
    """'Stall duty (%)'; the name alone where there is no unit."""
    return name if unit in ("", "1") else f"{name} ({unit})"


def _cell(row: Any) -> str:
    if row is None or not row.found:
        return "not found"
    if row.interval in ("–", "") or row.interval.startswith("one-sided"):
        return str(row.value)
    return f"{row.value}\n({row.interval})" if "±" not in row.value else str(row.value)


def _verdicts(findings: Mapping[str, Any]) -> list[str]:
    """Each limit with its verdict first, as a word."""
    from sweeprig.report.catalogue import meaning
    from sweeprig.report.context import limit_text
    from sweeprig.report.tables import condition_label, telling_fields

    fields = telling_fields(findings["conditions"])
    lines = []
    for row in findings["limits"]:
        about, where = meaning(row["finding"]), condition_label(row["condition"], fields)
        verdict, limit = row["verdict"].replace("_", " "), limit_text(row["limit"], about.unit)
        lines.append(f"  {verdict}: {about.name}, {limit} ({where}); {row['rule']}")
    return ["", "Against the limits", *lines] if lines else []


def _remarks(by_condition: Sequence[Sequence[Any]], labels: Sequence[str]) -> list[str]:
    """Each remark once, with the findings and conditions it belongs to."""
    where: dict[str, dict[str, list[str]]] = {}
    for rows, label in zip(by_condition, labels, strict=True):
        for row in rows:
            for remark in row.remarks if row.found else ():
                where.setdefault(remark, {}).setdefault(row.name, []).append(label)
    if not where:
        return []
    lines = ["", "Remarks"]
    for remark, found in where.items():
        if len(found) > MOST_NAMED:
            at = list(dict.fromkeys(label for labels_of_one in found.values() for label in labels_of_one))
            lines.append(f"  {remark}: {len(found)} findings{_where(at, labels)}")
        else:
            lines.append(f"  {remark}: " + "; ".join(f"{name}{_where(at, labels)}" for name, at in found.items()))
    return lines


def _where(at: Sequence[str], labels: Sequence[str]) -> str:
    """The conditions in brackets; nothing where it is all of them."""
    return "" if len(at) == len(labels) else f" ({', '.join(at)})"


def status_text(value: Mapping[str, Any]) -> str:
    """A run's status as a few sentences."""
    counts = ", ".join(f"{count} {status}" for status, count in value["outcomes"].items()) or "none yet"
    sessions = "1 session" if value["sessions"] == 1 else f"{value['sessions']} sessions"
    broken_off = not value["working"] and value["state"] not in (*AT_REST, "not begun")
    state = f"broken off while {value['state']}" if broken_off else value["state"]
    lines = [
        f"{value['motor']} on {value['rig']}: {state}" + ("  (SIMULATED)" if value["simulated"] else ""),
        f"{sessions}, {show_time(value['run_clock_s'])} on the run clock; holds: {counts}",
    ]
    if value["in_hand"] is not None:
        how = "is in hand" if value["working"] else "was begun and has no outcome"
        lines.append(f"hold {value['in_hand']['number']} {how}: {value['in_hand']['why']}")
    if value["last"] is not None:
        last = value["last"]
        ended = last["reason"] or last["verdict"].replace("_", " ")
        lines.append(f"last hold: {last['number']}, {last['purpose'].replace('_', ' ')}; {last['status']}: {ended}")
    if value["state"] != "finished" and not value["working"]:
        if broken_off:
            lines.append("Its process ended without proving off; `sweeprig off RIG` does that, and so does going on.")
        before = "Find the cause of the trip, then go on" if value["state"] == "tripped" else "Go on"
        lines.append(f"No process works on it. {before} with: sweeprig resume {value['run']}")
    return "\n".join(lines)


def truth_text(value: Mapping[str, Any], width: int = WIDTH_ELSEWHERE) -> str:
    """The simulated motor's parameters and true findings as two tables."""
    from sweeprig.report.catalogue import meaning
    from sweeprig.report.tables import condition_label, telling_fields

    conditions = value["conditions"]
    parameters = [
        [_parameter(name), f"{x:g}" if isinstance(x, float) else str(x)] for name, x in value["motor"].items()
    ]
    labels = [condition_label(condition, telling_fields(conditions)) for condition in conditions]
    if len(set(labels)) < len(labels):
        labels = [condition["label"] for condition in conditions]
    rows = []
    for name in dict.fromkeys(name for condition in conditions for name in condition["findings"]):
        about = meaning(name)
        cells = (_true(condition["findings"].get(name)) for condition in conditions)
        rows.append([_titled(about.name, about.unit), *cells])
    heading = f"What is true of the simulated motor, by {value['trials']} trials a threshold; ± is this counting's 2 u"
    return "\n\n".join(
        (SIMULATED, table(["Parameters", "value"], parameters, width), heading, table(["True", *labels], rows, width))
    )


_PARAMETER_UNITS = {
    "k_per_w": "K/W", "kg_m2": "kg m²", "nm_per_a": "N m/A", "nm_s2": "N m s²", "nm_s": "N m s", "nm": "N m",
    "ohm": "ohm", "henry": "H", "farad": "F", "percent": "%", "rad": "rad", "amps": "A", "volts": "V", "rpm": "rpm",
    "rpm_per_s": "rpm/s", "percent_per_hour": "%/h", "per_hour": "1/h", "s": "s",
}  # fmt: skip


def _parameter(name: str) -> str:
    """'inertia_kg_m2' → 'inertia (kg m²)'."""
    ends = [end for end in _PARAMETER_UNITS if name.endswith(f"_{end}")]
    if not ends:
        return name.replace("_", " ")
    end = max(ends, key=len)
    return _titled(name.removesuffix(f"_{end}").replace("_", " "), _PARAMETER_UNITS[end])


def _true(cell: Mapping[str, Any] | None) -> str:
    if cell is None or cell.get("value") is None:
        return "none"
    from sweeprig.report.numbers import value_and_u

    u = cell.get("u") or 0.0
    return value_and_u(cell["value"], 2.0 * u) if u else f"{cell['value']:.4g}"
