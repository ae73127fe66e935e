"""Interactions as columns, and how they are grouped: by people and by posts, bucket by bucket."""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from service.store.bulk_calls import PeopleRuns, PostRuns
from service.store.pieces import INTERACTION

RAW_EDGES = 16
"""How many of a post's newest edges are kept as they are (`scripts/lib/post.lua`)."""

Hashes = NDArray[np.uint64]
Times = NDArray[np.int64]

_U64 = np.dtype("<u8")
_EDGE = np.dtype([("post", "<u8"), ("stamp", "<u8")])
_PIECE = np.dtype([("type", "S1"), ("bytes", "<u4"), ("id", "<u8"), ("person", "<u8"), ("stamp", "<u8")])
_BUCKET_BITS = 7


@dataclass(frozen=True, slots=True)
class Edges:
    """Interactions, a column a field, none twice; hashes are read as little-endian integers.

    Args:
        ids: hashes of the events' ids.
        people: hashes of the actors.
        posts: hashes of the posts.
        at_ms: times, Unix milliseconds.
        codes: of the kinds.
        person_ids: the id of each person's hash.
        post_ids: the id of each post's hash.

    """

    ids: Hashes
    people: Hashes
    posts: Hashes
    at_ms: Times
    codes: NDArray[np.uint64]
    person_ids: dict[int, str]
    post_ids: dict[int, str]

    def __len__(self) -> int:
        """Count them."""
        return len(self.ids)

    def rows(self, rows: NDArray[np.intp]) -> "Edges":
        """Choose some of them."""
        return Edges(
            self.ids[rows],
            self.people[rows],
            self.posts[rows],
            self.at_ms[rows],
            self.codes[rows],
            self.person_ids,
            self.post_ids,
        )

    @property
    def stamps(self) -> Hashes:
        """Give times and codes as the store packs them."""
        return self.at_ms.astype(np.uint64) << np.uint64(16) | self.codes


def by_bucket(hashes: Hashes) -> Hashes:
    """Turn hashes into numbers that sort by bucket, then by the rest of the hash.

    >>> [int(n) >> 57 for n in by_bucket(np.array([0x0102, 0x0180, 0x01FF], np.uint64))]
    [2, 0, 127]

    """
    return hashes << np.uint64(64 - _BUCKET_BITS) | hashes >> np.uint64(_BUCKET_BITS)


@dataclass(frozen=True, slots=True)
class Groups:
    """Which stretches of sorted rows belong together.

    Args:
        order: the rows in order.
        first: where in `order` each group begins, and where the last ends.
        keys: the hash of each group.
        buckets: for each bucket that occurs its number, its first group and the one after its last.

    """

    order: NDArray[np.intp]
    first: NDArray[np.intp]
    keys: Hashes
    buckets: list[tuple[int, int, int]]

    @property
    def counts(self) -> NDArray[np.intp]:
        """Count the rows of each group."""
        return np.diff(self.first)


def grouped(hashes: Hashes, at_ms: Times | None = None) -> Groups:
    """Group rows by hash; within a group they stay in order, or come in order of time.

    Args:
        hashes: of each row.
        at_ms: times, where rows are to come in order of time.

    """
    turned = by_bucket(hashes)
    order = np.argsort(turned, kind="stable") if at_ms is None else np.lexsort((at_ms, turned))
    ordered = turned[order]
    first = np.flatnonzero(np.r_[True, ordered[1:] != ordered[:-1], True]) if len(order) else np.zeros(1, np.intp)
    numbers = (ordered[first[:-1]] >> np.uint64(64 - _BUCKET_BITS)).astype(np.intp)
    edges = np.flatnonzero(np.r_[True, numbers[1:] != numbers[:-1], True]).tolist() if len(order) else [0]
    buckets = [(int(numbers[a]), a, b) for a, b in pairwise(edges)]
    return Groups(order, first, hashes[order[first[:-1]]], buckets)


def hash_list(hashes: Hashes) -> list[bytes]:
    """Give hashes as the bytes they are."""
    packed = hashes.astype(_U64).tobytes()
    return [packed[at : at + 8] for at in range(0, len(packed), 8)]


