"""Seeing that a program opens a terminal, without looking again and again: the system's own notice, where it has one.

A pseudo-terminal's master tells nothing of it: without a client it always counts as readable, and stays so.
"""

from __future__ import annotations

import ctypes
import os
import sys

OPENED = 0x20
"""IN_OPEN of inotify(7)."""
CHUNK = 4096


class Doorbell:
    """`handle` becomes readable when somebody opens the node at `path`; None where the system gives no such notice."""

    def __init__(self, path: str) -> None:
        self.handle = _watched(path)

    def answer(self) -> None:
        """Take what has been reported, so that the handle rests again."""
        if self.handle is not None:
            try:
                os.read(self.handle, CHUNK)
            except BlockingIOError:
                return

    def close(self) -> None:
        if self.handle is not None:
            os.close(self.handle)
        self.handle = None


def _watched(path: str) -> int | None:
    """A descriptor that reports each opening of `path`; None without inotify, or with none left to be had."""
    if sys.platform != "linux":
        return None
    try:
        library = ctypes.CDLL(None, use_errno=True)
        handle = int(library.inotify_init1(os.O_NONBLOCK | os.O_CLOEXEC))
        if handle < 0:
            return None
        if library.inotify_add_watch(handle, os.fsencode(path), OPENED) < 0:
            os.close(handle)
            return None
    except (OSError, AttributeError):  # a C library without it
        return None
    return handle
