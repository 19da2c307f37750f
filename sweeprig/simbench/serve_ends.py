"""What ends serving: a signal, a caller's word, the end of standard input, the parent's end.

Each that the system can report wakes a select; what it cannot is looked at now and then. Nothing is closed here.
"""

from __future__ import annotations

import os
import signal
import socket
import sys
from collections.abc import Callable
from contextlib import ExitStack
from types import FrameType

LOOK_S = 0.02
"""Real seconds between two looks at what no descriptor reports: a caller's `stop`, a parent without a handle."""
CHUNK = 4096
SIGNALS = ("SIGTERM", "SIGHUP", "SIGINT")


class Ends:
    """A context. `handles`: descriptors to select for reading; after each select ask `come`.

    stop     looked at every LOOK_S; true ends serving
    tied     the end of standard input, or of the parent process, ends it
    signals  SIGTERM, SIGHUP and Ctrl-C end it; in the main thread only. One that is ignored already (as under nohup)
             stays so; all are put back on the way out
    """

    def __init__(self, stop: Callable[[], bool] | None = None, tied: bool = False, signals: bool = False) -> None:
        self._stop, self._tied, self._signals = stop, tied, signals
        self._opened = ExitStack()
        self._told = ""
        self._parent = os.getppid()
        self._woken: socket.socket | None = None
        self._standard_input: int | None = None
        self._parent_handle: int | None = None
        self.handles: list[int] = []

    def __enter__(self) -> Ends:
        with self._opened:
            if self._signals:
                self._catch_signals()
            if self._tied:
                self._standard_input = sys.stdin.fileno()
                self.handles.append(self._standard_input)
                self._watch_parent()
            self._opened = self._opened.pop_all()
        return self

    def __exit__(self, *_: object) -> None:
        self._opened.close()

    def _catch_signals(self) -> None:
        woken, wakes = socket.socketpair()
        for one in (woken, wakes):
            self._opened.callback(one.close)
            one.setblocking(False)
        self._opened.callback(signal.set_wakeup_fd, signal.set_wakeup_fd(wakes.fileno(), warn_on_full_buffer=False))
        self._woken = woken
        self.handles.append(woken.fileno())
        for name in SIGNALS:
            number = getattr(signal, name, None)
            if number is not None and signal.getsignal(number) != signal.SIG_IGN:
                self._opened.callback(signal.signal, number, signal.signal(number, self._signalled))

    def _signalled(self, number: int, _: FrameType | None) -> None:
        self._told = self._told or signal.Signals(number).name

    def _watch_parent(self) -> None:
        if sys.platform == "linux":
            try:
                handle = os.pidfd_open(self._parent)
            except OSError:  # the parent is gone, or the system is older than this call
                return
            self._opened.callback(os.close, handle)
            self._parent_handle = handle
            self.handles.append(handle)

    @property
    def longest_wait_s(self) -> float | None:
        """Real seconds until `come` must be asked again though no handle reports; None: any length."""
        unseen_parent = self._tied and self._parent_handle is None
        return LOOK_S if self._stop is not None or unseen_parent else None

    def come(self, readable: list[int]) -> str:
        """Why serving ends, or "" while it goes on. `readable`: what the last select found."""
        if self._told:
            return self._told
        if self._woken is not None and self._woken.fileno() in readable:
            self._woken.recv(CHUNK)  # a signal that is somebody else's: unread, it would wake every select
        if self._stop is not None and self._stop():
            return "told to stop"
        if self._tied and os.getppid() != self._parent:
            return "the parent process is gone"
        given = self._standard_input
        if given is not None and given in readable and not os.read(given, CHUNK):
            return "standard input ended"
        return ""
