"""Notices to people: sent by a process of their own, so that a service that hangs never holds the run.

Run as a program this module is that process: an order in JSON on standard input, the outcome in JSON on standard
output. Addresses of services, which carry passwords, stand in neither command line, log, error nor outcome.
"""

from __future__ import annotations

import importlib
import json
import logging
import os
import re
import subprocess
import sys
import threading
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor, wait
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple, TextIO

from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.errors import ConfigError

if TYPE_CHECKING:
    from sweeprig.conduct.notice_file import Notices

INSTALL = "python -m pip install 'sweeprig[notices]'"
NO_LIBRARY = f"the library for notices is not installed: {INSTALL}"
TEST = "test"
"""A kind that is sent whatever `when` says."""

_MOST_TITLE, _MOST_TEXT = 200, 4000


class Result(NamedTuple):
    """The outcome of one notice: its kind, whether every service took it, and words without any address."""

    kind: str
    ok: bool
    words: str


def command() -> list[str]:
    """A fresh interpreter that imports nothing from the folder it is started in."""
    return [sys.executable, "-P", "-m", "sweeprig.conduct.notices"]


class Notifier:
    """Sends notices beside the run. Nothing here raises or waits, except `close`, which waits for a bounded time.

    `notices` None: the user has no such file, and nothing is sent. `simulated` goes into every title.
    """

    def __init__(
        self,
        notices: Notices | None,
        *,
        simulated: bool = False,
        within_s: float | None = None,
        start: Callable[[], list[str]] = command,
    ) -> None:
        self._notices, self._simulated, self._start = notices, simulated, start
        self._within_s = BOUNDS["notice_s"] if within_s is None else within_s
        self._results: deque[Result] = deque(maxlen=int(BOUNDS["notices_kept"]))
        self._under_way: list[threading.Thread] = []

    def tell(self, kind: str, title: str, text: str) -> None:
        """Begin to send, if `when` names `kind`. The outcome is for `results`, at the latest when it is overdue."""
        if self._notices is None or (kind not in self._notices.when and kind != TEST):
            return
        try:
            self._under_way = [thread for thread in self._under_way if thread.is_alive()]
            if len(self._under_way) >= BOUNDS["notices_at_once"]:
                self._results.append(Result(kind, False, f"{len(self._under_way)} notices are still under way"))
                return
            order = {
                "to": list(self._notices.to),
                "title": _cut(f"SIMULATED: {title}" if self._simulated else title, _MOST_TITLE),
                "text": _cut(text, _MOST_TEXT),
                "within_s": self._within_s,
            }
            thread = threading.Thread(target=self._send, args=(kind, order), daemon=True, name=f"notice {kind}")
            thread.start()
            self._under_way.append(thread)
        except Exception as error:  # noqa: BLE001 - no threads, no memory: a notice is never worth a run
            self._results.append(Result(kind, False, f"it could not be sent ({type(error).__name__})"))

    def results(self) -> list[Result]:
        """Outcomes that have come since the last call, each once."""
        found = []
        while self._results:
            found.append(self._results.popleft())
        return found

    def close(self) -> list[Result]:
        """At the end of a run: wait for what is under way, no longer than one notice may take; the last outcomes."""
        clock = SystemClock()
        until = clock.now() + self._within_s + BOUNDS["notice_grace_s"] + BOUNDS["kill_s"]
        for thread in self._under_way:
            thread.join(max(0.0, until - clock.now()))
        return self.results()

    def _send(self, kind: str, order: Mapping[str, object]) -> None:
        try:
            ok, words = _by_process(self._start(), order, self._within_s + BOUNDS["notice_grace_s"])
        except Exception as error:  # noqa: BLE001 - as in `tell`
            ok, words = False, f"its process could not be used ({type(error).__name__})"
        self._results.append(Result(kind, ok, words))


def test_notice(notices: Notices | None = None, path: Path | None = None) -> Result:  # noqa: PT028 - none of pytest's
    """Send one notice now and wait for its outcome. ConfigError where the user's file is missing or wrong."""
    from sweeprig.conduct.notice_file import VARIABLE, open_to_others, place, read_notices

    file = path or place()[0]
    notices = notices or read_notices(path)
    if notices is None:
        raise ConfigError(
            "there is no file that says where notices go",
            value=str(file),
            remedy=f'Write it, with to = ["service://…"], or name another with {VARIABLE}',
            topic="unattended",
        )
    notifier = Notifier(notices)
    notifier.tell(TEST, "sweeprig: a test", "This is a test. Notices of runs will come to this place.")
    results = notifier.close() or [Result(TEST, False, "its process did not end")]
    told = results[0]
    if open_to_others(file):
        return told._replace(words=f"{told.words}. Other users can read {file}: chmod 600 it, it holds passwords")
    return told


