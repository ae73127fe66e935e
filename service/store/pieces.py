"""Outbox entries as bytes: a 16-digit number, then pieces, each a type byte, a length and a body."""

import struct
from collections.abc import Iterator
from dataclasses import dataclass

SEQ_DIGITS = 16
_HEAD = struct.Struct("<cI")
_COUNT = struct.Struct("<I")

INTERACTION, RETRACT, POST, TIE, WITHDRAW, ERASE, SWEPT = b"I", b"R", b"P", b"T", b"W", b"E", b"S"


@dataclass(frozen=True, slots=True)
class Piece:
    """One piece of an outbox entry."""

    type: bytes
    body: bytes

    @property
    def id_hash(self) -> bytes:
        """The hash of the event's id: every body starts with it."""
        return self.body[:8]


@dataclass(frozen=True, slots=True)
class Entry:
    """An outbox entry: what events taken in a bucket must still change in other buckets."""

    bucket: int
    seq: int
    low: int
    pieces: tuple[Piece, ...]

    @classmethod
    def read(cls, bucket: int, low: int, member: bytes) -> "Entry":
        """Read an entry as the outbox holds it."""
        return cls(bucket, int(member[:SEQ_DIGITS]), low, tuple(split(member[SEQ_DIGITS:])))


def pack(kind: bytes, body: bytes) -> bytes:
    """Pack one piece.

    >>> [(piece.type, piece.body) for piece in split(pack(TIE, b"12345678") + pack(POST, b"abcdefgh"))]
    [(b'T', b'12345678'), (b'P', b'abcdefgh')]

    """
    return _HEAD.pack(kind, len(body)) + body


def open_ended(kind: bytes, body: bytes, more: int) -> bytes:
    """Pack the head of a piece to which the script adds `more` bytes."""
    return _HEAD.pack(kind, len(body) + more) + body


def split(data: bytes) -> Iterator[Piece]:
    """Read pieces one after the other."""
    at = 0
    while at < len(data):
        kind, length = _HEAD.unpack_from(data, at)
        at += _HEAD.size
        yield Piece(kind, data[at : at + length])
        at += length


def stamp(ms: int, code: int) -> bytes:
    """Pack a time and a code into 8 bytes."""
    return (ms << 16 | code).to_bytes(8, "little")


def unstamp(data: bytes) -> tuple[int, int]:
    """Read a time and a code.

    >>> unstamp(stamp(1_767_225_600_000, 7))
    (1767225600000, 7)

    """
    value = int.from_bytes(data, "little")
    return value >> 16, value & 0xFFFF


@dataclass(frozen=True, slots=True)
class Swept:
    """What an erasure took out of a person's own state and must still take out elsewhere."""

    id_hash: bytes
    person: bytes
    until_ms: int
    taken: list[bytes]
    put: list[bytes]
    posts: list[bytes]
    targets: list[bytes]
    sources: list[bytes]

    @classmethod
    def read(cls, body: bytes) -> "Swept":
        """Read the lists that sweep_person.lua wrote."""
        at, lists = 24, []
        for width in (16, 16, 8, 8, 8):
            (count,) = _COUNT.unpack_from(body, at)
            at += _COUNT.size
            lists.append([body[at + width * i : at + width * (i + 1)] for i in range(count)])
            at += width * count
        return cls(body[:8], body[8:16], unstamp(body[16:24])[0], *lists)
