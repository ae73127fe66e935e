"""Typed stubs for the scripts that take whole runs of interactions, as `calls.py` has them for the others."""

from collections.abc import Sequence
from dataclasses import dataclass

from service.store import keys
from service.store.calls import Argument, Call, StoreLimits
from service.store.scripts import load

_PERSON_KEYS = ("row", "ids", "who", "name", "erased", "undo", "heard")

AUTHOR_PLACE = 36
"""Where a post's value holds its author's hash, bytes from its beginning (`scripts/lib/post.lua`)."""


@dataclass(frozen=True, slots=True)
class PeopleRuns:
    """Interactions of the people of one bucket, person by person; everything packed lies in the same order.

    Args:
        people: hashes, 8 bytes each.
        ids: hashes of the events' ids, 8 bytes each.
        edges: packed edges, 16 bytes each.
        authors: hashes of the posts' authors, 8 bytes each, zeros where unknown.
        pieces: outbox pieces.
        sizes: for each person how many events, and how many bytes of pieces, 4 bytes each.
        names: for each person the id.

    """

    people: list[bytes]
    ids: bytes
    edges: bytes
    authors: bytes
    pieces: bytes
    sizes: bytes
    names: list[str]


@dataclass(frozen=True, slots=True)
class PostRuns:
    """Edges of the posts of one bucket, post by post.

    Args:
        posts: hashes, 8 bytes each.
        stamps: of the edges that may stay as they are, in order of time, 8 bytes each.
        sums: running sums of the older ones, as a post's value has them.
        actors: hashes of who made the edges, 8 bytes each.
        sizes: for each post how many stamps, how many kinds in `sums`, and how many edges, 4 bytes each.
        names: for each post the id.

    """

    posts: list[bytes]
    stamps: bytes
    sums: bytes
    actors: bytes
    sizes: bytes
    names: list[str]


def bulk_take_interactions(number: int, now_ms: int, limits: StoreLimits, runs: PeopleRuns) -> Call:
    """Append the runs of one bucket's people."""
    columns = [keys.keys(name, runs.people) for name in _PERSON_KEYS]
    script_keys = [keys.seq(number), keys.outbox(number)]
    script_keys += [one for person in zip(*columns, strict=True) for one in person]
    args: list[Argument] = [now_ms * 1000, limits.oldest_ms(now_ms), limits.ttl_ms, limits.row_edges]
    args += [runs.ids, runs.edges, runs.authors, runs.pieces, runs.sizes]
    return Call(load("bulk_take_interactions"), script_keys, [*args, *runs.names])


def bulk_add_edges(number: int, sources: str, now_ms: int, limits: StoreLimits, runs: PostRuns) -> Call:
    """Add the runs of one bucket's posts; `sources` names the outbox entries they come from."""
    columns = [keys.keys(name, runs.posts) for name in ("post", "wait")]
    script_keys = [keys.applied(number), *(one for post in zip(*columns, strict=True) for one in post)]
    args: list[Argument] = [sources, now_ms, limits.ttl_ms, limits.half_lives]
    args += [runs.stamps, runs.sums, runs.actors, runs.sizes]
    return Call(load("bulk_add_edges"), script_keys, [*args, *runs.names])


def bulk_read_authors(posts: list[bytes]) -> Call:
    """Read the authors of one bucket's posts."""
    return Call(load("bulk_read_authors"), keys.keys("post", posts), [AUTHOR_PLACE])


def bulk_raise_board(slot: int, posts: int, left_out: float | None, pairs: Sequence[Argument]) -> Call:
    """Raise posts on a board that keeps so many; `pairs` are mark and hash by turns."""
    args: list[Argument] = [posts, "" if left_out is None else repr(left_out), *pairs]
    return Call(load("bulk_raise_board"), [keys.board(slot), keys.floor(slot)], args)


def close_entry(number: int, seq: int) -> Call:
    """Close an outbox entry that leaves nothing to be written down."""
    return Call(None, [], [b"ZREMRANGEBYSCORE", keys.outbox(number), seq, seq])


def open_entry(number: int, seq: int) -> Call:
    """Read an outbox entry."""
    return Call(None, [], [b"ZRANGEBYSCORE", keys.outbox(number), seq, seq])


def leave_gap() -> Call:
    """Let every worker forget all it remembers: a number without an entry in the change log."""
    return Call(None, [], [b"INCR", keys.CHANGED])
