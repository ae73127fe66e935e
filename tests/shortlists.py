"""Small worlds for look-ups: posts as the store packs them, ties, a board, and the feed by brute force."""

import itertools
import math
import random
import struct
from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, cast

import hiredis
import numpy as np

from scoring.affinity import BLOCK, FOLLOW, NONE, Circle
from scoring.gathering import Bounds, Gathering, Reader
from scoring.noise import multipliers
from scoring.ranking import Ranking
from scoring.sums import DecayedSum
from scoring.topk import tie_key
from service.feed.board import BoardReader, CrowdBound
from service.feed.cache import WorkerCache
from service.feed.deadline import Deadline
from service.feed.reads import Reads
from service.feed.shortlist import Shortlister
from service.store import keys
from service.store.connection import Connection
from service.store.drive import AUDIENCES
from tests.rankings import (
    DAY_MS,
    HORIZON_MS,
    KINDS,
    NOW_MS,
    WEIGHTS,
    PlainEdge,
    followed,
    hashes,
    left_of,
    random_edges,
)

READER, BLOCKED = 2**64 - 1, 77
AUTHOR = 5
HIDDEN = [(BLOCKED, "everyone", 2), (READER, "everyone", 2), (AUTHOR, "nobody", 2), (AUTHOR, "everyone", 3)]
HIDDEN += [(AUTHOR, "friends", 2), (AUTHOR, "followers", 2), (AUTHOR, "everyone", 0)]
"""Author, audience and flags of posts hidden from the reader: of one blocked, one's own, withdrawn, not come yet."""


@dataclass
class PlainPost:
    """A post with all its edges: those of the circle, by place in it, and the crowd's."""

    number: int
    name: str
    posted_ms: int
    author: int = AUTHOR
    audience: str = "everyone"
    flags: int = 2
    tied: list[tuple[int, PlainEdge]] = field(default_factory=list)
    crowd: list[PlainEdge] = field(default_factory=list)
    folded: int = 0
    factor: float = 1.0
    noise: float = 1.0

    @property
    def edges(self) -> list[PlainEdge]:
        """Every edge, oldest first."""
        return sorted([edge for _, edge in self.tied] + self.crowd, key=lambda edge: edge.at_ms)

    @property
    def seen_by_reader(self) -> bool:
        """Whether the reader may see it."""
        return self.flags == 2 and self.author == AUTHOR and self.audience == "everyone"

    def packed(self, half_lives_ms: Sequence[float]) -> bytes:
        """Pack the post as `scripts/lib/post.lua` documents it, the oldest `folded` edges in running sums."""
        kinds: defaultdict[int, list[DecayedSum]] = defaultdict(lambda: [DecayedSum(one) for one in half_lives_ms])
        edges, name = self.edges, self.name.encode()
        for edge in edges[: self.folded]:
            for total in kinds[edge.code]:
                total.update(edge.at_ms, 1.0)
        raw = b"".join(edge.packed()[8:] for edge in edges[self.folded :])
        lengths = (len(edges) - self.folded, len(kinds), len(name), 3, 1, 0, 1, 0)
        head = struct.pack("<BBBB", 1, self.flags, AUDIENCES.index(self.audience), 4)
        head += struct.pack("<8H2dQ", *lengths, self.posted_ms, self.posted_ms, self.author)
        sums = b"".join(
            struct.pack(f"<HHid{len(totals)}d", code, 0, 1, totals[0].as_of_ms, *(total.value for total in totals))
            for code, totals in kinds.items()
        )
        return head + name + b"adanotee" + struct.pack("<d", self.posted_ms) + raw + sums


