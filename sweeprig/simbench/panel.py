"""Remote and local of a simulated instrument: whether its messages may set it, or only the person at its front panel.

The commands and error -203 are after SCPI-1999 vol. 2, chapter 21 (from memory). What a setting does is not here.
"""

from __future__ import annotations

from sweeprig.simbench.scpi import CommandTree, Handler, Later, Refused, nr1

PROTECTED = -203
KEY = "local_at_power_on"
"""Of the rig file's `[simulated.NAME]` table: 1 for an instrument that wants `SYST:REM` before it can be set."""
OF_STATUS = ("*CLS", "*ESE", "*SRE", "*OPC", "*WAI")
"""Messages that set no more than the status structure: obeyed in local too."""


class Panel(CommandTree):
    """The commands of an instrument with a front panel. In local every setting is refused with -203 and changes
    nothing; queries are answered.

    locked   `SYST:RWL`: remote, and the key that would bring local is dead
    """

    def __init__(self, begins_local: bool = False) -> None:
        super().__init__()
        self._begins_local = begins_local
        self.power_on()
        for header, local, locked in (("REMote", False, False), ("LOCal", True, False), ("RWLock", False, True)):
            super().add(f"SYSTem:{header}", self._turning(local, locked))
        super().add("SYSTem:REMote?", lambda _: nr1(not self.local))
        super().add("SYSTem:LOCal?", lambda _: nr1(self.local))
        super().add("SYSTem:RWLock?", lambda _: nr1(self.locked))

    def power_on(self) -> None:
        """As after switching on; *RST leaves it alone."""
        self.local, self.locked = self._begins_local, False

    def add(self, header: str, handler: Handler, least: int = 0, most: int = 0, indefinite: bool = False) -> None:
        if not header.endswith("?") and header not in OF_STATUS:
            handler = self._guarded(handler)
        super().add(header, handler, least, most, indefinite)

    def _guarded(self, handler: Handler) -> Handler:
        def obey(parameters: tuple[str, ...]) -> str | Later | None:
            if self.local:
                raise Refused(PROTECTED, "local")
            return handler(parameters)

        return obey

    def _turning(self, local: bool, locked: bool) -> Handler:
        def turn(_: tuple[str, ...]) -> None:
            self.local, self.locked = local, locked

        return turn
