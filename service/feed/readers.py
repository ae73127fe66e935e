"""What the store holds about a reader, and the rows of the reader's circle."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.affinity import BLOCK, FRIEND, Circle, Dealings
from scoring.edges import CREATION, EDGE, MARKER, EdgeRows, codes, join_rows, times_ms
from service.feed.deadline import Deadline
from service.feed.reads import Reads
from service.store import keys

_CODE_BITS = np.uint64(0xFFFF)
_FIELDS = ("row", "who", "out", "mark", "seen", "name")


@dataclass(frozen=True, slots=True)
class ReaderState:
    """One reader's own state.

    Attributes:
        hash: of the reader's id.
        row: the reader's edges, packed.
        tie_person: hashes of whom the reader has a tie to, shape (n,), uint64.
        tie_relation: the relation to each, shape (n,).
        blocked_by: hashes of who blocks the reader.
        friend_of: hashes of who declared the reader a friend.
        dealings: interactions with posts by known authors.
        dealt_post: the post of each dealing, shape (d,), uint64.
        seen_post: posts seen, shape (s,), uint64.
        seen_ms: when each was, shape (s,), Unix milliseconds.

    """

    hash: bytes
    row: bytes
    tie_person: NDArray[np.uint64]
    tie_relation: NDArray[np.uint8]
    blocked_by: frozenset[int]
    friend_of: frozenset[int]
    dealings: Dealings
    dealt_post: NDArray[np.uint64]
    seen_post: NDArray[np.uint64]
    seen_ms: NDArray[np.float64]


def hash_number(id_hash: bytes) -> int:
    """Give a hash as the number that arrays hold."""
    return int.from_bytes(id_hash, "little")


async def load_reader(reads: Reads, reader_id: str, reader: bytes, *, profile: bool) -> ReaderState:
    """Begin a read: fetch the reader's state in one round trip.

    A reader whose hash is that of another known id has no state: what is stored there is the other's.

    Args:
        reads: fetches for this worker.
        reader_id: the reader's id.
        reader: its hash.
        profile: False leaves out what the reader did: interactions and seen posts.

    Raises:
        StoreUnavailable: the store does not answer.

    """
    *own, name = await reads.own([keys.key(name, reader) for name in _FIELDS])
    if name not in (b"", reader_id.encode()):
        own = [b""] * len(own)
    row, who, out, mark, seen = own
    if not profile:
        row = who = seen = b""
    ties, marks = np.frombuffer(out, dtype=EDGE), np.frombuffer(mark, dtype=EDGE)
    dealings, dealt_post = read_dealings(row, who)
    seen_entries = np.frombuffer(seen, dtype=EDGE)
    return ReaderState(
        hash=reader,
        row=row,
        tie_person=ties["post"],
        tie_relation=(ties["stamp"] & _CODE_BITS).astype(np.uint8),
        blocked_by=_marked(marks, BLOCK),
        friend_of=_marked(marks, FRIEND),
        dealings=dealings,
        dealt_post=dealt_post,
        seen_post=seen_entries["post"],
        seen_ms=times_ms(seen_entries["stamp"]),
    )


def read_dealings(row: bytes, who: bytes) -> tuple[Dealings, NDArray[np.uint64]]:
    """Read from a person's row and its authors the interactions with posts by known authors."""
    edges, author = np.frombuffer(row, dtype=EDGE), np.frombuffer(who, dtype="<u8")
    length = min(len(edges), len(author))
    edges, author = edges[:length], author[:length]
    flagged = (edges["stamp"] & _CODE_BITS) >= CREATION
    counted = ~flagged & (author != 0) & (codes(edges["stamp"]) != MARKER)
    stamps = edges["stamp"][counted]
    return Dealings(author[counted], codes(stamps), times_ms(stamps)), edges["post"][counted]


def _marked(marks: NDArray[np.void], relation: int) -> frozenset[int]:
    chosen = (marks["stamp"] & _CODE_BITS) == relation
    return frozenset(marks["post"][chosen].tolist())


async def load_rows(reads: Reads, circle: Circle, deadline: Deadline) -> tuple[EdgeRows, bool]:
    """Gather the rows of a circle, the strongest affinities first.

    Returns:
        The entries of all rows gathered, `row` being the place in the circle, and whether that is all rows.

    Raises:
        StoreUnavailable: the store does not answer.

    """
    order = np.argsort(-circle.affinity, kind="stable")
    packed = circle.person[order].astype("<u8").tobytes()
    rows, whole = await reads.rows([packed[at : at + 8] for at in range(0, len(packed), 8)], deadline)
    joined = join_rows(rows)
    return EdgeRows(joined.post, joined.stamp, order[joined.row]), whole