class PeopleSide:
    """Interactions grouped by who made them.

    Args:
        edges: the interactions.

    """

    def __init__(self, edges: Edges) -> None:
        self.groups = grouped(edges.people)
        order, stamps = self.groups.order, edges.stamps
        names = [edges.post_ids[post].encode() for post in edges.posts[order].tolist()]
        heads = np.zeros(len(order), _PIECE)
        heads["type"], heads["id"], heads["person"] = INTERACTION, edges.ids[order], edges.people[order]
        heads["stamp"], heads["bytes"] = stamps[order], np.fromiter(map(len, names), np.uint32, len(names)) + 24
        packed = np.zeros(len(order), _EDGE)
        packed["post"], packed["stamp"] = edges.posts[order], stamps[order]
        self._person_ids = [edges.person_ids[person] for person in self.groups.keys.tolist()]
        self._people = hash_list(self.groups.keys)
        self._ids, self._edges = edges.ids[order].tobytes(), packed.tobytes()
        self._heads, self._names = heads.tobytes(), names
        sizes = heads["bytes"].astype(np.int64) + 5
        self._sizes = np.add.reduceat(sizes, self.groups.first[:-1]) if len(order) else sizes

    def runs(self, authors: bytes, first: int, end: int) -> PeopleRuns:
        """Pack the groups of one bucket; `authors` are those of the posts, packed and in order."""
        a, b = int(self.groups.first[first]), int(self.groups.first[end])
        width, heads = _PIECE.itemsize, self._heads
        pieces = [heads[width * i : width * i + width] + self._names[i] for i in range(a, b)]
        sizes = np.column_stack([self.groups.counts[first:end], self._sizes[first:end]]).astype("<u4").tobytes()
        ids_run, edges_run = self._ids[8 * a : 8 * b], self._edges[16 * a : 16 * b]
        authors_run = authors[8 * a : 8 * b]
        names = self._person_ids[first:end]
        return PeopleRuns(self._people[first:end], ids_run, edges_run, authors_run, b"".join(pieces), sizes, names)


class PostsSide:
    """Interactions grouped by their posts, with those that are certainly to be folded folded already.

    Of a post's new edges, the newest 16 and those ahead of the clock may stay as they are, by what is there already;
    all others are older than 16 edges of the post.

    Args:
        edges: the interactions.
        groups: they by their posts, in order of time.
        now_ms: now, Unix milliseconds.
        half_lives_ms: the bank.

    """

    def __init__(self, edges: Edges, groups: Groups, now_ms: int, half_lives_ms: Sequence[float]) -> None:
        self.groups = groups
        order, counts = self.groups.order, self.groups.counts
        at_ms, stamps = edges.at_ms[order], edges.stamps[order]
        self._post_ids = [edges.post_ids[post] for post in self.groups.keys.tolist()]
        self._posts = hash_list(self.groups.keys)
        self._actors = edges.people[order].tobytes()
        group = np.repeat(np.arange(len(counts)), counts)
        newer = self.groups.first[1:][group] - 1 - np.arange(len(order))
        raw = (newer < RAW_EDGES) | (at_ms > now_ms)
        self._stamps = stamps[raw].tobytes()
        self._raw_first = _starts(group[raw], len(counts))
        old = np.flatnonzero(~raw)
        sums, of_group = folded(group[old], edges.codes[order][old], at_ms[old], half_lives_ms)
        self._sums, self._sum_bytes = sums.tobytes(), sums.dtype.itemsize
        self._sums_first = _starts(of_group, len(counts))

    def runs(self, first: int, end: int) -> PostRuns:
        """Pack the groups of one bucket."""
        a, b = int(self.groups.first[first]), int(self.groups.first[end])
        stamps = self._stamps[8 * int(self._raw_first[first]) : 8 * int(self._raw_first[end])]
        width = self._sum_bytes
        sums = self._sums[width * int(self._sums_first[first]) : width * int(self._sums_first[end])]
        counts = (self._raw_first, self._sums_first, self.groups.first)
        sizes = np.column_stack([np.diff(starts[first : end + 1]) for starts in counts]).astype("<u4").tobytes()
        actors, names = self._actors[8 * a : 8 * b], self._post_ids[first:end]
        return PostRuns(self._posts[first:end], stamps, sums, actors, sizes, names)