@dataclass
class World:
    """Posts, the affinity of each of the reader's ties, and the policy they are ranked with.

    A post whose factor is not 1 was seen, and has the factor of all that were; `seed` and `temperature` make the noise.
    """

    posts: list[PlainPost]
    affinity: list[float]
    ranking: Ranking
    seen_factor: float = 0.5
    seed: int = 0
    temperature: float = 0.0

    def make_noise(self, seed: int, temperature: float) -> None:
        """Draw each post's noise."""
        self.seed, self.temperature = seed, temperature
        drawn = multipliers(seed, hashes([post.number for post in self.posts]), temperature).tolist()
        for post, noise in zip(self.posts, drawn, strict=True):
            post.noise = noise

    def gathering(self, bound: CrowdBound | None) -> Gathering:
        """Gather the circle's edges with the code under test, bounded; None takes them by their newest edges."""
        gathering = Gathering(self.ranking, NOW_MS)
        people = len(self.affinity)
        relation = np.full(people, FOLLOW, dtype=np.uint8)
        rows: list[list[PlainEdge]] = [[] for _ in range(people)]
        for post in self.posts:
            for place, edge in post.tied:
                rows[place].append(edge)
        packed = [b"".join(edge.packed() for edge in row) for row in rows]
        gathering.add(packed, np.array(self.affinity), relation)
        if bound is None:
            gathering.by_newest()
        else:
            seen = [post.number for post in self.posts if post.factor != 1.0]
            later = np.full(len(seen), float(NOW_MS + DAY_MS))
            crowd = (bound.others, bound.post, bound.bound)
            gathering.bound(Bounds(*crowd, hashes(seen), later, self.seen_factor, self.seed, self.temperature))
        return gathering

    def crowd(self, post: PlainPost) -> float:
        """Sum every edge of a post by loops."""
        return math.fsum(WEIGHTS[KINDS[one.code]] * followed(self.ranking, NOW_MS - one.at_ms) for one in post.edges)

    def score(self, post: PlainPost) -> float:
        """Apply the contract's formula edge by edge."""
        curve, stranger = self.ranking.policy.curve, self.ranking.policy.affinity.crowd
        tied = math.fsum(
            self.affinity[place] * WEIGHTS[KINDS[edge.code]] * left_of(curve, NOW_MS - edge.at_ms)
            for place, edge in post.tied
        )
        crowd = math.fsum(
            WEIGHTS[KINDS[edge.code]] * followed(self.ranking, NOW_MS - edge.at_ms) for edge in post.crowd
        )
        return (tied + stranger * max(crowd, 0.0)) * post.factor

    def feed(self) -> list[tuple[str, float]]:
        """Rank all posts that the reader may see: names and scores."""
        shown = [(post, self.score(post)) for post in self.posts if post.seen_by_reader and post.tied]
        shown.sort(key=lambda one: (-tie_key(one[1] * one[0].noise), -one[0].posted_ms, one[0].name.encode()))
        return [(post.name, score) for post, score in shown]

    def board(self, listed: int, unmarked: Sequence[int] = ()) -> tuple[BoardReader, list[Any]]:
        """Make a board: the answers of the store, `unmarked` posts missing there, only `listed` left after a trim."""
        reader = _board_reader(self.ranking)
        half_life = self.ranking.bank.half_lives_ms[reader.slot]
        marks = [
            (mark_of(post, half_life), post.number) for post in self.posts if post.edges and post.number not in unmarked
        ]
        marks.sort(reverse=True)
        floor = repr(marks[listed][0]).encode() if listed < len(marks) else None
        pairs = [(number.to_bytes(8, "little"), repr(mark).encode()) for mark, number in marks[:listed]]
        return reader, [list(itertools.chain.from_iterable(pairs)), floor]

    def bound(self, *, listed: int = 10**6, changed: Sequence[int] = ()) -> CrowdBound:
        """Turn the board into bounds, `changed` posts having been written since it was read."""
        reader, answers = self.board(listed, unmarked=changed)
        since = {number.to_bytes(8, "little") for number in changed}
        return reader.bound(reader.read(answers), since, NOW_MS)


_READERS: dict[int, tuple[Ranking, BoardReader]] = {}


def _board_reader(ranking: Ranking) -> BoardReader:
    """Make the reader of a compiled policy's board once: its ceilings take some 20 ms."""
    if id(ranking) not in _READERS:
        slots = tuple(range(len(ranking.bank.half_lives_ms)))
        _READERS[id(ranking)] = ranking, BoardReader(ranking, slots, 13 * HORIZON_MS)
    return _READERS[id(ranking)][1]


