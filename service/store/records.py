"""A post's value, read; `scripts/lib/post.lua` writes it."""

import struct
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from service.store.drive import AUDIENCES

_HEADER = struct.Struct("<BBBBHHHHHHHHdd8s")
_ITEM = struct.Struct("<3xB4xHH8xd")
_WITHDRAWN, _RECORDED = 1, 2
_KIND_HEAD = 16


@dataclass(frozen=True, slots=True)
class PostRecord:
    """What is known of a post.

    `recorded` is False where interactions or a withdrawal came before the post itself.
    `edges` holds the stamps of the newest edges; `sums` the packed running sums of the older ones, by kind.
    """

    id: str
    recorded: bool
    withdrawn: bool
    author: str
    author_hash: bytes
    form: str
    audience: str
    topics: tuple[str, ...]
    posted_ms: int
    latest_ms: int
    event: str
    post_events_ms: tuple[int, ...]
    edges: bytes
    sums: bytes
    kinds: int


def read_record(value: bytes) -> PostRecord:
    """Read a post's value.

    Args:
        value: as stored.

    """
    (
        _,
        flags,
        audience,
        form_n,
        edge_n,
        kind_n,
        id_n,
        author_n,
        event_n,
        topic_n,
        edit_n,
        _,
        created,
        latest,
        author,
    ) = _HEADER.unpack_from(value)
    at = _HEADER.size
    texts = []
    for length in (id_n, author_n, form_n, event_n, topic_n):
        texts.append(value[at : at + length].decode())
        at += length
    edits = tuple(int(edit) for edit in struct.unpack_from(f"<{edit_n}d", value, at))
    at += 8 * edit_n
    sums_at = at + 8 * edge_n
    return PostRecord(
        id=texts[0],
        recorded=bool(flags & _RECORDED),
        withdrawn=bool(flags & _WITHDRAWN),
        author=texts[1],
        author_hash=author,
        form=texts[2],
        audience=AUDIENCES[audience],
        topics=tuple(texts[4].split("\n")) if texts[4] else (),
        posted_ms=int(created),
        latest_ms=int(latest),
        event=texts[3],
        post_events_ms=edits,
        edges=value[at:sums_at],
        sums=value[sums_at:],
        kinds=kind_n,
    )


def author_of(value: bytes) -> bytes:
    """Read the hash of a post's author from its value."""
    return value[_HEADER.size - 8 : _HEADER.size]


def read_item(value: bytes) -> tuple[str, str, str, int]:
    """Read what a feed shows of a post from its value: id, author, form, and the time of posting, Unix milliseconds."""
    form_n, id_n, author_n, created = _ITEM.unpack_from(value)
    post_end = _HEADER.size + id_n
    author_end = post_end + author_n
    form_end = author_end + form_n
    return (
        value[_HEADER.size : post_end].decode(),
        value[post_end:author_end].decode(),
        value[author_end:form_end].decode(),
        int(created),
    )


@dataclass(frozen=True, slots=True)
class CrowdState:
    """The sums of several posts, as arrays.

    Attributes:
        edge_post: which post each raw edge is of, shape (e,).
        edge_stamp: time and code of each raw edge, shape (e,), uint64.
        kind_post: which post each running sum is of, shape (s,).
        kind_code: its kind, shape (s,).
        kind_count: how many edges are in it, shape (s,).
        kind_as_of_ms: its as-of time, shape (s,).
        kind_sums: one sum for each half-life of the bank, shape (s, m).

    """

    edge_post: NDArray[np.intp]
    edge_stamp: NDArray[np.uint64]
    kind_post: NDArray[np.intp]
    kind_code: NDArray[np.uint16]
    kind_count: NDArray[np.int32]
    kind_as_of_ms: NDArray[np.float64]
    kind_sums: NDArray[np.float64]


def crowd_state(records: list[PostRecord], bank_size: int) -> CrowdState:
    """Gather the sums of posts.

    Args:
        records: n posts.
        bank_size: number of half-lives, m.

    """
    layout = np.dtype(
        [("code", "<u2"), ("pad", "<u2"), ("count", "<i4"), ("as_of", "<f8"), ("sums", "<f8", (bank_size,))]
    )
    places = np.arange(len(records))
    edges = np.frombuffer(b"".join(record.edges for record in records), dtype="<u8")
    sums = np.frombuffer(b"".join(record.sums for record in records), dtype=layout)
    return CrowdState(
        edge_post=np.repeat(places, [len(record.edges) // 8 for record in records]),
        edge_stamp=edges,
        kind_post=np.repeat(places, [record.kinds for record in records]),
        kind_code=sums["code"],
        kind_count=sums["count"],
        kind_as_of_ms=sums["as_of"],
        kind_sums=sums["sums"],
    )