def folded(
    group: NDArray[np.intp], codes: NDArray[np.uint64], at_ms: Times, half_lives_ms: Sequence[float]
) -> tuple[NDArray[Any], NDArray[np.intp]]:
    """Fold edges into running sums, by group and kind.

    Args:
        group: number of each edge's group.
        codes: of their kinds.
        at_ms: their times, Unix milliseconds.
        half_lives_ms: the bank.

    Returns:
        The sums as a post's value has them, by group and code, and the group of each. Each is as of its newest
        edge's time T: for each half-life h the sum of 2^(-(T - t) / h) over its edges' times t.

    """
    bank = len(half_lives_ms)
    kind = _kind(bank)
    order = np.lexsort((at_ms, codes, group))
    if not len(order):
        return np.zeros(0, kind), np.zeros(0, np.intp)
    group, codes, times = group[order], codes[order], at_ms[order].astype(np.float64)
    new = np.r_[True, (group[1:] != group[:-1]) | (codes[1:] != codes[:-1])]
    starts = np.flatnonzero(new)
    counts = np.diff(np.r_[starts, len(order)])
    result = np.zeros(len(starts), kind)
    result["code"], result["count"] = codes[starts], counts
    result["as_of"] = times[starts + counts - 1]
    lags = np.repeat(result["as_of"], counts) - times
    for slot, half_life in enumerate(half_lives_ms):
        result["sums"][:, slot] = np.add.reduceat(np.exp2(-lags / half_life), starts)
    return result, group[starts]


def _starts(group: NDArray[np.intp], groups: int) -> NDArray[np.intp]:
    """Say where each group begins among rows that are in order of group, and where the last one ends."""
    return np.searchsorted(group, np.arange(groups + 1))


def per_row(groups: Groups, values: NDArray[Any]) -> NDArray[Any]:
    """Spread a value of each group over its rows, in the rows' own order."""
    spread = np.empty(len(groups.order), values.dtype)
    spread[groups.order] = np.repeat(values, groups.counts)
    return spread


@dataclass(frozen=True, slots=True)
class PostValues:
    """The newest edges and the sums of posts as they are after a run.

    Args:
        at_ms: times of the edges, Unix milliseconds.
        edge_first: where the edges of each post begin, and where the last ones end.
        kinds: the sums, as a post's value has them.
        kind_first: where the sums of each post begin, and where the last ones end.

    """

    at_ms: Times
    edge_first: NDArray[np.intp]
    kinds: NDArray[Any]
    kind_first: NDArray[np.intp]

    @classmethod
    def read(cls, answers: Sequence[Any], bank: int) -> "PostValues":
        """Read what bulk_add_edges.lua answered in each bucket, for a bank of so many half-lives."""
        counts = np.frombuffer(b"".join(answer[1] for answer in answers), "<u2").reshape(-1, 2)
        firsts = np.vstack([np.zeros((1, 2), np.intp), np.cumsum(counts, axis=0, dtype=np.intp)])
        stamps = np.frombuffer(b"".join(answer[2] for answer in answers), "<u8")
        kinds = np.frombuffer(b"".join(answer[3] for answer in answers), _kind(bank))
        return cls((stamps >> np.uint64(16)).astype(np.int64), firsts[:, 0], kinds, firsts[:, 1])

    def marks(self, now_ms: int, boards: Sequence[tuple[int, float]]) -> NDArray[np.float64]:
        """Give each post's mark on each board, NaN where it has no edge; as `board_marks` in lib/sums.lua.

        Args:
            now_ms: now, Unix milliseconds.
            boards: the slot of the bank and its half-life in milliseconds, of each board.

        """
        marks = np.empty((len(self.edge_first) - 1, len(boards)))
        for column, (slot, half_life) in enumerate(boards):
            fresh = np.exp2((self.at_ms - now_ms) / half_life)
            old = self.kinds["sums"][:, slot] * np.exp2((self.kinds["as_of"] - now_ms) / half_life)
            totals = _sums(fresh, self.edge_first) + _sums(old, self.kind_first)
            found = totals > 0
            marks[:, column] = np.log2(totals, where=found, out=np.full(len(totals), np.nan)) + now_ms / half_life
        return marks


def _sums(values: NDArray[np.float64], first: NDArray[np.intp]) -> NDArray[np.float64]:
    """Add up stretches that lie one after the other, some of them empty."""
    group = np.repeat(np.arange(len(first) - 1), np.diff(first))
    return np.bincount(group, values, len(first) - 1).astype(np.float64, copy=False)


def _kind(bank: int) -> np.dtype[Any]:
    """Describe a kind of a post's value (`scripts/lib/post.lua`)."""
    return np.dtype([("code", "<u2"), ("pad", "<u2"), ("count", "<i4"), ("as_of", "<f8"), ("sums", "<f8", (bank,))])
