"""What the store holds about a reader, and how the reader stands to the circle."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.affinity import BLOCK, FRIEND, Acquaintance, Circle, Dealings, acquaintance
from scoring.edges import CREATION, EDGE, MARKER, codes, times_ms
from scoring.ranking import Ranking
from service.feed.cache import OVERHEAD, Recent
from service.feed.reads import Reads
from service.store import keys

_CODE_BITS = np.uint64(0xFFFF)
_ORDER_KEPT_MS = 60_000
_NO_POSTS = np.empty(0, dtype=np.uint64)
_NO_DEALINGS = Dealings(_NO_POSTS, np.empty(0, dtype=np.intp), np.empty(0))
_FIELDS = ("row", "who", "out", "mark", "seen", "name")


@dataclass(frozen=True, slots=True)
class ReaderState:
    """One reader's own state.

    Attributes:
        hash: of the reader's id.
        tie_person: hashes of whom the reader has a tie to, shape (n,), uint64.
        tie_relation: the relation to each, shape (n,).
        marks: who blocks or befriended the reader, packed.
        known: the reader's circle, and the dealings with it.
        dealt_post: the post of each dealing, shape (d,), uint64.
        seen_post: posts seen, shape (s,), uint64.
        seen_ms: when each was, shape (s,), Unix milliseconds.

    """

    hash: bytes
    tie_person: NDArray[np.uint64]
    tie_relation: NDArray[np.uint8]
    marks: bytes
    known: Acquaintance
    dealt_post: NDArray[np.uint64]
    seen_post: NDArray[np.uint64]
    seen_ms: NDArray[np.float64]

    def hidden(self, ranking: Ranking) -> NDArray[np.uint64]:
        """Give the posts with which the reader did something whose gain is negative under a policy: hashes, shape (h,).

        They are dropped from the reader's feed until the interaction is taken back.
        """
        dealings = self.known.dealings
        posts: NDArray[np.uint64] = self.dealt_post[ranking.gains_of(dealings.code) < 0.0]
        return posts

    @property
    def blocked_by(self) -> frozenset[int]:
        """Hashes of who blocks the reader."""
        return _marked(self.marks, BLOCK)

    @property
    def friend_of(self) -> frozenset[int]:
        """Hashes of who declared the reader a friend."""
        return _marked(self.marks, FRIEND)


@dataclass(frozen=True, slots=True)
class Standing:
    """A reader's circle under a policy, those with the strongest affinity first.

    Attributes:
        order: places in the circle, shape (n,).
        people: their hashes, in that order.
        relation: the reader's relation to each, in that order.
        affinity: the reader's affinity to each, in that order.
        circle: in order of hashes.

    """

    order: NDArray[np.intp]
    people: list[bytes]
    relation: NDArray[np.uint8]
    affinity: NDArray[np.float64]
    circle: Circle


def hash_number(id_hash: bytes) -> int:
    """Give a hash as the number that arrays hold."""
    return int.from_bytes(id_hash, "little")


class Readers:
    """Loads readers for one worker, and remembers what their stored state came to as long as it stays the same.

    Args:
        reads: fetches for this worker.
        size: most memory for what is remembered, bytes.

    """

    def __init__(self, reads: Reads, size: int) -> None:
        self._reads = reads
        self._held: Recent[_Held] = Recent(size, _Held.size)

    async def load(self, reader_id: str, reader: bytes, *, profile: bool) -> ReaderState:
        """Begin a read: fetch the reader's state in one round trip.

        A reader whose hash is that of another known id has no state: what is stored there is the other's.

        Args:
            reader_id: the reader's id.
            reader: its hash.
            profile: False leaves out what the reader did: interactions and seen posts.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        *own, name = await self._reads.own([keys.key(name, reader) for name in _FIELDS])
        if name not in (b"", reader_id.encode()):
            own = [b""] * len(own)
        if not profile:
            own[0] = own[1] = own[4] = b""
        place = reader + (b"profile" if profile else b"none")
        held = self._held.get(place)
        if held is None or held.own != own:
            held = _Held(own, _decoded(reader, own))
            self._held.put(place, held)
        return held.state

    def standing(self, state: ReaderState, ranking: Ranking, t_ms: int) -> Standing:
        """Compute how a reader stands to the circle under a policy at a time in Unix milliseconds.

        The order is a minute old at most; it decides only whose rows are fetched first.
        """
        known = state.known
        held = self._held.get(state.hash + b"profile")
        before = held.standing if held is not None and held.state is state else None
        affinity = known.affinity(ranking, t_ms)
        if before is None or before.ranking is not ranking or not 0 <= t_ms - before.t_ms < _ORDER_KEPT_MS:
            before = _Standing(ranking, t_ms, *_ordered(known, affinity))
            if held is not None and held.state is state:
                held.standing = before
        circle = Circle(known.person, known.relation, affinity)
        return Standing(before.order, before.people, before.relation, affinity[before.order], circle)


@dataclass(frozen=True, slots=True)
class _Standing:
    """What of a standing is kept for a while."""

    ranking: Ranking
    t_ms: int
    order: NDArray[np.intp]
    people: list[bytes]
    relation: NDArray[np.uint8]


@dataclass(slots=True)
class _Held:
    """What a reader's stored strings came to."""

    own: list[bytes]
    state: ReaderState
    standing: _Standing | None = None

    def size(self) -> int:
        """Tell about how many bytes it takes."""
        return 8 * sum(map(len, self.own)) + OVERHEAD


def _ordered(
    known: Acquaintance, affinity: NDArray[np.float64]
) -> tuple[NDArray[np.intp], list[bytes], NDArray[np.uint8]]:
    order = np.argsort(-affinity, kind="stable")
    packed = known.person[order].astype("<u8").tobytes()
    return order, [packed[at : at + 8] for at in range(0, len(packed), 8)], known.relation[order]


def _decoded(reader: bytes, own: list[bytes]) -> ReaderState:
    row, who, out, mark, seen = own
    ties, seen_entries = np.frombuffer(out, dtype=EDGE), np.frombuffer(seen, dtype=EDGE)
    tie_person, tie_relation = ties["post"].copy(), (ties["stamp"] & _CODE_BITS).astype(np.uint8)
    dealings, dealt_post = read_dealings(row, who)
    return ReaderState(
        hash=reader,
        tie_person=tie_person,
        tie_relation=tie_relation,
        marks=mark,
        known=acquaintance(hash_number(reader), tie_person, tie_relation, dealings),
        dealt_post=dealt_post,
        seen_post=seen_entries["post"].copy(),
        seen_ms=times_ms(seen_entries["stamp"]),
    )


def read_dealings(row: bytes, who: bytes) -> tuple[Dealings, NDArray[np.uint64]]:
    """Read from a person's row and its authors the interactions with posts by known authors."""
    if not row or not who:
        return _NO_DEALINGS, _NO_POSTS
    edges, author = np.frombuffer(row, dtype=EDGE), np.frombuffer(who, dtype="<u8")
    length = min(len(edges), len(author))
    edges, author = edges[:length], author[:length]
    flagged = (edges["stamp"] & _CODE_BITS) >= CREATION
    counted = ~flagged & (author != 0) & (codes(edges["stamp"]) != MARKER)
    stamps = edges["stamp"][counted]
    return Dealings(author[counted], codes(stamps), times_ms(stamps)), edges["post"][counted]


def _marked(marks: bytes, relation: int) -> frozenset[int]:
    entries = np.frombuffer(marks, dtype=EDGE)
    return frozenset(entries["post"][(entries["stamp"] & _CODE_BITS) == relation].tolist())
