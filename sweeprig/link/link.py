"""The byte channel to one instrument: the contract that every kind of link keeps. links.md of the manual says why.

MUST   send one message at a time; a second `send` before the first reply was taken is LinkMisuse
MUST   add the terminator on sending, and hand out a reply without it
MUST   never wait in `take`: one whole framed reply, or None for "not yet", which leaves the link clean
MUST   skip empty lines before an awaited line (double terminators), and count them in `empty_lines`
MUST   hold the largest reply size; more is LinkGarbled and the link is dirty
MUST   raise LinkLost at once when the peer has closed, and close its own handle before it raises
MUST   turn every foreign exception into one of the four classes, cause kept
MUST   accept only early messages until `identified` is set (the caller sets it after the identity answer)
MUST   when dirty, accept nothing but `resynchronise` and `close` (and early messages: switching off is sent blind)
MUST   bound a write by the deadline
MAY    block in `resynchronise` and at opening, up to the deadline given, never longer
"""

from __future__ import annotations

from typing import Protocol, runtime_checkable

from sweeprig.roles import Reply

LARGEST_LINE = 4_096
LARGEST_BLOCK = 16_000_000


@runtime_checkable
class Link(Protocol):
    """Deadlines are absolute values of the clock's `now()`.

    address         as in the rig file
    dirty           why nothing more may be read, or "" while clean
    identified      the instrument has answered its identity query since the link was (re)opened
    """

    address: str
    dirty: str
    identified: bool
    empty_lines: int

    def send(self, message: bytes, reply: Reply, deadline: float, early: bool = False) -> None:
        """Write `message` and its terminator and await `reply`."""
        ...

    def take(self) -> bytes | None:
        """The whole reply, or None for not yet."""
        ...

    def declare_timeout(self) -> bytes:
        """The waiter gave up: mark the link dirty and hand over the partial bytes for the record."""
        ...

    def resynchronise(self, deadline: float) -> None:
        """Back to a fresh, unidentified, clean link (reopen or drain); LinkLost where that cannot be had."""
        ...

    def close(self) -> None:
        """Never raises, may be called twice."""
        ...

    def fileno(self) -> int | None: ...
    def ready_at(self) -> float:
        """Clock time at which bytes will be there; only the simulated bench knows, others return infinity."""
        ...