class Progress:
    """Says when nothing got done for too long. Pure: it knows only the times that it is told, s of one clock."""

    def __init__(self, after_s: float, began: float) -> None:
        self.after_s = after_s
        self._since = began
        self._allowed_s = 0.0
        self._said = False

    def event(self, kind: str, at: float, data: Mapping[str, object]) -> None:
        """Feed every event of the run. A hold that ends `done` is progress; one that may last long is waited for."""
        if kind == "hold_began":
            most = data.get("most_s")
            self._allowed_s = float(most) if isinstance(most, int | float) else 0.0
        elif kind == "hold_ended":
            self._allowed_s = 0.0
            if data.get("status") == "done":
                self.made(at)

    def made(self, at: float) -> None:
        """Progress, at this time."""
        self._since, self._said = max(self._since, at), False

    def due(self, now: float) -> float | None:
        """Length of the silence, s, the first time it is longer than `after_s` beyond the hold in hand; else None."""
        silent = now - self._since
        if self._said or silent <= self.after_s + self._allowed_s:
            return None
        self._said = True
        return silent


def _cut(text: str, most: int) -> str:
    return text if len(text) <= most else f"{text[: most - 2]} …"


def _by_process(line: Sequence[str], order: Mapping[str, object], within_s: float) -> tuple[bool, str]:
    """Have the order carried out by a process; it is ended when it takes longer than `within_s`."""
    pipe, null = subprocess.PIPE, subprocess.DEVNULL  # its own prints could name an address
    process = subprocess.Popen(list(line), stdin=pipe, stdout=pipe, stderr=null, start_new_session=True)
    try:
        said, _ = process.communicate(json.dumps(order).encode(), timeout=within_s)
    except subprocess.TimeoutExpired:
        return False, f"no outcome within {within_s:g} s"
    finally:
        process.kill()
        with suppress(subprocess.TimeoutExpired):
            process.communicate(timeout=BOUNDS["kill_s"])
    try:
        outcome = json.loads(said.splitlines()[-1])
        return bool(outcome["ok"]), str(outcome["words"])
    except (ValueError, IndexError, KeyError, TypeError):
        return False, f"its process ended with exit code {process.returncode} and no outcome"


# -- in the process that sends -----------------------------------------------------------------------------------


def carry_out(order: Mapping[str, Any], library: Callable[[], Any] | None = None) -> tuple[bool, str]:
    """Send to all services side by side: (whether all took it, words)."""
    try:
        apprise = (library or (lambda: importlib.import_module("apprise")))()
    except ImportError:
        return False, NO_LIBRARY
    reasons = _Reasons()
    logger = logging.getLogger("apprise")
    logger.handlers, logger.propagate = [reasons], False  # it would print addresses
    pool = ThreadPoolExecutor(max_workers=len(order["to"]))
    sent = [pool.submit(_to_one, apprise, reasons, address, order) for address in order["to"]]
    wait(sent, order["within_s"])
    failed = []
    for number, (address, one) in enumerate(zip(order["to"], sent, strict=True), 1):
        why = _why_not(one, order["within_s"])
        if why:
            failed.append(f"{address.partition('://')[0]} (address {number}): {why}")
    pool.shutdown(wait=False, cancel_futures=True)
    took = f"{len(sent) - len(failed)} of {len(sent)} services took it"
    return not failed, "; ".join([took, *failed])


def _to_one(apprise: Any, reasons: _Reasons, address: str, order: Mapping[str, Any]) -> str:
    """ "" when the service took it, else why not."""
    service = apprise.Apprise.instantiate(address)
    if service is None:
        return "the library does not understand the address"
    text = order["text"].strip() or order["title"]  # the library refuses to send an empty one
    if service.notify(title=order["title"], body=text):
        return ""
    return reasons.of_this_thread() or "refused"


def _why_not(one: Future[str], within_s: float) -> str:
    if not one.done():
        return f"no answer within {within_s:g} s"
    error = one.exception()
    return one.result() if error is None else type(error).__name__


class _Reasons(logging.Handler):
    """Of the library's own words only those that carry no address: the status that a service answered with."""

    def __init__(self) -> None:
        super().__init__(logging.WARNING)
        self._found: dict[int, str] = {}

    def emit(self, record: logging.LogRecord) -> None:
        with suppress(Exception):
            text = record.getMessage()
            status = re.search(r"\berror=(\d{3})\b", text)
            if status:
                self._found[threading.get_ident()] = f"it answered with status {status[1]}"
            elif "onnection error" in text:
                self._found[threading.get_ident()] = "no connection, or no answer"

    def of_this_thread(self) -> str:
        return self._found.pop(threading.get_ident(), "")


def main(source: TextIO = sys.stdin, target: TextIO = sys.stdout) -> None:
    """One order in, one outcome out."""
    ok, words = carry_out(json.load(source))
    print(json.dumps({"ok": ok, "words": words}), file=target, flush=True)


if __name__ == "__main__":
    main()
    os._exit(0)  # a service that still hangs has a thread that would be waited for
