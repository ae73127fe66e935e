"""Write a reader's world straight into a store, as the scripts would have left it: for worlds too large to load."""

import struct
import time

import numpy as np
import redis

from loadtests.reference import HOUR_MS, READER
from service.engine import Engine
from service.store import keys
from service.store.drive import AUDIENCES

KINDS = ("like", "comment", "share", "post.note")
_HEAD = struct.Struct("<BBBB8H2d")
_AT_ONCE = 2_000


async def write(url: str, ties: int, edges: int, *, seed: int = 7) -> int:
    """Write a world: a reader who follows so many people, each with so many edges of the last day on posts of others.

    Returns:
        How many posts there are; nine edges in ten are the only one by a tie on their post.
    """
    from loadtests.peers.world import started  # noqa: PLC0415  that module needs this one's neighbours

    engine = await started(url)
    await engine.store.kinds.register(KINDS)
    posts = _write_rows(engine, url, ties, edges, np.random.default_rng(seed))
    await engine.close()
    return posts


def _write_rows(engine: Engine, url: str, ties: int, edges: int, rng: np.random.Generator) -> int:
    hash_of, now_ms = engine.store.hasher.hash, time.time_ns() // 1_000_000
    codes = np.array([engine.store.kinds.code(kind) or 0 for kind in KINDS], dtype=np.uint64)
    total = ties * edges
    at_ms = (now_ms - 1 - rng.integers(0, 24 * HOUR_MS, total)).astype(np.uint64)
    stamps = (at_ms << np.uint64(16)) | codes[rng.integers(0, 3, total)]
    places = np.arange(total)
    doubled = rng.random(total) < 0.1
    places[doubled] = rng.integers(0, total, int(doubled.sum()))
    used = np.unique(places)
    names = [f"post-{place}" for place in used.tolist()]
    hashes = np.zeros(total, dtype="<u8")
    hashes[used] = np.frombuffer(b"".join(hash_of(name) for name in names), dtype="<u8")
    packed = np.column_stack((hashes[places], stamps)).astype("<u8").tobytes()
    with redis.Redis.from_url(url) as client:
        pipe = client.pipeline(transaction=False)
        people = [hash_of(f"tie{tie}") for tie in range(ties)]
        for tie, person in enumerate(people):
            pipe.set(keys.key("row", person), packed[16 * edges * tie : 16 * edges * (tie + 1)])
        follow = struct.pack("<Q", now_ms << 16 | 1)
        pipe.set(keys.key("out", hash_of(READER)), b"".join(person + follow for person in people))
        pipe.set(keys.key("name", hash_of(READER)), READER)
        pipe.execute()
        _write_posts(client, hash_of("somebody"), names, hashes[used].tobytes(), _stamps_of(places, stamps), now_ms)
    return len(used)


def _stamps_of(places: np.ndarray, stamps: np.ndarray) -> list[bytes]:  # type: ignore[type-arg]
    """Gather each post's stamps in order of time."""
    order = np.lexsort((stamps, places))
    ordered, starts = stamps[order].astype("<u8"), np.flatnonzero(np.diff(places[order], prepend=-1))
    ends = [*starts[1:].tolist(), len(ordered)]
    return [ordered[start:end].tobytes() for start, end in zip(starts.tolist(), ends, strict=True)]


def _write_posts(
    client: redis.Redis, author: bytes, names: list[str], hashes: bytes, stamps: list[bytes], now_ms: int
) -> None:
    posted = float(now_ms - 25 * HOUR_MS)
    audience = AUDIENCES.index("everyone")
    for at in range(0, len(names), _AT_ONCE):
        pipe = client.pipeline(transaction=False)
        for place in range(at, min(at + _AT_ONCE, len(names))):
            name, edges = names[place].encode(), stamps[place][-8 * 16 :]
            head = _HEAD.pack(1, 2, audience, 4, len(edges) // 8, 0, len(name), 8, 1, 0, 1, 0, posted, posted)
            texts = name + b"somebody" + b"note" + b"e"
            value = head + author + texts + struct.pack("<d", posted) + edges
            pipe.set(keys.key("post", hashes[8 * place : 8 * place + 8]), value)
        pipe.execute()