def mark_of(post: PlainPost, half_life_ms: float) -> float:
    """Compute log2 of the decayed count plus now over the half-life, as `scripts/lib/sums.lua` does."""
    total = sum(2.0 ** ((edge.at_ms - NOW_MS) / half_life_ms) for edge in post.edges)
    return math.log(total) / math.log(2.0) + NOW_MS / half_life_ms if total > 0.0 else -math.inf


class FakeConnection:
    """An in-memory MGET that keeps which posts were asked for."""

    def __init__(self, values: Mapping[bytes, bytes]) -> None:
        self.values = values
        self.asked: list[bytes] = []

    async def read_packed(self, packed: bytes, count: int) -> list[list[bytes | None]]:
        """Answer one MGET as the store does, None where there is nothing."""
        parser = hiredis.Reader()
        parser.feed(packed)
        name, *wanted = parser.gets()
        assert (name, count) == (b"MGET", 1)
        self.asked += wanted
        return [[self.values.get(key) for key in wanted]]


class Patience(Deadline):
    """A deadline that passes after some looks at it, not after some time."""

    looks: float = math.inf

    @classmethod
    def of(cls, looks: float) -> "Patience":
        """Let a deadline be looked at so many times."""
        patience = cls(0.0, 0.0)
        patience.looks = looks
        return patience

    def passed(self, share: float = 1.0) -> bool:  # noqa: ARG002  patience has no shares
        """Say whether it has been looked at too often."""
        self.looks -= 1
        return self.looks < 0


def reader() -> Reader:
    """Let a reader see what everyone may, but nothing by the author blocked."""
    person, relation = hashes([AUTHOR, BLOCKED]), np.array([NONE, BLOCK], dtype=np.uint8)
    return Reader(READER, Circle(person, relation, np.zeros(2)), b"")


def shortlister(
    world: World, bound: CrowdBound | None, *, looks: float = math.inf
) -> tuple[Shortlister, FakeConnection]:
    """Make a shortlister over a world's posts, and give what it asks the store for."""
    half_lives_ms = world.ranking.bank.half_lives_ms
    values = {
        keys.keys("post", [post.number.to_bytes(8, "little")])[0]: post.packed(half_lives_ms)
        for post in world.posts
        if post.flags
    }
    connection = FakeConnection(values)
    reads = Reads(cast("Connection", connection), WorkerCache(0, 1 << 20))
    return Shortlister(reads, reader(), world.gathering(bound), Patience.of(looks)), connection


def random_world(rng: random.Random, ranking: Ranking, count: int) -> World:
    """Draw a world: few ties, many equal scores, crowds of any size, posts that may not be seen."""
    people = rng.randrange(1, 5)
    affinity = [rng.choice([0.02, 1.0, 1.0, 2.0, 10.0]) for _ in range(people)]
    world = World([], affinity, ranking, seen_factor=rng.choice([0.5, 0.0]))
    numbers = [rng.getrandbits(64) for _ in range(count)]
    popular = rng.choice([0.0, 0.1, 0.6])
    for place, number in enumerate(numbers):
        post = PlainPost(number, f"p{place}", NOW_MS - rng.choice([0, 1, 5_000, 10**9]))
        tied = random_edges(rng, rng.choice([1, 1, 1, 2, 4]), [number])
        post.tied = [(rng.randrange(people), edge) for edge in tied]
        if rng.random() < popular:
            post.crowd = random_edges(rng, rng.choice([1, 5, 40]), [number])
        post.folded = rng.randrange(sum(edge.at_ms <= NOW_MS for edge in post.edges) + 1)
        if rng.random() < 0.1:
            post.author, post.audience, post.flags = rng.choice(HIDDEN)
        post.factor = rng.choice([1.0, 1.0, 1.0, world.seen_factor])
        world.posts.append(post)
    return world
