"""A scripted instrument: answers from a table, settings that are set and asked back, an error queue, a time of its own.

For testing adapters without any instrument. It knows no physics; the simulated bench does.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Mapping

from sweeprig.errors import LinkTimeout
from sweeprig.roles import Answer, Ask, Reply

EXCHANGE_S = 0.01
POWER_ON = 128
_WORDS = {"ON": "1", "OFF": "0"}


class Scripted:
    """Called with an ask, it answers as an instrument would; hand it to `perform` or `checks`.

    answers   query → text, or a function of the time (s) that gives it
    settings  header → value at power-on; `HEADER value` sets it (ON and OFF become 1 and 0), `HEADER?` asks it back
    aliases   another header that sets the same: {"CONF:VOLT:DC": "SENS:VOLT:DC:RANG"}
    identity  what `*IDN?` answers

    Common commands and SYST:ERR? are built in. An unknown header queues −113, and a query among them then gets no
    reply: LinkTimeout. `sent` keeps the messages, `errors` is the queue, `now` the time: it passes by 10 ms an exchange
    and by what an ask wants to be paced.
    """

    def __init__(
        self,
        answers: Mapping[str, str | Callable[[float], str]],
        settings: Mapping[str, str] | None = None,
        aliases: Mapping[str, str] | None = None,
        identity: str = "MAKER,MODEL,1,0",
    ) -> None:
        self.sent: list[bytes] = []
        self.errors: deque[str] = deque()
        self.now = 0.0
        self.answers = dict(answers)
        self.settings = dict(settings or {})
        self.event_status = POWER_ON
        self._aliases = dict(aliases or {})
        self._identity = identity

    def __call__(self, ask: Ask) -> Answer:
        self.now += ask.after_s + EXCHANGE_S
        self.sent.append(ask.message)
        reply = self._reply(ask.message.decode("latin-1"))
        if ask.reply is Reply.NOTHING:
            return Answer(b"", self.now)
        if reply is None:
            raise LinkTimeout(f"no reply to {ask.message!r}")
        return Answer(reply.encode("latin-1"), self.now)

    def _reply(self, message: str) -> str | None:
        if message in self.answers:
            answer = self.answers[message]
            return answer if isinstance(answer, str) else answer(self.now)
        if message.startswith("*"):
            return self._common(message)
        if message == "SYST:ERR?":
            return self.errors.popleft() if self.errors else '0,"No error"'
        header, _, value = message.partition(" ")
        if header.endswith("?") and header[:-1] in self.settings:
            return self.settings[header[:-1]]
        header = self._aliases.get(header, header)
        if value and header in self.settings:
            self.settings[header] = _WORDS.get(value, value)
        else:
            self.errors.append('-113,"Undefined header"')
        return None

    def _common(self, message: str) -> str | None:
        if message == "*CLS":
            self.errors.clear()
            self.event_status = 0
        elif message == "*ESR?":
            status, self.event_status = self.event_status, 0
            return str(status)
        elif message in ("*IDN?", "*OPC?"):
            return self._identity if message == "*IDN?" else "1"
        else:
            self.errors.append('-113,"Undefined header"')
        return None
