"""A run opened for reading: what was asked, what was done, what was found, as frames, values and plots.

Works on a finished run, a running one and one that was killed; writes nothing. Frames and findings are made on first
use and kept; `reload` forgets them.
"""

from __future__ import annotations

import html
from collections import Counter
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

from sweeprig.errors import ConfigError, RunError, Where
from sweeprig.holds import Outcome, Status
from sweeprig.logbook import Intent, Reader, run_folder
from sweeprig.logbook.export import READING_COLUMNS, hold_columns, reading_lines
from sweeprig.logbook.findings_file import read_findings
from sweeprig.logbook.plausible import plausible
from sweeprig.plan import Plan

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

    from sweeprig.characterise import Findings
    from sweeprig.job import Job

_KEPT = ("job", "plan", "outcomes", "holds", "readings", "events", "instruments", "sessions", "findings", "unfinished")

_AT_REST = ("finished", "parked", "tripped")
"""States in which a session ends: no process is looked for."""


def open_run(path: Path | str) -> Run:
    """The run in the folder `path` (or of which `path` is a file). RunError where there is none."""
    return Run(path)


class Run:
    """One run, read-only. `path`: its folder; `contents`: the logbook's reader, for what has no frame."""

    def __init__(self, path: Path | str) -> None:
        self.path = run_folder.folder_of(path)
        self.contents = Reader(self.path / run_folder.LOGBOOK)

    def reload(self) -> None:
        """Forget what was read, so that the next look sees what a running run has written since."""
        for name in _KEPT:
            self.__dict__.pop(name, None)

    @cached_property
    def job(self) -> Job:
        """The frozen job. ConfigError where `job.toml` was damaged, RunError where it is gone."""
        from sweeprig import job

        file = self.path / run_folder.JOB
        if not file.is_file():
            remedy = "Copy the whole run folder; the logbook keeps the same text as `contents.head()['job_text']`"
            raise RunError("the run's job.toml is gone", where=Where(str(file)), remedy=remedy)
        return job.load(file)

    @cached_property
    def plan(self) -> Plan:
        from sweeprig import job

        return job.freeze(self.job)

    @cached_property
    def outcomes(self) -> list[Outcome]:
        """All outcomes in number order, whatever their status; only `done` is data. RunError for what no run writes."""
        return plausible(self.contents.outcomes(), Where(str(self.contents.path)))

    @cached_property
    def unfinished(self) -> list[Intent]:
        """Holds begun without an outcome: the one in hand of a running run, or what a kill left."""
        return self.contents.unfinished()

    @cached_property
    def holds(self) -> pd.DataFrame:
        """One row an outcome: setting, verdict, times, and each mean as `board.speed (rpm)` with `u of …`."""
        import pandas as pd

        return pd.DataFrame(hold_columns(self.outcomes))

    @cached_property
    def readings(self) -> pd.DataFrame:
        """One row a reading: `hold session at (s) channel unit value u flags raw`; NaN where there is no data."""
        import pandas as pd

        lines = list(reading_lines(self.contents.reading_rows()))
        columns = zip(*lines, strict=True) if lines else ((),) * len(READING_COLUMNS)
        frame = pd.DataFrame({name: list(column) for name, column in zip(READING_COLUMNS, columns, strict=True)})
        few = {"channel": "category", "unit": "category"}  # a few names, repeated some hundred thousand times
        return frame.astype({"value": "float64", "u": "float64", "at (s)": "float64"} | few)

    @cached_property
    def events(self) -> pd.DataFrame:
        """One row an event: `session kind at (s) at (UTC) data`."""
        import pandas as pd

        events = self.contents.events()
        return pd.DataFrame({
            "session": [event.session for event in events],
            "kind": [event.kind for event in events],
            "at (s)": [event.at for event in events],
            "at (UTC)": _times([event.utc for event in events]),
            "data": [dict(event.data) for event in events],
        })  # fmt: skip

    @cached_property
    def instruments(self) -> pd.DataFrame:
        """One row for each instrument of each session: `session name maker model serial firmware settings at (s)`."""
        import pandas as pd

        seen = self.contents.instruments()
        return pd.DataFrame({
            "session": [one.session for one in seen],
            "name": [one.name for one in seen],
            "maker": [one.identity.maker for one in seen],
            "model": [one.identity.model for one in seen],
            "serial": [one.identity.serial for one in seen],
            "firmware": [one.identity.firmware for one in seen],
            "settings": [dict(one.settings) for one in seen],
            "at (s)": [one.at for one in seen],
        })  # fmt: skip

    @cached_property
    def sessions(self) -> pd.DataFrame:
        """One row a start or resume: `number began (s) began (UTC) info`."""
        import pandas as pd

        sessions = self.contents.sessions()
        return pd.DataFrame({
            "number": [session.number for session in sessions],
            "began (s)": [session.began for session in sessions],
            "began (UTC)": _times([session.began_utc for session in sessions]),
            "info": [dict(session.info) for session in sessions],
        })  # fmt: skip

    @property
    def simulated(self) -> bool:
        """Whether any instrument of any session was a simulated one."""
        return any(seen.identity.simulated for seen in self.contents.instruments())

    @property
    def about(self) -> dict[str, object]:
        """What findings say about where they come from: job_hash, simulated, motor, rig, software."""
        head = self.contents.head()
        return {
            "job_hash": head.get("job_hash", ""),
            "simulated": self.simulated,
            "motor": self.job.motor.name,
            "rig": self.job.rig.name,
            "software": head.get("software", ""),
        }

    def status(self) -> dict[str, object]:
        """Where the run stands, as plain values: state, whether a process works on it, sessions, run clock (s),
        outcomes by status, hold in hand, last outcome. A hold in hand was begun and has no outcome: of a running run,
        or of a killed one."""
        states = [event for event in self.contents.events() if event.kind == "state"]
        last = self.outcomes[-1] if self.outcomes else None
        in_hand = self.unfinished[0].hold if self.unfinished else None
        times = self.contents.last_times()
        state = _visible(str(states[-1].data.get("state", "unknown"))) if states else "not begun"
        working = state not in _AT_REST and run_folder.FolderLock(self.path, "logbook").held()
        if not working and last is not None and last.status is Status.TRIPPED and self.unfinished == []:
            state = "tripped"  # also where the process died before it had said so
        return {
            "run": str(self.path),
            "motor": self.job.motor.name,
            "rig": self.job.rig.name,
            "simulated": self.simulated,
            "state": state,
            "working": working,
            "sessions": len(self.contents.sessions()),
            "run_clock_s": (times[0] - self.contents.sessions()[0].began) if times else 0.0,
            "outcomes": dict(Counter(str(outcome.status) for outcome in self.outcomes)),
            "in_hand": None if in_hand is None else {"number": in_hand.number, "why": _visible(in_hand.why)},
            "last": None if last is None else {
                "number": last.number, "purpose": str(last.hold.purpose), "status": str(last.status),
                "verdict": str(last.verdict), "reason": _visible(last.reason),
            },
        }  # fmt: skip

    @cached_property
    def findings(self) -> Findings:
        """From `findings.json` where the run has one, else worked out from the outcomes there are now."""
        from sweeprig.characterise import Findings, characterise

        file = self.path / run_folder.FINDINGS
        try:
            return Findings.from_json(read_findings(file))
        except FileNotFoundError:
            return characterise(self.plan, self.outcomes, self.about)
        except (ValueError, KeyError, TypeError, AttributeError, ConfigError) as error:
            remedy = "Delete it: it is worked out again from the logbook"
            raise RunError(
                "the findings of the run cannot be read", value=str(error), where=Where(str(file)), remedy=remedy
            ) from error

    def plot_speed(self, ax: Axes | None = None) -> Axes:
        """Speed against duty, both branches."""
        from sweeprig.report import figures

        return figures.speed_curve(self, ax)

    def plot_thresholds(self, ax: Axes | None = None) -> Axes:
        """Stall and start duty with their intervals against PWM frequency."""
        from sweeprig.report import figures

        return figures.thresholds(self, ax)

    def plot_voltages(self, ax: Axes | None = None) -> Axes:
        """Mean motor voltage against duty."""
        from sweeprig.report import figures

        return figures.voltages(self, ax)

    def plot_timeline(self, ax: Axes | None = None) -> Axes:
        """Purpose and verdict of every hold against time."""
        from sweeprig.report import figures

        return figures.timeline(self, ax)

    def __repr__(self) -> str:
        return f"<Run {self.path.name}: {self._summary()}>"

    def _repr_html_(self) -> str:
        """A short table for notebooks: how many holds of each purpose, and how they ended."""
        counts = Counter((outcome.hold.purpose.value, outcome.status.value) for outcome in self.outcomes)
        rows = "".join(
            f"<tr><td>{html.escape(purpose)}</td><td>{html.escape(status)}</td><td>{count}</td></tr>"
            for (purpose, status), count in counts.items()
        )
        caption = html.escape(f"{'SIMULATED ' if self.simulated else ''}{self.path.name}: {self._summary()}")
        head = "<tr><th>purpose</th><th>status</th><th>holds</th></tr>"
        return f"<table><caption>{caption}</caption>{head}{rows}</table>"

    def _summary(self) -> str:
        open_holds = len(self.unfinished)
        text = f"{len(self.outcomes)} holds in {len(self.contents.sessions())} sessions"
        return f"{text}, {open_holds} without an outcome" if open_holds else text


def _times(seconds: list[float]) -> pd.DatetimeIndex:
    """UTC seconds as times; NaT for one beyond the calendar."""
    import pandas as pd

    return pd.to_datetime(seconds, unit="s", utc=True, errors="coerce")


def _visible(text: str) -> str:
    """`text` for a terminal: what would move its cursor or set its title is shown as a mark, and does nothing."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in text)
