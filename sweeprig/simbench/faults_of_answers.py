"""Faults of answers: late, lost, in pieces, with wrong ends, with noise, with values that are none.

Each alters the bytes of one answer on their way to the client; the instrument has done what it was asked.
"""

from __future__ import annotations

import re

from sweeprig.simbench.faulty_port import Fault, Piece

_NUMBER = re.compile(rb"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_NOISE = bytes(value for value in range(256) if value not in b"\r\n")
"""Bytes of line noise. An end of line among them would be another fault."""


class OfAnswer(Fault):
    on_answer = True

    def answer(self, pieces: list[Piece]) -> list[Piece]:
        """The first piece is the answer, if no other fault has taken it already."""
        return [*self.alter(pieces[0]), *pieces[1:]] if pieces else pieces

    def alter(self, piece: Piece) -> list[Piece]:
        return [piece._replace(raw=self.altered(piece.raw))]

    def altered(self, raw: bytes) -> bytes:
        """The answer's bytes, its terminator with them, after the fault."""
        return raw

    @property
    def end(self) -> bytes:
        return self.port.terminator


class LateReply(OfAnswer):
    def alter(self, piece: Piece) -> list[Piece]:
        return [piece._replace(after_s=piece.after_s + self.spec.seconds)]


class NoReply(OfAnswer):
    def answer(self, pieces: list[Piece]) -> list[Piece]:
        return pieces[1:]


class SplitReply(OfAnswer):
    def alter(self, piece: Piece) -> list[Piece]:
        half = max(1, len(piece.raw) // 2)
        first, second = piece.raw[:half], piece.raw[half:]
        return [piece._replace(raw=first), Piece(piece.after_s + self.spec.seconds, second)]


class Dribble(OfAnswer):
    def alter(self, piece: Piece) -> list[Piece]:
        return [
            Piece(piece.after_s + place * self.spec.seconds, piece.raw[place : place + 1])
            for place in range(len(piece.raw))
        ]


class ExtraTerminator(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        return self.end + raw


class MissingTerminator(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        return raw.removesuffix(self.end)


class DoubleTerminator(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        return raw + self.end


class CrLf(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        return raw.removesuffix(self.end) + b"\r\n"


class NoiseBefore(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        return bytes(self.rng.choices(_NOISE, k=self.spec.number)) + raw


class NonAscii(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        body = bytearray(raw.removesuffix(self.end))
        for place in self.rng.sample(range(len(body)), min(self.spec.number, len(body))):
            body[place] |= 0x80
        return bytes(body) + self.end


class TruncatedBlock(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        """The header stays; so does the end, as an instrument sends it."""
        data = _block(raw)
        if data is None:
            return raw
        begin, end = data
        return raw[: max(begin, end - self.spec.number)] + raw[end:]


class OverlongBlock(OfAnswer):
    def altered(self, raw: bytes) -> bytes:
        data = _block(raw)
        return raw if data is None else raw[: data[1]] + b"\x2a" * self.spec.number + raw[data[1] :]


class OtherValue(OfAnswer):
    """One value of an answer replaced. Neither the identity nor an entry of the error queue is a value."""

    def concerns(self, line: bytes) -> bool:
        return super().concerns(line) and not line.startswith(b"*") and b"SYST" not in line.upper()

    def altered(self, raw: bytes) -> bytes:
        fields = raw.removesuffix(self.end).split(b",")
        numbers = [place for place, field in enumerate(fields) if _NUMBER.fullmatch(field.strip())]
        if not numbers:
            return raw
        fields[self.rng.choice(numbers)] = self.spec.words.encode("ascii")
        return b",".join(fields) + self.end


class WrongCount(OtherValue):
    def altered(self, raw: bytes) -> bytes:
        fields = raw.removesuffix(self.end).split(b",")
        fields = fields[:-1] if len(fields) > 1 else fields * 2
        return b",".join(fields) + self.end


class IdentityChanged(OfAnswer):
    def concerns(self, line: bytes) -> bool:
        return b"*IDN?" in line.upper()

    def altered(self, raw: bytes) -> bytes:
        fields = raw.removesuffix(self.end).split(b",")
        fields[2:3] = [self.spec.words.encode("ascii")]
        return b",".join(fields) + self.end


def _block(raw: bytes) -> tuple[int, int] | None:
    """(where its data begin, where they end) of a definite block (IEEE 488.2, 8.7.9); None for anything else."""
    digits = raw[1:2]
    if raw[:1] != b"#" or digits not in b"123456789" or not digits:
        return None
    begin = 2 + int(digits)
    count = raw[2:begin]
    return (begin, begin + int(count)) if count.isdigit() and begin + int(count) <= len(raw) else None


KINDS: dict[str, type[Fault]] = {
    "late_reply": LateReply,
    "no_reply": NoReply,
    "split_reply": SplitReply,
    "dribble": Dribble,
    "extra_terminator": ExtraTerminator,
    "missing_terminator": MissingTerminator,
    "double_terminator": DoubleTerminator,
    "cr_lf": CrLf,
    "noise_before": NoiseBefore,
    "non_ascii": NonAscii,
    "truncated_block": TruncatedBlock,
    "overlong_block": OverlongBlock,
    "sentinel": OtherValue,
    "text_marker": OtherValue,
    "wrong_count": WrongCount,
    "identity_changed": IdentityChanged,
}
