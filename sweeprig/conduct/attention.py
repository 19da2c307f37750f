"""What others learn of a run while nobody looks: the file `last-seen`, and notices to people.

A listener between the run and whoever shows it. Nothing here can end a run, delay it, or write into its logbook.
"""

from __future__ import annotations

from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType

from sweeprig.clock import SystemClock
from sweeprig.conduct.last_seen import LastSeen
from sweeprig.conduct.notice_file import Notices
from sweeprig.conduct.notices import Notifier, Progress
from sweeprig.conduct.states import Ending, Event, OnEvent, State
from sweeprig.logbook.run_folder import LAST_SEEN

NOTICES = "notices.log"
"""What became of each notice, a line each; the addresses are not in it."""

_KIND_AT_END = {State.TRIPPED: "trip", State.PARKED: "park"}


class Attention:
    """Called with every event and, at least every second, `tick`. A context manager around the whole run."""

    def __init__(self, folder: Path, title: str, notices: Notices | None, simulated: bool, on_event: OnEvent) -> None:
        self.folder, self.title, self.on_event = folder, title, on_event
        self.wall = SystemClock()
        self.last_seen = LastSeen(folder / LAST_SEEN)
        self.notifier = Notifier(notices, simulated=simulated)
        self.progress = None if notices is None else Progress(notices.no_progress, self.wall.now())
        self.state, self.sentence = "opening", title
        self.told_trip = self.told_park = False

    def __call__(self, event: Event) -> None:
        data = event.data
        if event.kind == "state":
            self.state = str(data["state"])
            if self.state == State.PARKED.words and "next_try_s" in data and not self.told_park:
                self.told_park = True  # once, until a hold is done again: each try in vain would be another
                self._tell("park", f"parked: {data['reason']}", "The drive is off; it is tried again at intervals.")
        elif event.kind == "hold_began":
            self.sentence = f"hold {data['number']}: {data['why']}"
        elif event.kind == "hold_ended" and data["status"] == "done":
            self.told_park = False
        elif event.kind == "trip":
            self.told_trip = True
            self._tell("trip", "protection switched the drive off", str(data["evidence"]))
        if self.progress is not None:
            self.progress.event(event.kind, self.wall.now(), data)
        self.tick()
        self.on_event(event)

    def tick(self) -> None:
        self.last_seen.write(self.state, self.sentence, self.wall.utc())
        if self.progress is not None and (silent := self.progress.due(self.wall.now())) is not None:
            self._tell("no_progress", f"no hold was done for {silent / 60.0:.0f} min", f"{self.state}; {self.sentence}")
        self._keep()

    def ended(self, ending: Ending) -> None:
        """The run's last words."""
        self.state, self.sentence = ending.state.words, ending.reason
        kind = _KIND_AT_END.get(ending.state, "end")
        if not (kind == "trip" and self.told_trip):
            self._tell(kind, f"{ending.state.words}: {ending.reason}", "The drive is off, and shown to be off.")

    def __enter__(self) -> Attention:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, tb: TracebackType | None) -> None:
        if error is not None:
            self.state, self.sentence = "given up", str(error) or type(error).__name__
            self._tell("give_up", f"given up: {error}", "See the run's folder. Cut the supply if off was not proved.")
        self.last_seen.write(self.state, self.sentence, self.wall.utc())
        self._keep(last=True)

    def _tell(self, kind: str, title: str, text: str) -> None:
        self.notifier.tell(kind, f"sweeprig, {self.title}: {title}", f"{text}\nRun: {self.folder}")

    def _keep(self, last: bool = False) -> None:
        results = self.notifier.close() if last else self.notifier.results()
        if not results:
            return
        at = datetime.fromtimestamp(self.wall.utc(), UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
        with suppress(OSError), (self.folder / NOTICES).open("a", encoding="utf-8") as file:
            file.writelines(f"{at} {one.kind}: {'sent' if one.ok else 'NOT SENT'}; {one.words}\n" for one in results)
        for one in results:
            if not one.ok:
                words = f"a notice ({one.kind}) could not be sent: {one.words}"
                self.on_event(Event("notice", 0.0, {"text": words}))
